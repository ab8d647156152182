"""(1 + εu²)u'' + εuu'² + u = 0: the small term multiplies the acceleration."""

from __future__ import annotations

from fractions import Fraction as F

import mpmath
import pytest
import sympy as sp

import multiscale as ms

from . import conservative
from .lindstedt import periodic_orbit
from .rational_series import taylor
from .rows import Row, over

t = sp.Symbol("t", real=True)
eps = sp.Symbol("epsilon", positive=True)
u = sp.Function("u")(t)
PROBLEM = ms.Problem((1 + eps * u**2) * u.diff(t, 2) + eps * u * u.diff(t) ** 2 + u, u, small=eps)

PEAK_FREQUENCY = (F(1), F(-1, 4), F(7, 64))
HIGH_ORDER = 10
LINDSTEDT_ORDER = 7

ROWS = [
    Row(
        name="frequency in the peak amplitude",
        problem=PROBLEM,
        order=2,
        quantity=lambda e: conservative.peak_frequency(e, 3),
        value=lambda _: PEAK_FREQUENCY,
        source="energy integral; complete elliptic integral of the second kind, NIST DLMF 19.2",
        confirmed="elliptic integral by Cauchy's formula; Lindstedt series",
    )
]


@over(ROWS)
def test_published_value(row: Row):
    assert row.difference() == []


def frequency(s):
    """ω = π/(2E(−s)), s = εA²: (1 + εu²)u'² + u² is conserved, so T = 4∫ √(1 + s sin²φ) dφ."""
    return mpmath.pi / (2 * mpmath.ellipe(-s))


def test_elliptic_integral_gives_the_published_value():
    assert tuple(taylor(frequency, 3)) == PEAK_FREQUENCY


@pytest.mark.parametrize("s", ["0.3", "1", "2.5"])
def test_elliptic_integral_is_the_energy_integral(s: str):
    with mpmath.workdps(30):
        x = mpmath.mpf(s)
        period = 4 * mpmath.quad(lambda p: mpmath.sqrt(1 + x * mpmath.sin(p) ** 2), [0, mpmath.pi / 2])
        assert abs(frequency(x) - 2 * mpmath.pi / period) < mpmath.mpf(10) ** -27


@pytest.fixture(scope="module")
def high() -> ms.Expansion:
    return ms.expand(PROBLEM, HIGH_ORDER)


def test_peak_frequency_is_the_elliptic_integral_to_high_order(high: ms.Expansion):
    assert conservative.peak_frequency(high, HIGH_ORDER + 1) == taylor(frequency, HIGH_ORDER + 1)


@pytest.fixture(scope="module")
def orbit():
    return periodic_orbit({(1, 2, 0, 1): F(1), (1, 1, 2, 0): F(1)}, LINDSTEDT_ORDER)


def test_lindstedt_frequency(high: ms.Expansion, orbit):
    assert conservative.fundamental_frequency(high, LINDSTEDT_ORDER + 1) == orbit.frequency


@pytest.mark.parametrize("k", [3, 5, 7])
def test_lindstedt_harmonics(high: ms.Expansion, orbit, k: int):
    assert conservative.harmonic_ratio(high, k, LINDSTEDT_ORDER + 1) == orbit.cosines(k)
