"""A generated module agrees with the library, stands alone, is laid out and is the same on every run."""

from __future__ import annotations

import importlib.util
import subprocess
import sys
from types import ModuleType

import numpy as np
import pytest
import sympy as sp

import multiscale as ms
from multiscale.codegen.module import module_source

t = sp.Symbol("t", real=True)
eps, k, m, mu, alpha, f, sigma, Omega = sp.symbols("epsilon k m mu alpha f sigma Omega", positive=True)
w1, w2 = sp.symbols("omega_1 omega_2", positive=True)
u, v = sp.Function("u")(t), sp.Function("v")(t)

COUPLED = [
    u.diff(t, 2) + w1**2 * u + eps * alpha * u * v,
    v.diff(t, 2) + w2**2 * v + eps * (mu * v.diff(t) + f * u**2),
]
CUBIC = m * u.diff(t, 2) + k * u + 2 * eps * mu * u.diff(t) + eps * alpha * u**3
ODD = sp.symbols('lambda rhs t_ c0 1\\alpha_{2} v\' sin values a"""b */ gamma', positive=True)
STATEMENTS = {
    "free": (CUBIC, u, {"small": eps}),
    "driven": (
        CUBIC.subs({m: 1, k: w1**2}) - eps * f * sp.cos(Omega * t),
        u,
        {"small": eps, "resonances": {Omega: w1 + eps * sigma}},
    ),
    "two modes": (COUPLED, [u, v], {"small": eps}),
    "internal resonance": (COUPLED, [u, v], {"small": eps, "resonances": {w2: 2 * w1 + eps * sigma}}),
    "ordering": (u.diff(t, 2) + w1**2 * u + mu * u.diff(t) + alpha * u**2, u, {"ordering": {u: 1, mu: 2}}),
    "numbers": (u.diff(t, 2) + u + eps * (u**2 - 1) * u.diff(t), u, {"small": eps}),
    "conservative": (u.diff(t, 2) + u + eps * u**3, u, {"small": eps}),
    "odd names": (u.diff(t, 2) + u + eps * sum(ODD) * u**3, u, {"small": eps}),
    "slow parameter": (u.diff(t, 2) + (1 + eps * t) ** 2 * u + eps * alpha * u**3, u, {"small": eps}),
}
VALUES = {eps: 0.17, k: 2.3, m: 0.7, mu: 0.11, alpha: 0.9, f: -0.4, w1: 1.3, w2: 2.9, sigma: 0.3}
VALUES |= {s: 0.1 + 0.1 * n for n, s in enumerate(ODD)}


@pytest.fixture(params=STATEMENTS, scope="module")
def result(request):
    equations, unknowns, options = STATEMENTS[request.param]
    return ms.expand(ms.Problem(equations, unknowns, **options), 2)


def bindings(result):
    return {s.name: VALUES[s] for s in (*result.problem.parameters, result.problem.small) if s in VALUES}


def loaded(path) -> ModuleType:
    spec = importlib.util.spec_from_file_location(path.stem, path)
    module = importlib.util.module_from_spec(spec)
    spec.loader.exec_module(module)
    return module


@pytest.fixture
def module(result, tmp_path):
    return loaded(ms.write_module(result, tmp_path / "flow.py"))


def library(result, name):
    return {
        "rhs": lambda: result.slow_flow.to_numpy(),
        "jacobian": lambda: result.slow_flow.to_numpy(wrt="state"),
        "displacement": lambda: result.to_numpy(),
        "frequency": lambda: result.frequency_to_numpy(0),
    }[name]()


def rows(result, name, found):
    return found[0] if name == "frequency" and len(result.problem.unknowns) > 1 else found


@pytest.mark.parametrize("name", ["rhs", "jacobian", "displacement", "frequency"])
def test_functions_agree_with_the_library(result, module, name):
    if name == "frequency" and (result.slow_flow.phases or not result.slow_flow.autonomous):
        with pytest.raises(NotImplementedError, match="no function of the amplitude"):
            module.frequency(0.0, [0.1, 0.2])
        return
    expected = library(result, name)
    assert expected.parameters == module.PARAMETERS
    values = module.parameters(bindings(result))
    assert values == expected.values(bindings(result))
    size = len(module.STATE)
    y = np.linspace(0.4, 1.1, size)
    found = rows(result, name, getattr(module, name)(0.7, y, *values))
    np.testing.assert_allclose(found, expected(0.7, y, *values), rtol=1e-12, atol=1e-14)
    many = np.random.default_rng(2).normal(size=(size, 1, 5))
    times, swept = np.linspace(0.0, 1.0, 3)[:, None], (*values[:-1], np.full(5, values[-1]))
    found = rows(result, name, getattr(module, name)(times, many, *swept))
    reference = expected(times, many, *swept)
    assert found.shape == reference.shape
    np.testing.assert_allclose(found, reference, rtol=1e-11, atol=1e-13)


def test_polar_state(result, module):
    """Both forms describe the same leading motion, and the change of form goes both ways."""
    y = np.random.default_rng(3).normal(size=(len(module.STATE), 4))
    polar = module.to_polar(y)
    np.testing.assert_allclose(module.to_cartesian(polar), y, rtol=1e-12)
    assert polar.shape == y.shape
    names = [*result.symbols.a, *result.symbols.gamma, *result.slow_flow.cyclic]
    state = [x for pair in zip(result.symbols.p, result.symbols.q, strict=True) for x in pair]
    base = VALUES | {Omega: 1.7, t: 0.6, result.problem.small: 0.2}
    for one, other in zip(*(result.solution(form, 0).values() for form in ("cartesian", "polar")), strict=True):
        left = one.subs(base | dict(zip(state, y[:, 0], strict=True))).doit()
        right = other.subs(base | dict(zip(names, polar[:, 0], strict=True))).doit()
        assert complex(left) == pytest.approx(complex(right), rel=1e-9)


def test_layout_is_stable_under_a_formatter(result, tmp_path):
    path = ms.write_module(result, tmp_path / "flow.py")
    command = [sys.executable, "-m", "ruff", "format", "--isolated", "--line-length", "88", "--diff", str(path)]
    done = subprocess.run(command, capture_output=True, text=True)
    if "No module named ruff" in done.stderr:
        pytest.skip("ruff is not installed")
    assert done.returncode == 0, done.stdout
    check = ["check", "--isolated", "--line-length", "88", "--select", "E,F,W,I,B,UP,C4,RET", "--no-cache"]
    done = subprocess.run([sys.executable, "-m", "ruff", *check, str(path)], capture_output=True, text=True)
    assert done.returncode == 0, done.stdout


def test_text_is_plain(result):
    text = module_source(result)
    assert text.isascii()
    assert text.endswith("\n")
    assert not text.endswith("\n\n")
    assert max(map(len, text.splitlines())) <= 88


def test_module_documents_itself(tmp_path):
    equations, unknowns, options = STATEMENTS["two modes"]
    text = module_source(ms.expand(ms.Problem(equations, unknowns, **options), 2))
    for line in (
        "    u'' + omega_1**2*u + alpha*epsilon*u*v = 0",
        "    u = p_1*cos(omega_1*t) + q_1*sin(omega_1*t) + O(epsilon)",
        "    2*omega_1 - omega_2",
        "    beta_2 = -atan2(q_2, p_2)",
        f"Made by multiscale {ms.__version__}; needs NumPy only.",
    ):
        assert line in text.splitlines()


def test_remarks_are_in_the_module():
    with pytest.warns(ms.OrderingWarning):
        result = ms.expand(ms.Problem(u.diff(t, 2) + w1**2 * u + eps * alpha * u**2, u, small=eps), 1)
    assert "Remarks\n    - order 1 with even (quadratic) terms" in module_source(result)


def test_eliminated_frequency_may_be_given():
    equations, unknowns, options = STATEMENTS["driven"]
    result = ms.expand(ms.Problem(equations, unknowns, **options), 2)
    scope: dict = {}
    exec(compile(module_source(result), "<flow>", "exec"), scope)
    given = {"alpha": 0.9, "epsilon": 0.2, "f": 0.4, "mu": 0.1, "omega_1": 1.3}
    assert scope["parameters"](given, Omega=1.4) == result.slow_flow.to_numpy().values(given, Omega=1.4)
    assert "Omega may be given too" in scope["parameters"].__doc__
    with pytest.raises(ValueError, match="the relation needs"):
        scope["parameters"](given, Omega=1.4, sigma=2.0)
    with pytest.raises(ValueError, match="Omega is given, but not epsilon"):
        scope["parameters"]({name: x for name, x in given.items() if name != "epsilon"}, Omega=1.4)
    with pytest.raises(ValueError, match="missing: sigma"):
        scope["parameters"](given)
    with pytest.raises(ValueError, match="unknown parameter omega_2"):
        scope["parameters"](given, sigma=0.1, omega_2=3.0)


def test_same_bytes_on_every_run_and_nothing_but_numpy(tmp_path):
    code = (
        "import sympy as sp, multiscale as ms\n"
        "t = sp.Symbol('t', real=True)\nu = sp.Function('u')(t)\n"
        "eps, k, m, mu, alpha = sp.symbols('epsilon k m mu alpha', positive=True)\n"
        "x = m*u.diff(t, 2) + k*u + 2*eps*mu*u.diff(t) + eps*alpha*u**3\n"
        "ms.write_module(ms.expand(ms.Problem(x, u, small=eps), 2), 'flow.py')"
    )
    expected = module_source(ms.expand(ms.Problem(CUBIC, u, small=eps), 2)).encode()
    for seed in ("1", "77"):
        environment = {"PYTHONHASHSEED": seed, "PYTHONPATH": ":".join(sys.path)}
        subprocess.run([sys.executable, "-c", code], env=environment, check=True, cwd=tmp_path)
        assert (tmp_path / "flow.py").read_bytes() == expected
    alone = "import sys\nfor name in ('sympy', 'multiscale', 'mpmath'): sys.modules[name] = None\nimport flow"
    subprocess.run([sys.executable, "-c", alone], cwd=tmp_path, check=True)


def test_choice_of_functions():
    text = module_source(ms.expand(ms.Problem(CUBIC, u, small=eps), 1), functions=["rhs"])
    assert "def rhs(" in text
    assert not {"def displacement(", "def jacobian(", "cos, sin"} & set(text)
    assert "displacement" not in text


REFUSED = {
    "functions": ({"functions": ["flow"]}, "'flow', expected names among rhs"),
    "nothing": ({"functions": []}, "empty, expected"),
    "namespace": ({"namespace": "numpy; import os"}, "expected the name of a module"),
}


@pytest.mark.parametrize("name", REFUSED)
def test_refused(name):
    options, message = REFUSED[name]
    with pytest.raises(ms.EvaluationError, match=message):
        module_source(ms.expand(ms.Problem(CUBIC, u, small=eps), 1), **options)
    with pytest.raises(ms.EvaluationError, match="not a Problem: call expand first"):
        module_source(ms.Problem(CUBIC, u, small=eps))


def test_a_python_function_as_force_is_refused():
    from multiscale.codegen.functions import Routine
    from multiscale.codegen.program import Program
    from multiscale.codegen.routines import _check_functions

    result = ms.expand(ms.Problem(CUBIC, u, small=eps), 1)
    program = Program(result.problem, result.computation)
    routine = Routine(program, (), (program.tape.call("my_force", program.time),), (1,), "One call.")
    with pytest.raises(ms.EvaluationError, match="given as a Python function"):
        _check_functions(routine)


@pytest.mark.slow
def test_numba_compiles_the_kernels(tmp_path):
    numba = pytest.importorskip("numba")
    equations, unknowns, options = STATEMENTS["driven"]
    module = loaded(ms.write_module(ms.expand(ms.Problem(equations, unknowns, **options), 2), tmp_path / "flow.py"))
    values = module.parameters(alpha=0.9, epsilon=0.2, f=0.4, mu=0.1, omega_1=1.3, sigma=0.2)
    for name in ("rhs", "jacobian", "displacement"):
        compiled = numba.njit(getattr(module, f"{name}_kernel"))
        expected = getattr(module, name)(0.4, [0.3, 0.2], *values)
        np.testing.assert_allclose(compiled(0.4, 0.3, 0.2, *values), expected.ravel(), rtol=1e-12)


@pytest.mark.slow
def test_jax_compiles_maps_and_differentiates(tmp_path):
    jax = pytest.importorskip("jax")
    jax.config.update("jax_enable_x64", True)
    equations, unknowns, options = STATEMENTS["driven"]
    result = ms.expand(ms.Problem(equations, unknowns, **options), 2)
    module = loaded(ms.write_module(result, tmp_path / "flow.py", namespace="jax.numpy"))
    rhs = result.slow_flow.to_numpy()
    values = rhs.values(alpha=0.9, epsilon=0.2, f=0.4, mu=0.1, omega_1=1.3, sigma=0.2)
    states = np.random.default_rng(4).normal(size=(6, 2))
    slope = result.slow_flow.to_numpy(wrt="state")
    by_parameters = result.slow_flow.to_numpy(wrt="parameters")
    for function in (module.rhs, rhs.with_namespace(jax.numpy)):
        compiled = jax.jit(function)
        np.testing.assert_allclose(compiled(0.0, states.T, *values), rhs(0.0, states.T, *values), rtol=1e-12)
        mapped = jax.vmap(lambda y, function=function: function(0.0, y, *values))(states)
        np.testing.assert_allclose(mapped.T, rhs(0.0, states.T, *values), rtol=1e-12)
        jacobian = jax.jacfwd(lambda y, function=function: function(0.0, y, *values))(states[0])
        np.testing.assert_allclose(jacobian, slope(0.0, states[0], *values), rtol=1e-11)
        gradient = jax.grad(lambda a, function=function: function(0.0, states[0], a, *values[1:])[1])(values[0])
        np.testing.assert_allclose(gradient, by_parameters(0.0, states[0], *values)[1, 0], rtol=1e-11)


def test_another_namespace(result):
    """NumPy itself in the part of the other library, and one that lacks what is needed."""
    function = result.slow_flow.to_numpy()
    size = 2 * len(result.symbols.p)
    y = np.random.default_rng(6).normal(size=(size, 7))
    other = function.with_namespace(np)
    values = bindings(result)
    np.testing.assert_allclose(other.bind(values)(0.3, y), function.bind(values)(0.3, y), rtol=1e-12)
    with pytest.raises(ms.EvaluationError, match="has no asarray"):
        function.with_namespace(sys)
    with pytest.raises(ms.EvaluationError, match="expected"):
        other(0.0, y[:1], *function.values(values))
