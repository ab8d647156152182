"""Closed forms of phase averages in C; what C99 has no functions for is refused."""

from __future__ import annotations

import ctypes
import shutil
import subprocess

import numpy as np
import pytest
import sympy as sp

import multiscale as ms
from multiscale.codegen.c_source import c_source

t = sp.Symbol("t", real=True)
eps, w, k, p, g, q = sp.symbols("epsilon omega k p_ g q_", positive=True)
c = sp.Symbol("c", real=True)
u = sp.Function("u")(t)
v = u.diff(t)
FORCES = {
    "drag": k * sp.Abs(v) * v,
    "power 3/2": k * sp.sqrt(sp.Abs(v)) * v,
    "any power": k * sp.Abs(v) ** p * sp.sign(v),
    "Coulomb and viscous": k * sp.sign(v) + g * v,
    "clearance": k * (sp.Max(u - g, 0) - sp.Max(-u - g, 0)),
    "clearance, quadratic": k * sp.Max(u - g, 0) ** 2,
    "belt": k * sp.sign(v - g),
    "modulus of a parameter": sp.Abs(c) * u**3 + g * v,
}
VALUES = {"epsilon": 0.13, "omega": 1.3, "k": 0.8, "p_": 1.4, "g": 0.6, "c": -0.7}
COMPILER = shutil.which("cc") or shutil.which("gcc")
STRICT = ["-std=c99", "-Wall", "-Wextra", "-pedantic", "-Werror"]
needs_compiler = pytest.mark.skipif(COMPILER is None, reason="no C compiler")


def expanded(force):
    return ms.expand(ms.Problem(u.diff(t, 2) + w**2 * u + eps * force, u, small=eps), 1)


def compiled(result, folder):
    source, _ = ms.write_c(result, folder / "flow.c")
    library = folder / "flow.so"
    command = [COMPILER, *STRICT, "-shared", "-fPIC", str(source), "-o", str(library), "-lm"]
    done = subprocess.run(command, capture_output=True, text=True)
    assert done.returncode == 0, done.stderr
    return ctypes.CDLL(str(library))


def called(function, size, y, values):
    pointer = ctypes.POINTER(ctypes.c_double)
    arrays = [np.ascontiguousarray(x, dtype=float) for x in (y, values)]
    result = np.full(size, np.nan)
    function.restype = None
    function(ctypes.c_double(0.7), *(x.ctypes.data_as(pointer) for x in (*arrays, result)))
    return result


@needs_compiler
@pytest.mark.parametrize("name", FORCES)
def test_closed_forms_in_c(name, tmp_path):
    result = expanded(FORCES[name])
    library = compiled(result, tmp_path)
    functions = {
        "rhs": result.slow_flow.to_numpy(),
        "jacobian": result.slow_flow.to_numpy(wrt="state"),
        "displacement": result.to_numpy(),
        "frequency": result.frequency_to_numpy(),
    }
    for title, function in functions.items():
        values = function.values({s: VALUES[s] for s in function.parameters})
        # Rest, below and beyond the clearance.
        for y in ([0.0, 0.0], [0.2, -0.1], [0.9, 1.1], [-2.0, 0.3]):
            expected = function(0.7, y, *values).ravel()
            found = called(getattr(library, f"flow_{title}"), expected.size, y, values)
            np.testing.assert_allclose(found, expected, rtol=1e-13, atol=1e-15)


@pytest.mark.parametrize(
    ("force", "message"),
    [
        (k / (1 + u**2), "quadrature"),
        (k * sp.sin(u), "Bessel function J_n"),
        (k * sp.exp(u), "modified Bessel function I_n"),
    ],
)
def test_what_c_does_not_have(force, message, tmp_path):
    with pytest.raises(ms.EvaluationError, match=rf"{message}.*use write_module"):
        ms.write_c(expanded(force), tmp_path / "flow.c")
    assert not list(tmp_path.iterdir())


NAMES = [
    "lambda", "t_", "y", "np", "sin", "asin", "fabs", "fmax", "NAN", "INFINITY", "HUGE_VAL", "__LINE__", "_Bool",
    "\u03bc", "\u03b1\u03b2", r"\mu_{1}", r"\mu_1", "k 1", "k-1", "k.1", "FLOW_H", "flow_rhs", "FLOW_P_Y", "flow_sign",
    "parameters", "result", "w", "c0", "v1", "theta", "x0", "_integrand_1", "_FORCE_1", "circle", "math", "tgamma",
    "values", "rhs", "None", "inf", "nan", "signbit", "errno", "kernel", "float", "bool", "tuple", "flow_rhs_1",
]  # fmt: skip


def awkward():
    """A force whose strengths have names that a language might take for its own."""
    symbols = [sp.Symbol(name, positive=True) for name in NAMES]
    force = sum(s for s in symbols[::2]) * sp.Abs(v) * v + sum(s for s in symbols[1::2]) * u**3
    problem = ms.Problem(u.diff(t, 2) + w**2 * u + eps * force, u, small=eps)
    values = {s.name: 0.1 + 0.01 * n for n, s in enumerate(symbols)} | {"epsilon": 0.1, "omega": 1.3}
    return ms.expand(problem, 1), values


def test_awkward_names_in_numpy_functions_and_modules():
    """The value of the flow is that of the formulas, with dozens of awkward names."""
    result, values = awkward()
    rhs = result.slow_flow.to_numpy()
    drag = sum(values[name] for name in NAMES[::2])
    cubic = sum(values[name] for name in NAMES[1::2])
    scope: dict = {}
    from multiscale.codegen.module import module_source

    exec(module_source(result), scope)
    assert scope["PARAMETERS"] == rhs.parameters
    small, omega, a = 0.1, 1.3, 0.8
    # da/dt = -4 k omega a**2/(3 pi), dbeta/dt = 3 alpha a**2/(8 omega); at beta = 0, q = -a sin beta.
    expected = [-small * 4 * drag * omega * a**2 / (3 * np.pi), -small * 3 * cubic * a**3 / (8 * omega)]
    for found in (rhs.bind(values)(0.0, [a, 0.0]), scope["rhs"](0.0, [a, 0.0], *scope["parameters"](values))):
        np.testing.assert_allclose(found, expected, rtol=1e-13)


@needs_compiler
@pytest.mark.parametrize("part", [200, 5], ids=["whole", "split"])
def test_awkward_names_in_c(part, tmp_path, monkeypatch):
    from multiscale.codegen import c_source as room

    monkeypatch.setattr(room, "PART", part)
    result, values = awkward()
    library = compiled(result, tmp_path)
    rhs = result.slow_flow.to_numpy()
    numbers = rhs.values(values)
    np.testing.assert_allclose(
        called(library.flow_rhs, 2, [0.5, 0.3], numbers), rhs(0.7, [0.5, 0.3], *numbers), rtol=1e-13
    )
    assert c_source(result, "flow") == c_source(result, "flow")
