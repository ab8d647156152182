"""Every term of the slow flow and of the fields matters: each is altered in turn, and every alteration must be found.

A term is a monomial in amplitudes and parameters times a wave. It is multiplied by 8/7, its sign is changed, and it is
dropped. Terms at the natural frequency, which leave no residual at the last level, must be found by the convention.
"""

from __future__ import annotations

from functools import cache

import pytest
import sympy as sp
from support.claims import examination_of, field_raised, flow_raised, terms

import multiscale as ms

t = sp.Symbol("t", real=True)
eps, mu, alpha, beta, f, h, sigma, w, w1, w2, Om = sp.symbols(
    "epsilon mu alpha beta f h sigma omega omega_1 omega_2 Omega", positive=True
)
u, v = (sp.Function(name)(t) for name in "uv")
plain = u.diff(t, 2) + w**2 * u

SYSTEMS = {
    "self-excited": (u.diff(t, 2) + u + eps * (u**2 - 1) * u.diff(t), u, {}, 4),
    "quadratic and cubic": (plain + eps * alpha * u**2 + eps**2 * beta * u**3, u, {}, 4),
    "nonlinear inertia": (plain + eps * alpha * (u**2 * u.diff(t, 2) + u * u.diff(t) ** 2), u, {}, 3),
    "primary resonance": (
        plain + eps * (2 * mu * u.diff(t) + alpha * u**3 - f * sp.cos(Om * t)),
        u,
        {Om: w + eps * sigma},
        3,
    ),
    "one to two": (
        (
            u.diff(t, 2) + w1**2 * u + eps * (mu * u.diff(t) + alpha * u * v),
            v.diff(t, 2) + w2**2 * v + eps * beta * u**2,
        ),
        (u, v),
        {w2: 2 * w1 + eps * sigma},
        3,
    ),
    "parametric": (plain + eps * (h * u * sp.cos(Om * t) + alpha * u**3), u, {Om: 2 * w + eps * sigma}, 3),
}
ALTERATIONS = {"times 8/7": sp.Rational(1, 7), "other sign": -sp.Integer(2), "dropped": -sp.Integer(1)}


@cache
def examined(name):
    equations, unknowns, resonances, order = SYSTEMS[name]
    problem = ms.Problem(equations, unknowns, small=eps, resonances=resonances)
    return examination_of(ms.expand(problem, order))


@pytest.mark.parametrize("name", SYSTEMS)
def test_the_claim_itself_stands(name):
    examination = examined(name)
    assert examination.stands(examination.claim)
    assert not examination.departures(examination.claim)


@pytest.mark.parametrize("alteration", ALTERATIONS)
@pytest.mark.parametrize("name", SYSTEMS)
def test_every_term_of_the_fields_matters(name, alteration):
    examination, share = examined(name), ALTERATIONS[alteration]
    claim, checked, missed = examination.claim, 0, []
    for n in range(1, claim.order + 1):
        for k, field in enumerate(claim.fields[n]):
            for term in terms(field):
                checked += 1
                if examination.stands(field_raised(claim, n, share * term, k)):
                    missed.append((n, k, term))
    assert checked
    assert not missed


@pytest.mark.parametrize("alteration", ALTERATIONS)
@pytest.mark.parametrize("name", SYSTEMS)
def test_every_term_of_the_slow_flow_matters(name, alteration):
    examination, share = examined(name), ALTERATIONS[alteration]
    claim, checked, missed = examination.claim, 0, []
    for n in range(1, claim.order + 1):
        for j, change in enumerate(claim.flow[n - 1]):
            for term in terms(change):
                checked += 1
                if examination.stands(flow_raised(claim, n, share * term, j)):
                    missed.append((n, j, term))
    assert checked
    assert not missed


def own_wave(claim, mode):
    """The factor of A in the leading field of a mode."""
    return terms(claim.fields[0][mode].subs(sp.conjugate(claim.amplitudes[mode]), 0))[0]


@pytest.mark.parametrize("power", [0, 1, 2])
@pytest.mark.parametrize("name", SYSTEMS)
def test_terms_at_the_natural_frequency_are_found_by_the_convention_alone(name, power):
    examination = examined(name)
    claim = examination.claim
    for mode, A in enumerate(claim.amplitudes):
        half = sp.Rational(1, 1000) * own_wave(claim, mode) * (A * sp.conjugate(A)) ** power
        both = half + sp.conjugate(half)
        altered = field_raised(claim, claim.order, both, mode)
        assert examination.stands(altered)
        (departure,) = examination.departures(altered)
        assert f"level {claim.order}" in departure
        # One half alone leaves a complex field, which no residual sees at the last level either.
        assert examination.departures(field_raised(claim, claim.order, both - half, mode))


@pytest.mark.parametrize("name", SYSTEMS)
def test_terms_at_the_natural_frequency_below_the_last_level_change_the_slow_flow(name):
    """There they do leave a residual: U_n with another amplitude needs another D_{n+1}A."""
    examination = examined(name)
    claim, A = examination.claim, examination.claim.amplitudes[0]
    half = sp.Rational(1, 10) * own_wave(claim, 0) * A * sp.conjugate(A)
    altered = field_raised(claim, 1, half + sp.conjugate(half), 0)
    assert not examination.stands(altered)
    assert examination.departures(altered)
