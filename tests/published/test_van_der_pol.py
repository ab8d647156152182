"""u'' + ε(u² − 1)u' + u = 0: the limit cycle to high order, and the first-order transient."""

from __future__ import annotations

import math
from fractions import Fraction as F

import mpmath
import numpy as np
import pytest
import sympy as sp

import multiscale as ms

from .integration import integrate, maxima, slope
from .lindstedt import Orbit, periodic_orbit
from .rational_series import Series, along, root, terms
from .rows import Row, difference, over

t = sp.Symbol("t", real=True)
eps, alpha = sp.symbols("epsilon alpha", positive=True)
u = sp.Function("u")(t)
PROBLEM = ms.Problem(u.diff(t, 2) + eps * (u**2 - 1) * u.diff(t) + u, u, small=eps)

FREQUENCY = (F(1), 0, F(-1, 16), 0, F(17, 3072), 0, F(35, 884736), 0, F(-678899, 5096079360))
AMPLITUDE = (F(2), 0, F(1, 64), 0, F(-23, 49152))
PEAK = (F(2), 0, F(1, 96), 0, F(-1033, 552960))

ANDERSEN_GEER = (
    "Andersen & Geer, Power series expansions for the frequency and period of the limit cycle of the van der Pol "
    "equation, SIAM Journal on Applied Mathematics 42 (1982) 678, from memory, confirmed by computation"
)
CLASSICAL = "Kevorkian & Cole, Perturbation Methods in Applied Mathematics, 1981, from memory, confirmed by computation"

# The amplitude of the cycle is right to O(ε^order), its frequency to O(ε^(order + 1)).
HIGH_ORDER = 11


def cycle_amplitude(expansion: ms.Expansion) -> Series:
    """a(ε) with da/dt = 0, a(0) = 2, index 0 … order − 1."""
    (a,) = expansion.symbols.a
    rate = sp.expand(expansion.slow_flow.polar[a] / (eps * a))
    return root(terms(rate, a, eps), 2, expansion.order)


def cycle_frequency(expansion: ms.Expansion) -> Series:
    """1 + dβ/dt on the cycle, index 0 … order; dβ/dt begins with ε², so the unknown next amplitude has no part."""
    (a,), (beta,) = expansion.symbols.a, expansion.symbols.beta
    turn = along(terms(expansion.slow_flow.polar[beta], a, eps), [*cycle_amplitude(expansion), F(0)])
    return [1 + turn[0], *turn[1:]]


def extremum(derivatives: list[Series]) -> Series:
    """The extreme value near θ = 0 of x(θ, ε), from the series of its derivatives at θ = 0."""
    count = len(derivatives[0])

    def taylor(shift: int):
        return {(j, n): c / math.factorial(j) for j in range(count) for n, c in enumerate(derivatives[j + shift])}

    return along(taylor(0), root(taylor(1), 0, count))


def cycle_derivatives(expansion: ms.Expansion, count: int) -> list[Series]:
    """d^j u/dt^j of the motion frozen on the cycle, at phase zero, by θ = t + β."""
    (a,), (beta,) = expansion.symbols.a, expansion.symbols.beta
    motion = expansion.solution("polar")[u].subs(beta, 0)
    amplitude = cycle_amplitude(expansion)[:count]
    return [along(terms(motion.diff(t, j).subs(t, 0), a, eps), amplitude) for j in range(count + 1)]


ROWS = [
    Row(
        name="slow flow of the first order",
        problem=PROBLEM,
        order=1,
        quantity=lambda e: tuple(e.slow_flow.polar.values()),
        value=lambda s: (eps * s.a[0] / 2 * (1 - s.a[0] ** 2 / 4), 0),
        source=CLASSICAL,
        confirmed="average over a period by definite integrals; integration of the transient",
    ),
    Row(
        name="frequency of the limit cycle",
        problem=PROBLEM,
        order=8,
        quantity=cycle_frequency,
        value=lambda _: FREQUENCY,
        source=ANDERSEN_GEER,
        confirmed="Lindstedt series; integration, error O(ε¹⁰)",
    ),
    Row(
        name="fundamental amplitude of the limit cycle",
        problem=PROBLEM,
        order=5,
        quantity=cycle_amplitude,
        value=lambda _: AMPLITUDE,
        source="Lindstedt series in exact rational arithmetic",
        confirmed="Lindstedt series in this module",
    ),
    Row(
        name="peak of the limit cycle",
        problem=PROBLEM,
        order=5,
        quantity=lambda e: extremum(cycle_derivatives(e, 5)),
        value=lambda _: PEAK,
        source=ANDERSEN_GEER,
        confirmed="Lindstedt series; integration, error O(ε⁶)",
    ),
]


@over(ROWS)
def test_published_value(row: Row):
    assert row.difference() == []


def test_average_over_a_period_gives_the_published_first_order():
    """a' = (ε/2π) ∫ f sin θ dθ, aβ' = (ε/2π) ∫ f cos θ dθ, f = (u² − 1)u' at u = a cos θ, u' = −a sin θ."""
    a, theta = sp.symbols("a theta", positive=True)
    f = ((a * sp.cos(theta)) ** 2 - 1) * (-a * sp.sin(theta))
    rate, turn = (
        sp.integrate(sp.expand(f * w), (theta, 0, 2 * sp.pi)) / (2 * sp.pi) for w in (sp.sin(theta), sp.cos(theta))
    )
    assert difference((rate, turn), (a / 2 * (1 - a**2 / 4), 0)) == []


@pytest.fixture(scope="module")
def orbit() -> Orbit:
    return periodic_orbit({(1, 2, 1, 0): F(1), (1, 0, 1, 0): F(-1)}, HIGH_ORDER, amplitude=2, isolated=True)


@pytest.fixture(scope="module")
def high() -> ms.Expansion:
    return ms.expand(PROBLEM, HIGH_ORDER)


def orbit_derivatives(orbit: Orbit, count: int) -> list[Series]:
    """d^j x/dθ^j at θ = 0: every cos kθ gives k^j cos(jπ/2), every sin kθ gives k^j sin(jπ/2)."""
    harmonics = range(2 * count)
    quarter = [(1, 0), (0, 1), (-1, 0), (0, -1)]
    result = []
    for j in range(count + 1):
        c, s = quarter[j % 4]
        columns = [
            [k**j * (c * x + s * y) for x, y in zip(orbit.cosines(k), orbit.sines(k), strict=True)] for k in harmonics
        ]
        result.append([sum(x) for x in zip(*columns, strict=True)][:count])
    return result


@pytest.mark.parametrize(
    ("found", "published"),
    [
        pytest.param(lambda o: o.frequency, FREQUENCY, id="frequency"),
        pytest.param(lambda o: o.amplitude, AMPLITUDE, id="fundamental"),
        pytest.param(lambda o: extremum(orbit_derivatives(o, 5)), PEAK, id="peak"),
    ],
)
def test_lindstedt_gives_the_published_value(orbit: Orbit, found, published):
    assert tuple(found(orbit)[: len(published)]) == published


def test_frequency_agrees_with_lindstedt_to_high_order(high: ms.Expansion, orbit: Orbit):
    assert cycle_frequency(high) == orbit.frequency


def test_amplitude_agrees_with_lindstedt_to_high_order(high: ms.Expansion, orbit: Orbit):
    assert cycle_amplitude(high) == orbit.amplitude


@pytest.mark.parametrize("k", [1, 3, 5, 7, 9])
@pytest.mark.parametrize(("wave", "coefficients"), [(sp.cos, Orbit.cosines), (sp.sin, Orbit.sines)])
def test_shape_agrees_with_lindstedt(high: ms.Expansion, orbit: Orbit, wave, coefficients, k: int):
    (a,), (beta,) = high.symbols.a, high.symbols.beta
    motion = sp.expand(high.solution("polar")[u].subs(beta, 0))
    found = along(terms(motion.coeff(wave(k * t)), a, eps), cycle_amplitude(high))
    assert found == coefficients(orbit, k)[:HIGH_ORDER]


def vanderpol(small: float):
    return lambda _, y: [y[1], -small * (y[0] ** 2 - 1) * y[1] - y[0]]


def cycle(small: float) -> tuple[float, float]:
    """Frequency and peak, after the transient, which dies as exp(−εt), has gone below the tolerance."""
    settled = 30 / small
    times, heights = maxima(vanderpol(small), [2.0, 0.0], settled + 100)
    late = times > settled
    assert np.ptp(heights[late]) < 1e-9
    times = times[late]
    return 2 * math.pi * (len(times) - 1) / (times[-1] - times[0]), float(heights[late].mean())


STRENGTHS = (0.4, 0.5, 0.6)


@pytest.fixture(scope="module")
def cycles() -> list[tuple[float, float]]:
    return [cycle(small) for small in STRENGTHS]


@pytest.mark.parametrize(
    ("which", "published", "order", "bound"),
    [
        pytest.param(0, FREQUENCY, 10, 1e-4, id="frequency"),
        pytest.param(1, PEAK, 6, 1e-3, id="peak"),
    ],
)
def test_integration_gives_the_published_cycle(cycles, which: int, published, order: int, bound: float):
    errors = [
        abs(found[which] - sum(float(c) * small**n for n, c in enumerate(published)))
        for small, found in zip(STRENGTHS, cycles, strict=True)
    ]
    assert slope(STRENGTHS, errors) > order - 0.5
    assert errors[-1] < bound


@pytest.mark.parametrize(("which", "published", "index"), [(0, FREQUENCY, 8), (1, PEAK, 4)])
def test_a_changed_coefficient_is_seen_by_integration(cycles, which: int, published, index: int):
    changed = [float(c) for c in published]
    changed[index] *= 0.9
    errors = [
        abs(found[which] - sum(c * small**n for n, c in enumerate(changed)))
        for small, found in zip(STRENGTHS, cycles, strict=True)
    ]
    assert slope(STRENGTHS, errors) < index + 1.5


def test_nearest_singularities_of_the_frequency():
    """As a function of ε², ω is singular at modulus about 3.42 (Andersen & Geer 1982).

    At a branch point ω'''/ω'' has a pole, which a Padé approximant can represent.
    """
    expansion = ms.expand(PROBLEM, 32)
    (a,), (beta,) = expansion.symbols.a, expansion.symbols.beta
    # In a² and ε², both of which are all that occurs.
    rate = terms(sp.expand(expansion.slow_flow.polar[a] / (eps * a)), a, eps)
    turn = terms(expansion.slow_flow.polar[beta], a, eps)
    halved = [{(i // 2, n // 2): c for (i, n), c in x.items()} for x in (rate, turn)]
    frequency = along(halved[1], [*root(halved[0], 4, 16), F(0)])
    with mpmath.workdps(40):
        second = [n * (n - 1) * mpmath.mpf(c.numerator) / c.denominator for n, c in enumerate(frequency)][2:]
        third = [n * c for n, c in enumerate(second)][1:]
        ratio: list[mpmath.mpf] = []
        for n, c in enumerate(third):
            ratio.append((c - mpmath.fsum(ratio[k] * second[n - k] for k in range(n))) / second[0])
        above, below = (x[::-1] for x in mpmath.pade(ratio[:13], 6, 6))
        poles = mpmath.polyroots(below, maxsteps=200, extraprec=200)
        residues = [mpmath.polyval(above, z) / mpmath.polyval(below, z, derivative=True)[1] for z in poles]
    # The residue is the exponent p of ω'' ~ (ε² − z)^p: positive at a zero of ω'', which is no singularity of ω.
    singular = [(z, p) for z, p in zip(poles, residues, strict=True) if p.real < 0]
    (first, p), (second, _) = sorted(singular, key=lambda pair: abs(pair[0]))[:2]
    assert abs(first - mpmath.conj(second)) < mpmath.mpf(10) ** -12
    assert float(abs(first)) == pytest.approx(3.42, rel=0.005)
    assert abs(float(mpmath.arg(first))) == pytest.approx(1.792, abs=0.01)
    # A square root in ω.
    assert float(p.real) == pytest.approx(-1.5, abs=0.05)


TRANSIENT = 2 * alpha / sp.sqrt(alpha**2 + (4 - alpha**2) * sp.exp(-eps * t))


def test_closed_form_solves_the_first_order_flow():
    expansion = ms.expand(PROBLEM, 1)
    (a,), (beta,) = expansion.symbols.a, expansion.symbols.beta
    flow = expansion.slow_flow.polar
    assert sp.simplify(TRANSIENT.diff(t) - flow[a].subs(a, TRANSIENT)) == 0
    assert sp.simplify(TRANSIENT.subs(t, 0) - alpha) == 0
    assert flow[beta] == 0


SMALL = (0.04, 0.02, 0.01)


def transient_errors(start: float, decay: float = 1.0) -> list[float]:
    """Largest error of a(t) cos t on 0 ≤ t ≤ 5/ε, from rest at `start`; `decay` multiplies the exponent."""
    formula = sp.lambdify((t, eps, alpha), TRANSIENT)
    errors = []
    for small in SMALL:
        times = np.linspace(0.0, 5 / small, 4000)
        motion = integrate(vanderpol(small), [start, 0.0], times)[0]
        errors.append(float(np.abs(motion - formula(decay * times, small, start) * np.cos(times)).max()))
    return errors


@pytest.mark.parametrize(("start", "bound"), [(0.2, 0.5), (1.0, 1.0), (3.0, 8.0)])
def test_transient_error_is_of_first_order(start: float, bound: float):
    errors = transient_errors(start)
    assert slope(SMALL, errors) > 0.9
    assert errors[-1] < bound * SMALL[-1]


@pytest.mark.parametrize("start", [0.2, 1.0, 3.0])
def test_a_changed_decay_is_seen_by_integration(start: float):
    errors = transient_errors(start, decay=0.6)
    assert slope(SMALL, errors) < 0.5
