"""Modules of problems whose forces are averaged over a cycle: NumPy alone, the same numbers."""

from __future__ import annotations

import subprocess
import sys

import numpy as np
import pytest
import sympy as sp

import multiscale as ms
from multiscale.codegen.module import module_source

t = sp.Symbol("t", real=True)
eps, c, k, g, f, Omega = sp.symbols("epsilon c k g f Omega", positive=True)
sigma = sp.Symbol("sigma", real=True)
u, w = sp.Function("u")(t), sp.Function("w")(t)
v = u.diff(t)
FORCES = {
    "drag": sp.Abs(v) * v,
    "symbolic power": sp.Abs(v) ** c * sp.sign(v),
    "clearance": k * sp.Max(u - g, 0),
    "bessel": sp.exp(u) - 1,
    "quadrature": sp.tanh(v / g),
    "kinks": sp.Abs(v) * sp.tanh(v / g),
}
VALUES = {"epsilon": 0.1, "c": 0.7, "k": 0.6, "g": 0.4, "f": 0.3, "sigma": 0.2}


def expanded(force) -> ms.Expansion:
    equation = u.diff(t, 2) + u + eps * (force + u**3 - f * sp.cos(Omega * t))
    return ms.expand(ms.Problem(equation, u, small=eps, resonances={Omega: 1 + eps * sigma}), 1)


def loaded(source: str) -> dict:
    names: dict = {}
    exec(compile(source, "module", "exec"), names)
    return names


@pytest.mark.parametrize("name", FORCES)
def test_the_numbers_are_those_of_the_library(name):
    expansion = expanded(FORCES[name])
    module = loaded(module_source(expansion))
    y = np.array([[0.5, -0.3, 1.2], [0.4, 0.9, 0.0]])
    for function, wrt in (("rhs", None), ("jacobian", "state")):
        here = expansion.slow_flow.to_numpy("cartesian", wrt=wrt)
        values = {x: VALUES[x] for x in here.parameters}
        there = module[function](0.0, y, *module["parameters"](values))
        assert np.array_equal(there, here(0.0, y, *here.values(values)))


def test_two_oscillators_in_resonance():
    push = sp.Max(u - w - g, 0)
    equations = [u.diff(t, 2) + u + eps * push, w.diff(t, 2) + 4 * w - eps * push]
    expansion = ms.expand(ms.Problem(equations, [u, w], small=eps), 1)
    module, here = loaded(module_source(expansion)), expansion.slow_flow.to_numpy()
    y = [1.0, 0.2, 0.3, -0.1]
    assert np.array_equal(module["rhs"](0.0, y, 0.1, 0.4), here(0.0, y, 0.1, 0.4))


def test_it_needs_numpy_alone(tmp_path):
    path = ms.write_module(expanded(FORCES["kinks"]), tmp_path / "flow.py")
    program = (
        "import runpy, sys\n"
        f"flow = runpy.run_path({str(path)!r})\n"
        "print(flow['rhs'](0.0, [0.5, 0.3], *flow['parameters'](epsilon=0.1, f=0.3, g=0.4, sigma=0.2)))\n"
        "assert not {'multiscale', 'sympy', 'scipy'} & set(sys.modules)\n"
    )
    done = subprocess.run([sys.executable, "-I", "-c", program], capture_output=True, text=True, check=False)
    assert done.returncode == 0, done.stderr


def test_other_languages_and_laws_are_refused_with_the_reason(tmp_path):
    with pytest.raises(ms.EvaluationError, match="for NumPy alone"):
        ms.write_module(expanded(FORCES["drag"]), tmp_path / "flow.py", namespace="jax.numpy")
    F = sp.Function("F")
    law = ms.ForceLaw(np.tanh, derivative=lambda x: 1 / np.cosh(x) ** 2)
    problem = ms.Problem(u.diff(t, 2) + u + eps * F(v), u, small=eps, laws={F: law})
    with pytest.raises(ms.EvaluationError, match=r"given as a Python function.*law_F"):
        ms.write_module(ms.expand(problem, 1), tmp_path / "flow.py")
