"""Primary resonance of u'' + 2ε²μu' + ω²u + εα_2u² + ε²α_3u³ = ε²f cos Ωt, Ω = ω + ε²σ.

The same problem with orders carried by the unknown and the parameters: u of order 1, μ and σ of order 2, f of order 3.
"""

from __future__ import annotations

import numpy as np
import pytest
import sympy as sp

import multiscale as ms

from .averaging import mean
from .integration import slope
from .motion import motion_errors, turned
from .rows import Row, difference, over

t = sp.Symbol("t", real=True)
eps, w, mu, f = sp.symbols("epsilon omega_0 mu f", positive=True)
alpha2, alpha3, sigma, theta = sp.symbols("alpha_2 alpha_3 sigma theta", real=True)
Om = sp.Symbol("Omega", positive=True)
u = sp.Function("u")(t)

ORDERED = ms.Problem(
    u.diff(t, 2) + 2 * mu * u.diff(t) + w**2 * u + alpha2 * u**2 + alpha3 * u**3 - f * sp.cos(Om * t),
    u,
    ordering={u: 1, mu: 2, f: 3, sigma: 2},
    resonances={Om: w + sigma},
)
POWERS = ms.Problem(
    u.diff(t, 2) + w**2 * u + eps * alpha2 * u**2 + eps**2 * (2 * mu * u.diff(t) + alpha3 * u**3 - f * sp.cos(Om * t)),
    u,
    small=eps,
    resonances={Om: w + eps**2 * sigma},
)
EFFECTIVE = (9 * alpha3 * w**2 - 10 * alpha2**2) / (24 * w**3)
NAYFEH_MOOK = "Nayfeh & Mook, Nonlinear Oscillations, 1979, section 4.2, from memory, confirmed by computation"
BALANCE = "harmonic balance of the second order; direct integration of the equation of motion"


def polar(e: ms.Expansion) -> tuple[sp.Expr, sp.Expr]:
    """(da/dt, a dγ/dt)."""
    (a,), (gamma,) = e.symbols.a, e.symbols.gamma
    return e.slow_flow.polar[a], a * e.slow_flow.polar[gamma]


def relation(e: ms.Expansion) -> sp.Expr:
    (gamma,) = e.symbols.gamma
    rate, turn = (sp.expand(x / e.problem.small**2) for x in polar(e))
    force = rate.coeff(sp.sin(gamma))
    assert difference(turn.coeff(sp.cos(gamma)), force) == []
    rest = [x.subs({sp.sin(gamma): 0, sp.cos(gamma): 0}) for x in (rate, turn)]
    return rest[0] ** 2 + rest[1] ** 2 - force**2


def rows(name: str, stated: ms.Problem) -> list[Row]:
    small = stated.small
    return [
        Row(
            f"{name}: slow flow",
            stated,
            2,
            polar,
            lambda s: (
                small**2 * (-mu * s.a[0] + f / (2 * w) * sp.sin(s.gamma[0])),
                small**2 * (sigma * s.a[0] - EFFECTIVE * s.a[0] ** 3 + f / (2 * w) * sp.cos(s.gamma[0])),
            ),
            NAYFEH_MOOK,
            BALANCE,
        ),
        Row(
            f"{name}: frequency response",
            stated,
            2,
            relation,
            lambda s: (mu**2 + (sigma - EFFECTIVE * s.a[0] ** 2) ** 2) * s.a[0] ** 2 - f**2 / (4 * w**2),
            NAYFEH_MOOK,
            BALANCE,
        ),
    ]


@over(rows("ordering", ORDERED) + rows("powers", POWERS))
def test_published_value(row: Row):
    assert row.difference() == []


@pytest.fixture(scope="module")
def both() -> tuple[ms.Expansion, ms.Expansion]:
    return ms.expand(ORDERED, 4), ms.expand(POWERS, 4)


@pytest.mark.parametrize("n", range(5))
def test_both_statements_agree_beyond_the_published_order(both, n: int):
    ordered, powers = both
    (A,) = powers.symbols.A
    assert difference(ordered.levels[n].corrections[u], powers.levels[n].corrections[u]) == []
    if n:
        assert difference(ordered.slow_flow.by_scale[n][A], powers.slow_flow.by_scale[n][A]) == []


def test_harmonic_balance_gives_the_published_relation():
    """Steady motion u = a cos θ + ε(c_0 + c_2 cos 2θ): the equation at ε, and its fundamental at ε².

    θ = Ωt − γ; c and s are cos γ and sin γ.
    """
    a, c0, c2, cosine, sine = sp.symbols("a c_0 c_2 c s", real=True)
    leading, next_one = a * sp.cos(theta), c0 + c2 * sp.cos(2 * theta)
    first = w**2 * (next_one + next_one.diff(theta, 2)) + alpha2 * leading**2
    known = sp.solve([mean(first, [theta]), mean(first * sp.cos(2 * theta), [theta])], [c0, c2], dict=True)[0]
    assert sp.simplify(sp.expand((first.subs(known)).rewrite(sp.exp))) == 0
    second = (
        2 * w * sigma * leading.diff(theta, 2)
        + 2 * mu * w * leading.diff(theta)
        + 2 * alpha2 * leading * next_one.subs(known)
        + alpha3 * leading**3
        - f * (sp.cos(theta) * cosine - sp.sin(theta) * sine)
    )
    along, across = (mean(second * wave, [theta]) / w for wave in (sp.cos(theta), sp.sin(theta)))
    published = (-mu * a + f / (2 * w) * sine, sigma * a - EFFECTIVE * a**3 + f / (2 * w) * cosine)
    assert difference((across, -along), published) == []


# D_1 and D_3 vanish, so motions are followed over t = O(1/ε²), on which the error of order N is O(ε^N) for even N.

SMALL = (0.2, 0.14, 0.1)
HORIZON = 1.5
VALUES = {mu: 0.25, f: 0.9, sigma: 0.3, w: 1.1, alpha2: 0.7, alpha3: 0.5}
BOUNDS = {2: 0.2, 4: 0.1}


def errors(order: int, change=None) -> list[float]:
    eliminated = {Om: w + eps**2 * sigma}
    return motion_errors(ms.expand(POWERS, order), VALUES, eliminated, (0.5, -0.4), SMALL, HORIZON, change, power=2)


@pytest.mark.parametrize("order", BOUNDS)
def test_motion_error(order: int):
    found = errors(order)
    assert slope(SMALL, found) > order - 0.15
    assert found[-1] < BOUNDS[order] * SMALL[-1] ** order


@pytest.mark.parametrize("order", BOUNDS)
def test_a_changed_coefficient_is_seen_by_integration(order: int):
    assert slope(SMALL, errors(order, turned(order))) < order - 1.5


@pytest.mark.parametrize("time", [0.0, 3.7])
@pytest.mark.parametrize(
    "function",
    [lambda e: e.to_numpy(), lambda e: e.to_numpy(derivative=1), lambda e: e.slow_flow.to_numpy()],
    ids=["displacement", "velocity", "slow flow"],
)
def test_the_ordered_statement_in_numbers(both, function, time: float):
    """The user's own u, with ε left at its value 1: parameters carry their size, and so does the state."""
    small, state = 0.1, np.array([0.5, -0.4])
    own = {mu: small**2 * 0.25, f: small**3 * 0.9, sigma: small**2 * 0.3, w: 1.1, alpha2: 0.7, alpha3: 0.5}
    ordered, powers = (function(e) for e in both)
    x = ordered.bind(own)(time, small * state)
    y = powers.bind({**VALUES, eps: small})(time, state)
    assert x == pytest.approx(small * y, rel=1e-11)
