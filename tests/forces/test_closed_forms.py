"""Every closed form against quadrature: the same force given as numbers, averaged by the generated code."""

from __future__ import annotations

from itertools import pairwise

import numpy as np
import pytest
import sympy as sp

import multiscale as ms

t = sp.Symbol("t", real=True)
eps, w, k, p, g = sp.symbols("epsilon omega k p g", positive=True)
u = sp.Function("u")(t)
v = u.diff(t)
F = sp.Function("F")
VALUES = {"epsilon": 0.1, "omega": 1.7, "k": 0.8, "p": 1.3, "g": 0.6}
X, Y = sp.symbols("x y", real=True)

ONE_ARGUMENT = {
    "drag": (sp.Abs(Y) * Y, (0.0,)),
    "Coulomb": (sp.sign(Y), (0.0,)),
    "power of the velocity": (sp.Abs(Y) ** p * sp.sign(Y), (0.0,)),
    "power 1/2": (sp.sqrt(sp.Abs(Y)) * sp.sign(Y), (0.0,)),
    "power of the displacement": (sp.Abs(X) ** p * sp.sign(X), (0.0,)),
    "quadratic stiffness": (sp.Abs(X) * X, (0.0,)),
    "quartic by modulus": (sp.Abs(X) ** 3 * X, (0.0,)),
    "one-sided without gap": (sp.Max(X, 0), (0.0,)),
    "sine": (sp.sin(k * X), ()),
    "cosine, shifted": (sp.cos(k * X + g), ()),
    "exponential": (sp.exp(k * X), ()),
    "exponential of the velocity": (sp.exp(k * Y), ()),
    "hyperbolic sine, shifted": (sp.sinh(k * X + g), ()),
    "hyperbolic cosine times square": (X**3 * sp.cosh(k * X), ()),
    "sine times powers": (X**2 * sp.sin(k * X), ()),
    "clearance": (sp.Max(X - g, 0), (0.6,)),
    "clearance below": (sp.Min(X + g, 0), (-0.6,)),
    "clearance, quadratic": (sp.Max(X - g, 0) ** 2, (0.6,)),
    "clearance on both sides": (sp.Max(X - g, 0) - sp.Max(-X - g, 0), (-0.6, 0.6)),
    "preload": (sp.Max(X + g, 0), (-0.6,)),
    "step": (sp.Heaviside(X - g), (0.6,)),
    "distance": (sp.Abs(X - g), (0.6,)),
    "belt": (sp.sign(Y - g), (0.6,)),
    "piecewise": (sp.Piecewise((X**3, g < X), (0, True)), (0.6,)),
    "piecewise in the velocity": (sp.Piecewise((Y, g >= Y), (2 * Y**2, True)), (0.6,)),
}


def numeric(arguments, force):
    """The force as a NumPy function; older SymPy writes Max and Min in a way that does not broadcast."""
    force = force.replace(sp.Max, lambda a, b: sp.Piecewise((a, a > b), (b, True)))
    force = force.replace(sp.Min, lambda a, b: sp.Piecewise((a, a < b), (b, True)))
    return sp.lambdify(arguments, force, "numpy")


def flow(force, laws=None):
    problem = ms.Problem(u.diff(t, 2) + w**2 * u + eps * force, u, small=eps, laws=laws or {})
    function = ms.expand(problem, 1).slow_flow.to_numpy("polar")
    return function.bind({name: VALUES[name] for name in function.parameters})


@pytest.mark.parametrize("name", ONE_ARGUMENT)
def test_closed_form_is_the_average(name):
    force, kinks = ONE_ARGUMENT[name]
    variable = X if X in force.free_symbols else Y
    numbers = {s: VALUES[s.name] for s in force.free_symbols - {X, Y}}
    law = ms.ForceLaw(numeric(variable, force.subs(numbers)), kinks)
    closed = flow(force.subs({X: u, Y: v}))
    averaged = flow(F(u if variable == X else v), {F: law})
    assert "arcs" not in closed.function.functions
    assert "circle" not in closed.function.functions
    assert {"arcs", "circle"} & set(averaged.function.functions)
    amplitudes = np.random.default_rng(3).uniform(0.05, 2.5, 40)
    state = np.array([amplitudes, np.zeros(40)])
    expected = averaged(0.0, state)
    scale = np.maximum(np.abs(expected), 0.1 * np.abs(expected).max())
    assert np.abs(expected).max() > 1e-3
    assert np.abs((closed(0.0, state) - expected) / np.where(scale > 0, scale, 1)).max() < 1e-12


TWO_ARGUMENTS = {
    "drag times square": sp.Abs(Y) * Y * X**2,
    "friction growing with displacement": sp.Abs(X) * sp.sign(Y),
    "both moduli": sp.Abs(X) ** p * sp.Abs(Y) * Y,
    "clearance with damping": sp.Max(X - g, 0) * Y,
    "exponential times product": sp.exp(k * Y) * X * Y + sp.Abs(Y) * Y,
    "damping within a stop": sp.Heaviside(X - g) * Y,
}


@pytest.mark.parametrize("name", TWO_ARGUMENTS)
def test_closed_form_of_two_variables(name):
    """Against a sum over arcs of the projection itself, in this test."""
    force = TWO_ARGUMENTS[name]
    closed = flow(force.subs({X: u, Y: v}))
    f = numeric((X, Y), force.subs({s: VALUES[s.name] for s in force.free_symbols - {X, Y}}))
    nodes, weights = np.polynomial.legendre.leggauss(120)
    # θ' ∝ (1 − s²)² on each arc, for the powers at its ends.
    nodes, weights = nodes * (15 - 10 * nodes**2 + 3 * nodes**4) / 8, weights * 15 * (1 - nodes**2) ** 2 / 8
    omega, small = VALUES["omega"], VALUES["epsilon"]
    for a in np.random.default_rng(5).uniform(0.05, 2.5, 12):
        contact = np.arccos(min(VALUES["g"] / a, 1.0))
        ends = np.unique(np.concatenate([np.arange(5) * np.pi / 2, [contact, 2 * np.pi - contact]]))
        mean = 0.0
        for left, right in pairwise(ends):
            theta = (left + right) / 2 + (right - left) / 2 * nodes
            values = f(a * np.cos(theta), -a * omega * np.sin(theta)) * np.exp(-1j * theta)
            mean = mean + (weights * values).sum() * (right - left) / 2 / (2 * np.pi)
        # D_1A = i C_1/(2ω), A = ½ a e^{iβ}, for u'' + ω²u + ε f = 0.
        rate = small * 1j * mean / (2 * omega)
        expected = np.array([2 * rate.real, 2 * rate.imag / a])
        assert np.abs(closed(0.0, [a, 0.0]) - expected).max() < 1e-12 * max(1.0, np.abs(expected).max())
