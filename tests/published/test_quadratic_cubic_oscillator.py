"""u'' + ω_0²u + εα_2u² + ε²α_3u³ = 0: frequency through the fourth order and the drift."""

from __future__ import annotations

from fractions import Fraction as F

import pytest
import sympy as sp

import multiscale as ms

from .lindstedt import Orbit, periodic_orbit
from .rational_series import fractions
from .rows import Row, difference, over

t = sp.Symbol("t", real=True)
eps, w0 = sp.symbols("epsilon omega_0", positive=True)
alpha2, alpha3 = sp.symbols("alpha_2 alpha_3", real=True)
u = sp.Function("u")(t)
PROBLEM = ms.Problem(u.diff(t, 2) + w0**2 * u + eps * alpha2 * u**2 + eps**2 * alpha3 * u**3, u, small=eps)
UNIT = ms.Problem(u.diff(t, 2) + u + eps * alpha2 * u**2 + eps**2 * alpha3 * u**3, u, small=eps)

SECOND = (9 * alpha3 * w0**2 - 10 * alpha2**2) / (24 * w0**3)
FOURTH = (
    -sp.Rational(485, 1728) * alpha2**4 + sp.Rational(173, 192) * alpha2**2 * alpha3 - sp.Rational(15, 256) * alpha3**2
)
DRIFT = -alpha2 / (2 * w0**2)

NAYFEH_MOOK = "Nayfeh & Mook, Nonlinear Oscillations, 1979, section 2.3, from memory, confirmed by computation"

HIGH_ORDER = 6


def mean(expression: sp.Expr) -> sp.Expr:
    """The part without harmonics of a trigonometric sum."""
    return sp.Add(*(x for x in sp.Add.make_args(sp.expand(expression)) if not x.has(sp.cos, sp.sin)))


ROWS = [
    Row(
        name="frequency through order 2",
        problem=PROBLEM,
        order=2,
        quantity=lambda e: e.frequency_corrections(),
        value=lambda s: (w0, 0, s.a[0] ** 2 * SECOND),
        source=NAYFEH_MOOK,
        confirmed="Lindstedt series at rational parameters",
    ),
    Row(
        name="drift",
        problem=PROBLEM,
        order=2,
        quantity=lambda e: mean(e.solution("polar", order=1)[u]),
        value=lambda s: eps * s.a[0] ** 2 * DRIFT,
        source=NAYFEH_MOOK,
        confirmed="Lindstedt series at rational parameters",
    ),
    Row(
        name="frequency at order 4, unit natural frequency",
        problem=UNIT,
        order=4,
        quantity=lambda e: e.frequency_corrections()[3:],
        value=lambda s: (0, s.a[0] ** 4 * FOURTH),
        source="Lindstedt series in exact rational arithmetic",
        confirmed="Lindstedt series at five rational parameters, more than the polynomial has coefficients",
    ),
    Row(
        name="frequency at order 4, symbolic natural frequency",
        problem=PROBLEM,
        order=4,
        quantity=lambda e: e.frequency_corrections()[4].subs(w0, 1),
        value=lambda s: s.a[0] ** 4 * FOURTH,
        source="Lindstedt series in exact rational arithmetic",
        confirmed="Lindstedt series at five rational parameters, more than the polynomial has coefficients",
    ),
]

# ω_0, α_2, α_3
UNIT_POINTS = [(F(1), F(1), F(0)), (F(1), F(0), F(1)), (F(1), F(1), F(1)), (F(1), F(2), F(-3)), (F(1), F(-1, 3), F(5))]
POINTS = [*UNIT_POINTS, (F(3, 2), F(1, 3), F(5, 7)), (F(2), F(-3), F(1, 2))]


def lindstedt(point: tuple[F, F, F], order: int) -> Orbit:
    natural, quadratic, cubic = point
    return periodic_orbit({(1, 2, 0, 0): quadratic, (2, 3, 0, 0): cubic}, order, natural=natural)


def at(expression: sp.Expr, point: tuple[F, F, F]) -> sp.Expr:
    return expression.subs(dict(zip((w0, alpha2, alpha3), map(sp.Rational, point), strict=True)))


@over(ROWS)
def test_published_value(row: Row):
    assert row.difference() == []


def test_first_order_alone_gives_the_drift_and_warns_about_the_frequency():
    with pytest.warns(ms.OrderingWarning, match="quadratic"):
        expansion = ms.expand(PROBLEM, order=1)
    (a,) = expansion.symbols.a
    assert difference(expansion.frequency_corrections(), (w0, 0)) == []
    assert difference(mean(expansion.solution("polar")[u]), eps * a**2 * DRIFT) == []


@pytest.mark.parametrize("point", POINTS, ids=str)
def test_lindstedt_gives_the_published_second_order(point: tuple[F, F, F]):
    assert lindstedt(point, 2).frequency == fractions([at(w0, point), 0, at(SECOND, point)])


@pytest.mark.parametrize("point", POINTS, ids=str)
def test_lindstedt_gives_the_published_drift(point: tuple[F, F, F]):
    assert lindstedt(point, 1).cosines(0) == fractions([0, at(DRIFT, point)])


@pytest.mark.parametrize("point", UNIT_POINTS, ids=str)
def test_lindstedt_gives_the_published_fourth_order(point: tuple[F, F, F]):
    assert lindstedt(point, 4).frequency[4] == fractions([at(FOURTH, point)])[0]


@pytest.fixture(scope="module")
def high() -> ms.Expansion:
    return ms.expand(PROBLEM, HIGH_ORDER)


@pytest.mark.parametrize("point", POINTS, ids=str)
def test_frequency_agrees_with_lindstedt_to_high_order(high: ms.Expansion, point: tuple[F, F, F]):
    (a,) = high.symbols.a
    found = fractions([at(c.subs(a, 1), point) for c in high.frequency_corrections()])
    assert found == lindstedt(point, HIGH_ORDER).frequency


@pytest.mark.parametrize("point", POINTS, ids=str)
def test_drift_agrees_with_lindstedt_to_high_order(high: ms.Expansion, point: tuple[F, F, F]):
    (a,) = high.symbols.a
    drift = at(mean(high.solution("polar")[u]).subs(a, 1), point)
    found = fractions([sp.expand(drift).coeff(eps, n) for n in range(HIGH_ORDER + 1)])
    assert found == lindstedt(point, HIGH_ORDER).cosines(0)
