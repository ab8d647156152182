"""Forces averaged over a phase in files of their own: the library's numbers, from NumPy alone."""

from __future__ import annotations

import subprocess
import sys

import numpy as np
import pytest
import sympy as sp

import multiscale as ms
from multiscale.codegen.module import module_source
from multiscale.codegen.runtime import RUNTIME
from multiscale.codegen.travelling import NUMPY, travelling

t = sp.Symbol("t", real=True)
eps, w, w1, w2, k, p, g, f = sp.symbols("epsilon omega omega_1 omega_2 k p_ g f", positive=True)
sigma, c = sp.symbols("sigma c", real=True)
Omega = sp.Symbol("Omega", positive=True)
u, u1, u2 = (sp.Function(name)(t) for name in ("u", "u1", "u2"))
v, v1, v2 = u.diff(t), u1.diff(t), u2.diff(t)
F = sp.Function("F")


def one(force, **options):
    return ms.Problem(u.diff(t, 2) + w**2 * u + eps * force, u, small=eps, **options)


def two(force, **options):
    return ms.Problem(
        [u1.diff(t, 2) + w1**2 * u1 + eps * force, u2.diff(t, 2) + w2**2 * u2 - eps * force],
        [u1, u2],
        small=eps,
        **options,
    )


PROBLEMS = {
    "drag": one(k * sp.Abs(v) * v),
    "power 3/2": one(k * sp.sqrt(sp.Abs(v)) * v),
    "any power": one(k * sp.Abs(v) ** p * sp.sign(v)),
    "Coulomb and viscous": one(k * sp.sign(v) + g * v),
    "Stribeck": one(sp.sign(v) * (1 + k * sp.exp(-sp.Abs(v)))),
    "smooth friction": one(sp.tanh(v / g) * k),
    "clearance": one(k * (sp.Max(u - g, 0) - sp.Max(-u - g, 0))),
    "one-sided": one(k * sp.Max(u - g, 0) ** 2),
    "sine": one(k * sp.sin(u)),
    "exponential": one(k * (sp.exp(u) - 1 - u)),
    "rational": one(k / (1 + u**2)),
    "mixed": one(k * sp.Abs(u) * v / (1 + g * v**2)),
    "piecewise": one(sp.Piecewise((k * u**3, u > g), (sp.atan(u), True))),
    "second order": one(k * sp.Abs(v) * v + g * u**3, harmonics=5),
    "modulus of a parameter": one(sp.Abs(c) * u**3 + g * v),
    "relative drag": two(k * sp.Abs(v1 - v2) * (v1 - v2)),
    "relative drag in resonance": two(k * sp.Abs(v1 - v2) * (v1 - v2), resonances={w2: w1 + eps * sigma}),
    "driven drag": one(
        k * sp.Abs(v) * v + g * u**3 - f * sp.cos(Omega * t), resonances={Omega: w + eps * sigma}
    ),
}  # fmt: skip
ORDERS = {"second order": 2}
VALUES = {
    "epsilon": 0.13, "omega": 1.3, "omega_1": 1.1, "omega_2": 1.7, "k": 0.8, "p_": 1.4, "g": 0.6, "f": 0.5,
    "sigma": 0.2, "c": -0.7,
}  # fmt: skip
TIMES = 0.7

ALONE = """
import sys
for name in ("sympy", "multiscale", "mpmath", "scipy", "flint", "numba", "matplotlib"):
    sys.modules[name] = None
import numpy as np
import flow
values = flow.parameters({name: x for name, x in VALUES.items() if name in flow.PARAMETERS})
found = {}
for name in ("rhs", "jacobian", "displacement", "frequency"):
    for kind, y in (("one", STATES[:, 0, 0]), ("many", STATES)):
        try:
            found[f"{name} {kind}"] = getattr(flow, name)(TIME, y, *values)
        except NotImplementedError:
            pass
rest = flow.rhs(TIME, 0 * STATES[:, 0, 0], *values)
assert np.isfinite(rest).all()
np.savez("found.npz", **found)
"""


def expanded(name):
    return ms.expand(PROBLEMS[name], ORDERS.get(name, 1))


def states(result):
    return np.random.default_rng(7).normal(size=(2 * len(result.problem.unknowns), 2, 3))


def references(result):
    functions = {
        "rhs": result.slow_flow.to_numpy(),
        "jacobian": result.slow_flow.to_numpy(wrt="state"),
        "displacement": result.to_numpy(),
    }
    if not result.slow_flow.phases and result.slow_flow.autonomous:
        functions["frequency"] = result.frequency_to_numpy()
    return functions


@pytest.mark.parametrize("name", PROBLEMS)
def test_the_numbers_of_the_library_from_numpy_alone(name, tmp_path):
    result = expanded(name)
    ms.write_module(result, tmp_path / "flow.py")
    y = states(result)
    head = f"VALUES, TIME = {VALUES!r}, {TIMES!r}\nimport numpy as np\nSTATES = np.array({y.tolist()!r})\n"
    script = f"import sys\nsys.path.insert(0, '.')\n{head}{ALONE}"
    done = subprocess.run([sys.executable, "-I", "-c", script], cwd=tmp_path, capture_output=True, text=True)
    assert done.returncode == 0, done.stderr
    found = np.load(tmp_path / "found.npz")
    expected = references(result)
    assert {key.split()[0] for key in found} == set(expected)
    for title, function in expected.items():
        values = {s: x for s, x in VALUES.items() if s in function.parameters}
        for kind, state in (("one", y[:, 0, 0]), ("many", y)):
            reference = function.bind(values)(TIMES, state)
            own = found[f"{title} {kind}"]
            own = own[0] if title == "frequency" and len(result.problem.unknowns) > 1 else own
            assert own.shape == reference.shape
            scale = np.abs(reference).max()
            assert scale > 0 or kind == "one"
            np.testing.assert_allclose(own, reference, rtol=1e-13, atol=1e-13 * scale)


@pytest.mark.parametrize("name", PROBLEMS)
def test_layout(name, tmp_path):
    path = ms.write_module(expanded(name), tmp_path / "flow.py")
    text = path.read_text()
    assert text.isascii()
    assert max(map(len, text.splitlines())) <= 88
    command = [sys.executable, "-m", "ruff"]
    done = subprocess.run(
        [*command, "format", "--isolated", "--line-length", "88", "--diff", str(path)], capture_output=True, text=True
    )
    if "No module named ruff" in done.stderr:
        pytest.skip("ruff is not installed")
    assert done.returncode == 0, done.stdout
    check = ["check", "--isolated", "--line-length", "88", "--select", "E,F,W,I,B,UP,C4,RET", "--no-cache"]
    done = subprocess.run([*command, *check, str(path)], capture_output=True, text=True)
    assert done.returncode == 0, done.stdout


def test_the_same_bytes_on_every_run(tmp_path):
    code = (
        "import sympy as sp, multiscale as ms\n"
        "t = sp.Symbol('t', real=True)\n"
        "eps, w1, w2, k = sp.symbols('epsilon omega_1 omega_2 k', positive=True)\n"
        "u1, u2 = (sp.Function(name)(t) for name in ('u1', 'u2'))\n"
        "force = k*sp.Abs(u1.diff(t) - u2.diff(t))*(u1.diff(t) - u2.diff(t))\n"
        "equations = [u1.diff(t, 2) + w1**2*u1 + eps*force, u2.diff(t, 2) + w2**2*u2 - eps*force]\n"
        "ms.write_module(ms.expand(ms.Problem(equations, [u1, u2], small=eps), 1), 'flow.py')"
    )
    expected = module_source(expanded("relative drag")).encode()
    for seed in ("1", "77"):
        environment = {"PYTHONHASHSEED": seed, "PYTHONPATH": ":".join(sys.path)}
        subprocess.run([sys.executable, "-c", code], env=environment, check=True, cwd=tmp_path)
        assert (tmp_path / "flow.py").read_bytes() == expected


def test_only_what_is_needed_travels():
    closed = module_source(expanded("drag"))
    assert "def circle(" not in closed
    assert "besselj" not in closed
    smooth = module_source(expanded("rational"))
    assert "def circle(" in smooth
    assert "def arcs(" not in smooth
    assert '"IntegralError",' in smooth
    elementary = module_source(ms.expand(one(u**3), 1))
    assert "typing" not in elementary
    assert "just-in-time compilers accept it" in " ".join(elementary.split())
    assert "just-in-time compiler does not take" in " ".join(smooth.split())


def test_every_function_of_the_runtime_can_travel():
    for name in RUNTIME.keys() - NUMPY.keys() - {"real", "imag"}:
        brought = travelling([name])
        scope: dict = {}
        exec("\n".join([*brought.imports, "import numpy as np", *brought.lines]), scope)
        assert callable(scope[name])
    assert not travelling(["sin"]).lines


def test_an_average_that_does_not_converge_raises():
    scope: dict = {}
    exec(module_source(ms.expand(one(1 / (1 - u)), 1)), scope)
    with pytest.raises(scope["IntegralError"], match=r"the average of|the force"):
        scope["rhs"](0.0, [3.0, 0.0], *scope["parameters"](epsilon=0.1, omega=1.0))


@pytest.mark.parametrize("law", [np.tanh, ([-9.0, 0.0, 9.0], [-1.0, 0.0, 1.0])], ids=["function", "table"])
def test_a_law_of_numbers_is_refused_by_name(law):
    result = ms.expand(one(F(v), laws={F: law}), 1)
    for write in (ms.write_module, ms.write_c):
        with pytest.raises(ms.EvaluationError, match=r"Python function or a table \(F\).*slow_flow\.to_numpy"):
            write(result, "flow.c")


def test_another_namespace_for_closed_forms(tmp_path):
    """NumPy in the part of the other library."""
    result = expanded("drag")
    function = result.slow_flow.to_numpy()
    y = states(result)
    bound = function.with_namespace(np).bind({name: VALUES[name] for name in function.parameters})
    expected = function.bind({name: VALUES[name] for name in function.parameters})(0.0, y)
    np.testing.assert_allclose(bound(0.0, y), expected, rtol=1e-13)
    assert "import jax.numpy as np" in module_source(result, namespace="jax.numpy")


@pytest.mark.parametrize(("name", "called"), [("rational", "circle"), ("sine", "besselj"), ("any power", "gamma")])
def test_quadrature_needs_numpy_itself(name, called):
    result = expanded(name)
    with pytest.raises(ms.EvaluationError, match=rf"{called}.*NumPy itself, not jax\.numpy"):
        module_source(result, namespace="jax.numpy")
    with pytest.raises(ms.EvaluationError, match=rf"{called}.*NumPy arrays only"):
        result.slow_flow.to_numpy().with_namespace(np)


def test_laws_need_numpy_itself():
    function = ms.expand(one(F(v), laws={F: np.tanh}), 1).slow_flow.to_numpy()
    with pytest.raises(ms.EvaluationError, match=r"calls F, a force law"):
        function.with_namespace(np)
