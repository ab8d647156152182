"""Unknowns measured from a state of rest that is given by roots or by floats."""

from __future__ import annotations

import math

import mpmath
import pytest
import sympy as sp

import multiscale as ms

t = sp.Symbol("t", real=True)
alpha, beta, mu, f, Om = sp.symbols("alpha beta mu f Omega", positive=True)
sigma = sp.Symbol("sigma", real=True)
u, v = sp.Function("u")(t), sp.Function("v")(t)
well = u.diff(t, 2) - alpha * u + beta * u**3


@pytest.mark.parametrize("side", [1, -1])
def test_a_double_well_about_a_root(side):
    """u'' + 2αu ± 3√(αβ) u² + βu³ = 0, by the formula for quadratic and cubic terms (9α_3ω² − 10α_2²)a²/(24ω³)."""
    problem = ms.Problem(well, u, ordering={u: 1}, about={u: side * sp.sqrt(alpha / beta)})
    result = ms.expand(problem, 2)
    w = sp.sqrt(2 * alpha)
    wanted = (9 * beta * w**2 - 10 * 9 * alpha * beta) / (24 * w**3)
    assert sp.simplify(result.frequency_corrections()[2] / result.symbols.a[0] ** 2 - wanted) == 0
    assert ms.certify(result).passed


def test_a_driven_double_well():
    equation = well + mu * u.diff(t) - f * sp.cos(Om * t)
    problem = ms.Problem(
        equation,
        u,
        ordering={u: 1, mu: 2, f: 3, sigma: 2},
        about={u: sp.sqrt(alpha / beta)},
        resonances={Om: sp.sqrt(2 * alpha) + sigma},
    )
    assert ms.certify(ms.expand(problem, 2)).passed


def test_a_float_that_is_a_state_of_rest():
    """sin u = 0.3 at u = asin 0.3: ω² = cos u."""
    problem = ms.Problem(u.diff(t, 2) + sp.sin(u) - 0.3, u, ordering={u: 1}, about={u: math.asin(0.3)})
    assert float(problem.natural_frequencies[0]) == pytest.approx((1 - 0.09) ** 0.25, rel=1e-14)


@pytest.mark.parametrize("position", [0.3047, math.asin(0.3) * (1 + 1e-9)])
def test_a_float_beside_the_state_of_rest_is_refused(position):
    with pytest.raises(ms.ProblemError, match="is left"):
        ms.Problem(u.diff(t, 2) + sp.sin(u) - 0.3, u, ordering={u: 1}, about={u: position})


def test_what_states_of_rest_finds_can_be_stated():
    equation = u.diff(t, 2) + sp.sin(u) - 0.3 * sp.cos(u) ** 2
    (state,) = ms.states_of_rest(equation, u)
    result = ms.expand(ms.Problem(equation, u, ordering={u: 1}, about=state.position), 2)
    assert ms.certify(result).passed
    place = mpmath.findroot(lambda x: mpmath.sin(x) - 0.3 * mpmath.cos(x) ** 2, 0.3)
    slopes = [mpmath.diff(lambda x: mpmath.sin(x) - 0.3 * mpmath.cos(x) ** 2, place, n) for n in (1, 2, 3)]
    w, second, third = mpmath.sqrt(slopes[0]), slopes[1] / 2, slopes[2] / 6
    found = [float(x.subs(result.symbols.a[0], 1)) for x in result.frequency_corrections()]
    assert found[0] == pytest.approx(float(w), rel=1e-12)
    assert found[2] == pytest.approx(float((9 * third * w**2 - 10 * second**2) / (24 * w**3)), rel=1e-7)


def test_drives_inside_small_forces_belong_to_the_problem():
    """They first appear at ε³, beyond what an expansion to order 1 needs."""
    equation = u.diff(t, 2) + 2 * mu * u.diff(t) + (1 + f * sp.cos(Om * t)) * sp.sin(u)
    ordering, relation = {u: 1, mu: 2, f: 2, sigma: 2}, {Om: 2 + sigma}
    problem = ms.Problem(equation, u, ordering=ordering, resonances=relation)
    assert problem.drives == (Om,)
    polynomial = equation.subs(sp.sin(u), u - u**3 / 6)
    by_hand = ms.Problem(sp.expand(polynomial), u, ordering=ordering, resonances=relation)
    assert ms.expand(problem, 2).equals(ms.expand(by_hand, 2))
    assert ms.certify(ms.expand(problem, 2)).passed


def test_a_wave_that_holds_the_unknown():
    """f sin(u − Ωt), a travelling field, first felt at ε³."""
    force = u.diff(t, 2) + sp.sin(u) + f * sp.sin(u - Om * t)
    ordering, relation = {u: 1, f: 3, sigma: 2}, {Om: 1 + sigma}
    problem = ms.Problem(force, u, ordering=ordering, resonances=relation)
    by_hand = ms.Problem(
        u.diff(t, 2) + u - u**3 / 6 + f * (u * sp.cos(Om * t) - sp.sin(Om * t)),
        u,
        ordering=ordering,
        resonances=relation,
    )
    assert ms.expand(problem, 2).equals(ms.expand(by_hand, 2))


def test_support_motion_inside_a_sine():
    problem = ms.Problem(
        u.diff(t, 2) + 2 * mu * u.diff(t) + sp.sin(u - f * sp.cos(Om * t)),
        u,
        ordering={u: 1, mu: 2, f: 3, sigma: 2},
        resonances={Om: 1 + sigma},
    )
    assert ms.certify(ms.expand(problem, 2)).passed
    assert ms.expand(problem, 1).slow_flow.polar[ms.expand(problem, 1).symbols.a[0]] == 0


def test_one_mode_of_coupled_pendula_is_compared_from_its_slow_state():
    pytest.importorskip("scipy.integrate")
    pair = (u.diff(t, 2) + sp.sin(u) + (u - v) / 2, v.diff(t, 2) + sp.sin(v) + (v - u) / 2)
    result = ms.expand(ms.Problem(pair, (u, v), ordering={u: 1, v: 1}, modes=[0]), 2)
    found = ms.compare(result, {}, [0.5, 0.0], [0.6, 0.4], 1.0, power=2)
    assert found.order > 1.8
