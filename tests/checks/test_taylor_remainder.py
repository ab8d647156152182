"""Remainders of Taylor polynomials: against the next term, against a fine search, and what is refused."""

from __future__ import annotations

import math

import numpy as np
import pytest
import sympy as sp

import multiscale as ms
from multiscale.checks.singularities import singular_places

t = sp.Symbol("t", real=True)
eps, k, g, V, mu, W, f, u_s = sp.symbols("epsilon k g V mu Omega f u_s", positive=True)
u, v = sp.Function("u")(t), sp.Function("v")(t)
x = sp.Symbol("x", real=True)


def plate(order: int) -> ms.Expansion:
    return ms.expand(ms.Problem(u.diff(t, 2) + k * u - V**2 / (g - u) ** 2, u, ordering={u: 1}, about={u: u_s}), order)


VALUES = {"k": 2.0, "g": 1.0, "u_s": 0.1}


@pytest.mark.parametrize("order", [2, 3, 4])
def test_leading_part_is_the_first_term_left_out(order):
    """The force V²/(d − u)², d = g − u_s, leaves (n + 1) V² uⁿ/d^{n+2}, n = N + 2, relative to K a."""
    d, square = 0.9, 2.0 * 0.1 * 0.81
    stiffness = 2.0 - 2 * square / d**3
    size = np.array([1e-3, 2e-3])
    n = order + 2
    expected = (n + 1) * square * size**n / d ** (n + 2) / (stiffness * size)
    found = ms.taylor_remainder(plate(order), size, VALUES)
    assert found.relative[0] == pytest.approx(expected, rel=0.02 if order < 4 else 0.3)


def test_remainder_is_the_largest_difference():
    found = ms.taylor_remainder(ms.expand(ms.Problem(u.diff(t, 2) + sp.sin(u), u, ordering={u: 1}), 4), [0.5, 2.0])
    places = np.linspace(0, 1, 10**5)
    for column, size in enumerate((0.5, 2.0)):
        y = places * size
        difference = np.abs(np.sin(y) - (y - y**3 / 6 + y**5 / 120)).max() / size
        assert found.relative[0, column] == pytest.approx(difference, rel=1e-6)


def test_scalar_amplitude_and_shapes():
    result = plate(2)
    assert ms.taylor_remainder(result, 0.1, VALUES).relative.shape == (1,)
    assert ms.taylor_remainder(result, np.full((2, 3), 0.1), VALUES).relative.shape == (1, 2, 3)
    assert ms.taylor_remainder(result, 0.1, VALUES).order == 2


def test_several_unknowns_velocities_and_drives():
    """tanh of a velocity on one side, the product of a drive and a sine on the other."""
    equations = [
        u.diff(t, 2) + 4 * u + mu * sp.tanh(u.diff(t)),
        v.diff(t, 2) + 2 * v + f * sp.cos(W * t) * sp.sin(u - v),
    ]
    result = ms.expand(ms.Problem(equations, [u, v], ordering={u: 1, v: 1, mu: 2, f: 2}), 2)
    found = ms.taylor_remainder(result, {u: 0.2, v: 0.1}, {mu: 0.5, f: 0.3, W: 0.77})
    # At N = 2 the damping is kept linear, at the velocity 2·0.2, and the sine too, at the angle 0.3.
    damping = 0.5 * (0.4 - math.tanh(0.4)) / (4 * 0.2)
    drive = 0.3 * (0.3 - math.sin(0.3)) / (2 * 0.1)
    assert found.relative == pytest.approx([damping, drive], rel=1e-3)


def test_polynomial_problems_leave_nothing():
    found = ms.taylor_remainder(ms.expand(ms.Problem(u.diff(t, 2) + u + eps * u**3, u, small=eps), 2), 0.5, {eps: 0.1})
    assert found.relative.tolist() == [0.0]
    assert found.radius == (math.inf,)


def test_explicit_small_parameter():
    result = ms.expand(ms.Problem(u.diff(t, 2) + sp.sin(eps * u) / eps, u, small=eps), 2)
    found = ms.taylor_remainder(result, 1.0, {eps: 0.5})
    assert found.relative[0] == pytest.approx(abs(2 * math.sin(0.5) - (1 - 0.25 / 6)), rel=1e-9)


RADII = {
    "electrode": (1 / (g - u_s - x) ** 2, 0.9),
    "tangent": (sp.tan(x + u_s), math.pi / 2 - 0.1),
    "hyperbolic tangent": (sp.tanh(2 * x), math.pi / 4),
    "root": (sp.sqrt(1 + x**2), 1.0),
    "logarithm": (sp.log(1 + k * x), 0.5),
    "arcsine": (sp.asin(x / 3), 3.0),
    "arctangent": (sp.atan(x + 1), abs(-1 + 1j)),
    "product": (sp.exp(x) / (4 - x) + sp.sin(x), 4.0),
    "nested": (1 / (1 + sp.sin(x) ** 2), None),
    "special": (sp.gamma(1 + x), None),
}


@pytest.mark.parametrize("name", RADII)
def test_distance_to_the_nearest_singularity(name):
    expression, expected = RADII[name]
    places = singular_places(expression.subs({k: 2, g: 1, u_s: sp.Rational(1, 10)}), x)
    if expected is None:
        assert places is None
    else:
        assert np.abs(places).min() == pytest.approx(expected)


def test_entire_functions_have_no_singularity():
    assert singular_places(sp.exp(sp.sin(x)) + sp.cosh(x) * x, x).size == 0


REFUSED = {
    "beyond the electrode": (0.95, VALUES, "singular at u.* = 0.9 from rest"),
    "past pull-in": (0.1, VALUES | {"u_s": 0.4}, r"squared frequency .* -0.666667, not positive.*pull-in"),
    "position missing": (0.1, {"k": 2.0, "g": 1.0}, "missing parameter u_s"),
    "negative amplitude": (-0.1, VALUES, "expected positive numbers"),
    "text": ("large", VALUES, "expected numbers"),
    "stranger": ({v: 0.1}, VALUES, "expected .*u"),
    "array of parameters": (0.1, VALUES | {"k": [1.0, 2.0]}, "must be numbers"),
}


@pytest.mark.parametrize("name", REFUSED)
def test_refused(name):
    amplitude, values, message = REFUSED[name]
    with pytest.raises(ms.EvaluationError, match=f"(?s){message}"):
        ms.taylor_remainder(plate(2), amplitude, values)


def test_a_problem_is_no_expansion():
    with pytest.raises(ms.EvaluationError, match="pass an Expansion"):
        ms.taylor_remainder(plate(2).problem, 0.1)


def test_the_order_of_the_equations_does_not_matter():
    """Each equation is measured by the largest restoring force in it, whichever unknown it is written for."""
    pair = (u.diff(t, 2) + sp.sin(u) + u * v, v.diff(t, 2) + 4 * sp.sin(v) + u**2)
    there, back = (
        ms.taylor_remainder(ms.expand(ms.Problem(x, (u, v), ordering={u: 1, v: 1}), 2), 0.5).relative
        for x in (pair, pair[::-1])
    )
    assert there[0] == pytest.approx((math.sin(0.5) - 0.5 + 0.5**3 / 6) / 0.5, rel=1e-9)
    assert list(back) == list(there[::-1])


def test_fewer_modes_than_unknowns():
    """Coupled pendula, one mode carried: θ − sin θ of 0.5 in both, over the force 1.5 · 0.5."""
    pair = (u.diff(t, 2) + sp.sin(u) + (u - v) / 2, v.diff(t, 2) + sp.sin(v) + (v - u) / 2)
    result = ms.expand(ms.Problem(pair, (u, v), ordering={u: 1, v: 1}, modes=[0]), 2)
    found = ms.taylor_remainder(result, 0.5)
    assert list(found.relative) == pytest.approx([(math.sin(0.5) - 0.5 + 0.5**3 / 6) / 0.75] * 2, rel=1e-9)


def test_a_velocity_in_front_hides_no_singularity():
    """log(1 + u²) u' converges for |u| < 1 only."""
    result = ms.expand(ms.Problem(u.diff(t, 2) + u + sp.log(1 + u**2) * u.diff(t), u, ordering={u: 1}), 3)
    assert ms.taylor_remainder(result, 0.5).radius == pytest.approx((1.0,))
