"""Generated C compiles without a warning and agrees with NumPy."""

from __future__ import annotations

import ctypes
import re
import shutil
import subprocess

import numpy as np
import pytest
import sympy as sp

import multiscale as ms
from multiscale.codegen import c_source

t = sp.Symbol("t", real=True)
eps, mu, alpha, f, sigma, Omega = sp.symbols("epsilon mu alpha f sigma Omega", positive=True)
w1, w2 = sp.symbols("omega_1 omega_2", positive=True)
u, v = sp.Function("u")(t), sp.Function("v")(t)

ODD = sp.symbols("register y c0 2\\a_{2} v' sin /* */ ??/ double", positive=True)
CUBIC = u.diff(t, 2) + w1**2 * u + 2 * eps * mu * u.diff(t) + eps * alpha * u**3
STATEMENTS = {
    "driven": (CUBIC - eps * f * sp.cos(Omega * t), u, {Omega: w1 + eps * sigma}),
    "two modes": (
        [
            u.diff(t, 2) + w1**2 * u + eps * alpha * u * v,
            v.diff(t, 2) + w2**2 * v + eps * (mu * v.diff(t) + f * u**2),
        ],
        [u, v],
        {},
    ),
    "macros": (
        u.diff(t, 2) + u + eps * sum(sp.symbols("NAN INFINITY HUGE_VAL FP_NAN M_PI class", positive=True)) * u**3,
        u,
        {},
    ),
    "odd names": (u.diff(t, 2) + u + eps * sum(ODD) * u**3 + eps * u.diff(t), u, {}),
}
COMPILER = shutil.which("cc") or shutil.which("gcc")
STRICT = ["-std=c99", "-Wall", "-Wextra", "-pedantic", "-Werror"]
needs_compiler = pytest.mark.skipif(COMPILER is None, reason="no C compiler")


def expanded(name):
    equations, unknowns, relations = STATEMENTS[name]
    return ms.expand(ms.Problem(equations, unknowns, small=eps, resonances=relations), 2)


def compiled(result, folder, optimise="-O1", **options):
    source, header = ms.write_c(result, folder / "flow.c", **options)
    assert header.name == "flow.h"
    library = folder / "flow.so"
    command = [COMPILER, *STRICT, optimise, "-shared", "-fPIC", str(source), "-o", str(library), "-lm"]
    subprocess.run(command, check=True, capture_output=True)
    return ctypes.CDLL(str(library))


def called(function, size, time, y, values):
    pointer = ctypes.POINTER(ctypes.c_double)
    arrays = [np.ascontiguousarray(x, dtype=float) for x in (y, values)]
    result = np.full(size, np.nan)
    function.restype = None
    function(ctypes.c_double(time), *(x.ctypes.data_as(pointer) for x in (*arrays, result)))
    return result


def references(result):
    functions = {
        "rhs": result.slow_flow.to_numpy(),
        "jacobian": result.slow_flow.to_numpy(wrt="state"),
        "displacement": result.to_numpy(),
    }
    if not result.slow_flow.phases:
        functions["frequency"] = result.frequency_to_numpy(0)
    return functions


@needs_compiler
@pytest.mark.parametrize("part", [c_source.PART, 5], ids=["whole", "split"])
@pytest.mark.parametrize("name", STATEMENTS)
def test_c_agrees_with_numpy(name, part, tmp_path, monkeypatch):
    monkeypatch.setattr(c_source, "PART", part)
    result = expanded(name)
    library = compiled(result, tmp_path)
    values = np.linspace(0.3, 1.4, len(result.problem.parameters) + 1)
    y = np.linspace(0.4, 1.1, 2 * len(result.problem.unknowns))
    for function, reference in references(result).items():
        expected = reference(0.7, y, *values).ravel()
        count = len(result.problem.unknowns) if function == "frequency" else expected.size
        found = called(getattr(library, f"flow_{function}"), count, 0.7, y, values)
        np.testing.assert_allclose(found[: expected.size], expected, rtol=1e-13, atol=1e-15)
        assert np.isfinite(found).all()


@needs_compiler
def test_relation_becomes_a_function(tmp_path):
    library = compiled(expanded("driven"), tmp_path)
    library.flow_relation_1.restype = ctypes.c_double
    found = library.flow_relation_1(*map(ctypes.c_double, (1.4, 0.2, 1.3)))
    assert found == pytest.approx(0.5, rel=1e-12)
    assert "sigma from Omega, epsilon, omega_1" in (tmp_path / "flow.h").read_text()


def test_places_of_the_parameters():
    result = expanded("driven")
    _, header = c_source.c_source(result, "flow")
    places = dict(re.findall(r"FLOW_P_(\w+) = (\d+)", header))
    assert [name.lower() for name in places] == list(result.slow_flow.to_numpy().parameters)
    assert list(places.values()) == [str(n) for n in range(len(places))]


def test_text_is_the_same_each_time_and_plain():
    first, second = (c_source.c_source(expanded("odd names"), "flow") for _ in range(2))
    assert first == second
    assert all(text.isascii() and text.endswith("\n") for text in first)
    assert "frequency is not defined here" in c_source.c_source(expanded("driven"), "flow")[1]


@pytest.mark.parametrize("path", ["flow", "flow.py", "2nd.c", "slow-flow.c"])
def test_names_that_are_no_identifiers(path, tmp_path):
    with pytest.raises(ms.EvaluationError, match=r"expected a name such as 'flow\.c'"):
        ms.write_c(expanded("odd names"), tmp_path / path)


@pytest.mark.slow
@needs_compiler
def test_a_long_flow_is_split(tmp_path):
    """Three oscillators in resonance: parts share a stack array whose places are used again."""
    from benchmarks.problems import three_resonant

    result = ms.expand(three_resonant(), 3)
    library = compiled(result, tmp_path, "-O0", functions=["rhs"])
    rhs = result.slow_flow.to_numpy()
    rng = np.random.default_rng(8)
    values, y = rng.uniform(0.2, 1.0, len(rhs.parameters)), rng.normal(size=6)
    np.testing.assert_allclose(called(library.flow_rhs, 6, 0.0, y, values), rhs(0.0, y, *values), rtol=1e-10)
    size = int(re.search(r"(\d+) bytes of stack", (tmp_path / "flow.h").read_text())[1])
    assert 0 < size < 8 * (tmp_path / "flow.c").read_text().count("const double c")
