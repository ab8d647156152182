"""Simply supported beam with immovable ends: q'' + q + q³/4 = 0, q the centre amplitude over the radius of gyration.

The published table holds numbers of four decimals at amplitudes 1, 2, 3. The series in s = A²/4 converges for s < 1
only, which decides what the library can give there: at A = 1 the value by plain summation; at A = 2, on the circle of
convergence, and A = 3, far outside, by the Padé approximant with the same Taylor coefficients. That plain summation
fails at 2 and 3 is a test too.
"""

from __future__ import annotations

from fractions import Fraction as F

import mpmath
import pytest
import sympy as sp

import multiscale as ms

from . import conservative, elliptic
from .integration import maxima
from .rational_series import taylor
from .rows import Row, over

t = sp.Symbol("t", real=True)
q = sp.Function("q")(t)
PROBLEM = ms.Problem(q.diff(t, 2) + q + q**3 / 4, q, ordering={q: 1})

WOINOWSKY_KRIEGER = (
    "Woinowsky-Krieger, The effect of an axial force on the vibration of hinged bars, Journal of Applied Mechanics 17 "
    "(1950) 35, from memory, confirmed by computation"
)
# Amplitude over radius of gyration, frequency over linear frequency to four decimals.
TABLE = [(1, "1.0892"), (2, "1.3178"), (3, "1.6257")]
AMPLITUDES = [1, 2, 3]
HALF_UNIT = mpmath.mpf("0.00005")

# ω as a series in the square of the peak, ε counting two powers for each.
ORDER = 20
COUNT = ORDER // 2 + 1

ROWS = [
    Row(
        name="frequency in the peak amplitude",
        problem=PROBLEM,
        order=8,
        quantity=lambda e: conservative.peak_frequency(e, 5),
        value=lambda _: (F(1), F(3, 32), F(-21, 4096), F(81, 131072), F(-6549, 67108864)),
        source=f"{WOINOWSKY_KRIEGER}: cubic oscillator with coefficient 1/4",
        confirmed="elliptic integral",
    )
]


@over(ROWS)
def test_published_value(row: Row):
    assert row.difference() == []


def exact(amplitude: int):
    return elliptic.cubic_frequency(mpmath.mpf(amplitude) ** 2 / 4)


@pytest.mark.parametrize(("amplitude", "published"), TABLE)
def test_elliptic_integral_gives_the_table(amplitude: int, published: str):
    assert abs(exact(amplitude) - mpmath.mpf(published)) < HALF_UNIT


@pytest.mark.parametrize(("amplitude", "published"), TABLE)
def test_integration_gives_the_table(amplitude: int, published: str):
    times, heights = maxima(lambda _, y: [y[1], -y[0] - y[0] ** 3 / 4], [float(amplitude), 0.0], 30.0)
    assert heights == pytest.approx(amplitude, rel=1e-9)
    # The first maximum may or may not be the start itself; the others are a period apart.
    frequency = 2 * mpmath.pi * (len(times) - 2) / (times[-1] - times[1])
    assert abs(frequency - mpmath.mpf(published)) < HALF_UNIT


@pytest.fixture(scope="module")
def series() -> list[F]:
    return conservative.peak_frequency(ms.expand(PROBLEM, ORDER), COUNT)


def test_series_is_that_of_the_elliptic_integral(series: list[F]):
    assert series == taylor(lambda x: elliptic.cubic_frequency(x / 4), COUNT)


def partial_sum(series: list[F], amplitude: int):
    return mpmath.fsum(mpmath.mpf(c.numerator) / c.denominator * amplitude ** (2 * n) for n, c in enumerate(series))


def rational_function(series: list[F], amplitude: int):
    """The [5/5] approximant, whose poles stand in for the branch cut."""
    with mpmath.workdps(40):
        above, below = mpmath.pade([mpmath.mpf(c.numerator) / c.denominator for c in series], 5, 5)
        x = mpmath.mpf(amplitude) ** 2
        return mpmath.polyval(above[::-1], x) / mpmath.polyval(below[::-1], x)


def test_plain_sum_gives_the_table_at_amplitude_one(series: list[F]):
    amplitude, published = TABLE[0]
    assert abs(partial_sum(series, amplitude) - mpmath.mpf(published)) < HALF_UNIT


@pytest.mark.parametrize("amplitude", [2, 3])
def test_plain_sum_does_not_give_the_table_beyond_its_radius(series: list[F], amplitude: int):
    assert abs(partial_sum(series, amplitude) - exact(amplitude)) > 10 * HALF_UNIT


@pytest.mark.parametrize(("amplitude", "published"), TABLE)
def test_rational_function_gives_the_table(series: list[F], amplitude: int, published: str):
    assert abs(rational_function(series, amplitude) - mpmath.mpf(published)) < HALF_UNIT


@pytest.mark.parametrize(("amplitude", "error"), [(1, "1e-12"), (2, "1e-8"), (3, "5e-6")])
def test_digits_of_the_rational_function(series: list[F], amplitude: int, error: str):
    assert abs(rational_function(series, amplitude) - exact(amplitude)) < mpmath.mpf(error)


# By the backbone of the driven beam, in the amplitude of the fundamental that has the published peak.

BACKBONE_ORDER = 10


@pytest.fixture(scope="module")
def backbone_series() -> list[mpmath.mpf]:
    """ω of the driven problem's backbone as a series in a², ε counting one power for each."""
    eps, f, drive = sp.symbols("epsilon f Omega", positive=True)
    sigma = sp.Symbol("sigma", real=True)
    equation = q.diff(t, 2) + q + eps * (q**3 / 4 - f * sp.cos(drive * t))
    driven = ms.Problem(equation, q, small=eps, resonances={drive: 1 + eps * sigma})
    expansion = ms.expand(driven, BACKBONE_ORDER)
    (a,) = expansion.symbols.a
    curve = sp.Poly(ms.backbone(expansion).subs(eps, 1), a)
    found = [curve.coeff_monomial(a ** (2 * n)) for n in range(BACKBONE_ORDER + 1)]
    return [mpmath.mpf(c.p) / c.q for c in found]


@pytest.mark.parametrize(
    ("row", "plain", "rational"), [(TABLE[0], "1e-10", "1e-14"), (TABLE[1], "3e-5", "1e-9"), (TABLE[2], None, "1e-6")]
)
def test_backbone_gives_the_table(backbone_series, row, plain: str | None, rational: str):
    """Through ε¹⁰: summed plainly the table's four decimals at 1 and 2, nothing at 3, outside the radius; by the [5/5]
    approximant at all three."""
    amplitude, published = row
    with mpmath.workdps(30):
        x = (amplitude * elliptic.cubic_fundamental_ratio(mpmath.mpf(amplitude) ** 2 / 4)) ** 2
        wanted = exact(amplitude)
        summed = abs(mpmath.polyval(backbone_series[::-1], x) - wanted)
        above, below = mpmath.pade(backbone_series, 5, 5)
        approximant = mpmath.polyval(above[::-1], x) / mpmath.polyval(below[::-1], x)
        assert abs(approximant - wanted) < mpmath.mpf(rational)
        assert abs(approximant - mpmath.mpf(published)) < HALF_UNIT
        if plain is None:
            assert summed > 0.01
        else:
            assert summed < mpmath.mpf(plain)
