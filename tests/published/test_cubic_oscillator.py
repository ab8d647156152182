"""u'' + u + εu³ = 0: frequency in the peak and in the fundamental amplitude, and the third harmonic."""

from __future__ import annotations

from fractions import Fraction as F
from functools import partial

import mpmath
import pytest
import sympy as sp

import multiscale as ms

from . import conservative, elliptic
from .lindstedt import periodic_orbit
from .rational_series import Series, taylor
from .rows import Row, over

t = sp.Symbol("t", real=True)
eps = sp.Symbol("epsilon", positive=True)
u = sp.Function("u")(t)
PROBLEM = ms.Problem(u.diff(t, 2) + u + eps * u**3, u, small=eps)

PEAK_FREQUENCY = (F(1), F(3, 8), F(-21, 256), F(81, 2048), F(-6549, 262144))
FREQUENCY = (F(1), F(3, 8), F(-15, 256), F(123, 8192), F(-921, 262144))
THIRD_HARMONIC = (F(0), F(1, 32), F(-21, 1024), F(417, 32768))

HIGH_ORDER = 12

ROWS = [
    Row(
        name="frequency in the peak amplitude",
        problem=PROBLEM,
        order=4,
        quantity=lambda e: conservative.peak_frequency(e, 5),
        value=lambda _: PEAK_FREQUENCY,
        source="Nayfeh & Mook, Nonlinear Oscillations, 1979, section 2.3, from memory, confirmed by computation; "
        "NIST DLMF chapters 19 and 22",
        confirmed="elliptic integral; its closed form by quadrature of the energy integral",
    ),
    Row(
        name="frequency in the fundamental amplitude",
        problem=PROBLEM,
        order=4,
        quantity=lambda e: e.frequency_corrections(),
        value=lambda s: tuple(sp.Rational(c) * s.a[0] ** (2 * n) for n, c in enumerate(FREQUENCY)),
        source="Fourier series of cn, NIST DLMF 22.11.2",
        confirmed="elliptic integral and nome; Lindstedt series",
    ),
    Row(
        name="third harmonic over fundamental",
        problem=PROBLEM,
        order=3,
        quantity=lambda e: conservative.harmonic_ratio(e, 3, 4),
        value=lambda _: THIRD_HARMONIC,
        source="Fourier series of cn, NIST DLMF 22.11.2",
        confirmed="nome; Lindstedt series",
    ),
]


@over(ROWS)
def test_published_value(row: Row):
    assert row.difference() == []


@pytest.mark.parametrize(
    ("series", "published"),
    [
        pytest.param(lambda: taylor(elliptic.cubic_frequency, 5), PEAK_FREQUENCY, id="peak"),
        pytest.param(lambda: elliptic.cubic_in_fundamental(elliptic.cubic_frequency, 5), FREQUENCY, id="fundamental"),
        pytest.param(
            lambda: elliptic.cubic_in_fundamental(partial(elliptic.cubic_harmonic_ratio, 3), 4),
            THIRD_HARMONIC,
            id="third harmonic",
        ),
    ],
)
def test_elliptic_functions_give_the_published_value(series, published: Series):
    assert tuple(series()) == published


@pytest.mark.parametrize("s", ["0.3", "1", "2.5"])
def test_closed_form_is_the_energy_integral(s: str):
    """ω = 2π/T with T = 4∫ dφ / √(1 + s(1 + sin²φ)/2), from u = A sin φ in the energy."""
    with mpmath.workdps(30):
        x = mpmath.mpf(s)
        period = 4 * mpmath.quad(lambda p: 1 / mpmath.sqrt(1 + x * (1 + mpmath.sin(p) ** 2) / 2), [0, mpmath.pi / 2])
        assert abs(elliptic.cubic_frequency(x) - 2 * mpmath.pi / period) < mpmath.mpf(10) ** -27


@pytest.fixture(scope="module")
def high() -> ms.Expansion:
    return ms.expand(PROBLEM, HIGH_ORDER)


def test_peak_frequency_is_the_elliptic_integral_to_high_order(high: ms.Expansion):
    count = HIGH_ORDER + 1
    assert conservative.peak_frequency(high, count) == taylor(elliptic.cubic_frequency, count)


def test_frequency_is_the_elliptic_integral_to_high_order(high: ms.Expansion):
    count = HIGH_ORDER + 1
    exact = elliptic.cubic_in_fundamental(elliptic.cubic_frequency, count)
    assert conservative.fundamental_frequency(high, count) == exact


@pytest.mark.parametrize("k", [3, 5, 7, 9])
def test_harmonics_are_those_of_cn(high: ms.Expansion, k: int):
    count = HIGH_ORDER + 1
    exact = elliptic.cubic_in_fundamental(partial(elliptic.cubic_harmonic_ratio, k), count)
    assert conservative.harmonic_ratio(high, k, count) == exact


@pytest.fixture(scope="module")
def orbit():
    return periodic_orbit({(1, 3, 0, 0): F(1)}, 8)


def test_lindstedt_frequency(high: ms.Expansion, orbit):
    assert conservative.fundamental_frequency(high, 9) == orbit.frequency


@pytest.mark.parametrize("k", [3, 5, 7])
def test_lindstedt_harmonics(high: ms.Expansion, orbit, k: int):
    assert conservative.harmonic_ratio(high, k, 9) == orbit.cosines(k)
