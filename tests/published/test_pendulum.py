"""θ'' + sin θ = 0, the sine as its Taylor polynomial: the frequency in the peak and in the fundamental amplitude.

Two statements of one problem: θ = √ε u with the powers of ε written, and θ itself small by `ordering`. The terms
through θ⁷ decide the frequency through the sixth power of the amplitude.
"""

from __future__ import annotations

from fractions import Fraction as F

import mpmath
import pytest
import sympy as sp

import multiscale as ms

from . import conservative
from .rational_series import Series, in_terms_of, product, reciprocal, taylor
from .rows import Row, over

t = sp.Symbol("t", real=True)
eps = sp.Symbol("epsilon", positive=True)
u = sp.Function("u")(t)
theta = sp.Function("theta")(t)


def written(degree: int) -> ms.Problem:
    sine = sum((-eps) ** n * u ** (2 * n + 1) / sp.factorial(2 * n + 1) for n in range((degree + 1) // 2))
    return ms.Problem(u.diff(t, 2) + sine, u, small=eps)


def ordered(degree: int) -> ms.Problem:
    sine = sum((-1) ** n * theta ** (2 * n + 1) / sp.factorial(2 * n + 1) for n in range((degree + 1) // 2))
    return ms.Problem(theta.diff(t, 2) + sine, theta, ordering={theta: 1})


PEAK_FREQUENCY = (F(1), F(-1, 16), F(1, 3072), F(-23, 737280))
FREQUENCY = (F(1), F(-1, 16), F(1, 1024), F(-1, 65536))
PERIOD = (F(1), F(1, 16), F(11, 3072), F(173, 737280))

DLMF = "NIST DLMF 22.19(i), from memory, confirmed by computation"
THETA_FUNCTIONS = "series in the nome with integer coefficients; elliptic integral by Cauchy's formula"

# name, problem, order: with the ordering, θ² counts as two powers of ε.
FORMS = [("powers written", written(7), 3), ("ordering", ordered(7), 6)]

ROWS = [
    Row(
        name=f"{quantity}, {form}",
        problem=problem,
        order=order,
        quantity=found,
        value=lambda _, published=published: published,
        source=source,
        confirmed=THETA_FUNCTIONS,
    )
    for form, problem, order in FORMS
    for quantity, found, published, source in [
        ("frequency in the peak", lambda e: conservative.peak_frequency(e, 4), PEAK_FREQUENCY, DLMF),
        ("frequency in the fundamental", lambda e: conservative.fundamental_frequency(e, 4), FREQUENCY, DLMF),
        (
            "period in the peak",
            lambda e: reciprocal(conservative.peak_frequency(e, 4)),
            PERIOD,
            "On-Line Encyclopedia of Integer Sequences, A223067 over A223068, from memory, confirmed by computation",
        ),
    ]
]


@over(ROWS)
def test_published_value(row: Row):
    assert row.difference() == []


class Nome:
    """Everything in the nome q, exactly (DLMF 20.2, 20.9, 22.11): K = π/2 ϑ_3², √m = ϑ_2²/ϑ_3², sin(θ_0/2) = √m.

    Integrating θ' = 2√m cn t term by term, with ω = π/(2K),

        ω = 1/ϑ_3²,   θ = 8 Σ (−1)ⁿ q^{n+1/2}/((2n+1)(1 + q^{2n+1})) cos (2n+1)ωt,

    the time being counted from the peak.
    """

    def __init__(self, count: int) -> None:
        self.count = count
        theta3 = self.powers({0: F(1)} | {n * n: F(2) for n in range(1, count)})
        theta2 = self.powers({n * (n + 1): F(2) for n in range(count)})  # without its factor q^{1/4}
        self.frequency = reciprocal(product(theta3, theta3))
        ratio = product(theta2, reciprocal(theta3))
        self._modulus = product(product(ratio, ratio), product(ratio, ratio))  # m/q

    def powers(self, coefficients: dict[int, F]) -> Series:
        return [coefficients.get(n, F(0)) for n in range(self.count)]

    @property
    def fundamental_square(self) -> Series:
        """a² = 64 q/(1 + q)²."""
        one = reciprocal(self.powers({0: F(1), 1: F(1)}))
        return product(self.powers({1: F(64)}), product(one, one))

    @property
    def peak_square(self) -> Series:
        """θ_0² = 4 arcsin²√m = 2 Σ (4m)ⁿ/(n² binomial(2n, n))."""
        m = [F(0), *self._modulus][: self.count]
        total, power = [F(0)] * self.count, self.powers({0: F(1)})
        for n in range(1, self.count):
            power = product(power, m)
            c = 2 * F(4) ** n / (n * n * F(int(sp.binomial(2 * n, n))))
            total = [x + c * y for x, y in zip(total, power, strict=True)]
        return total

    def harmonic_ratio(self, k: int) -> Series:
        """a_k/a."""
        below = reciprocal(self.powers({0: F(1), k: F(1)}))
        above = self.powers({(k - 1) // 2: F(1), (k + 1) // 2: F(1)})
        return [F((-1) ** ((k - 1) // 2), k) * x for x in product(above, below)]


@pytest.mark.parametrize(
    ("variable", "published"),
    [("peak_square", PEAK_FREQUENCY), ("fundamental_square", FREQUENCY)],
)
def test_theta_functions_give_the_published_frequency(variable: str, published: Series):
    nome = Nome(4)
    assert tuple(in_terms_of(nome.frequency, getattr(nome, variable))) == published


def test_elliptic_integral_gives_the_published_peak_frequency():
    exact = taylor(lambda s: mpmath.pi / (2 * mpmath.ellipk(mpmath.sin(mpmath.sqrt(s) / 2) ** 2)), 4)
    assert tuple(exact) == PEAK_FREQUENCY


@pytest.mark.parametrize("degrees", [60, 120, 170])
def test_elliptic_integral_is_the_energy_integral(degrees: int):
    """T = 4∫ dθ/√(2(cos θ − cos θ_0)) over a quarter swing.

    θ = θ_0 cos ψ removes the singularity at the turning point, and the difference of cosines as a product of sines the
    cancellation there: θ_0 − θ = 2θ_0 sin²(ψ/2).
    """
    with mpmath.workdps(30):
        peak = mpmath.radians(degrees)

        def integrand(psi):
            outer = mpmath.sin(peak * (1 + mpmath.cos(psi)) / 2)
            inner = mpmath.sin(peak * mpmath.sin(psi / 2) ** 2)
            return peak * mpmath.sin(psi) / mpmath.sqrt(4 * outer * inner)

        period = 4 * mpmath.quad(integrand, [0, mpmath.pi / 2])
        closed = 4 * mpmath.ellipk(mpmath.sin(peak / 2) ** 2)
        assert abs(period - closed) < mpmath.mpf(10) ** -25 * closed


HIGH_DEGREE, HIGH_COUNT = 17, 9


@pytest.fixture(scope="module", params=["powers written", "ordering"])
def high(request: pytest.FixtureRequest) -> ms.Expansion:
    if request.param == "ordering":
        return ms.expand(ordered(HIGH_DEGREE), 2 * HIGH_COUNT - 2)
    return ms.expand(written(HIGH_DEGREE), HIGH_COUNT - 1)


def test_frequency_in_the_peak_to_high_order(high: ms.Expansion):
    nome = Nome(HIGH_COUNT)
    assert conservative.peak_frequency(high, HIGH_COUNT) == in_terms_of(nome.frequency, nome.peak_square)


def test_frequency_in_the_fundamental_to_high_order(high: ms.Expansion):
    nome = Nome(HIGH_COUNT)
    exact = in_terms_of(nome.frequency, nome.fundamental_square)
    assert conservative.fundamental_frequency(high, HIGH_COUNT) == exact


@pytest.mark.parametrize("k", [3, 5, 7])
def test_harmonics_to_high_order(high: ms.Expansion, k: int):
    nome = Nome(HIGH_COUNT)
    exact = in_terms_of(nome.harmonic_ratio(k), nome.fundamental_square)
    assert conservative.harmonic_ratio(high, k, HIGH_COUNT) == exact


@pytest.mark.parametrize(("degree", "first_wrong"), [(5, 3), (7, 4)])
def test_a_shorter_sine_fails_at_the_first_order_it_does_not_decide(degree: int, first_wrong: int):
    nome = Nome(first_wrong + 1)
    exact = in_terms_of(nome.frequency, nome.peak_square)
    found = conservative.peak_frequency(ms.expand(written(degree), first_wrong), first_wrong + 1)
    assert found[:first_wrong] == exact[:first_wrong]
    assert found[first_wrong] != exact[first_wrong]
