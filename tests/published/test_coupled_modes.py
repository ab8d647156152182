"""Two coupled oscillators with damping: internal resonance 1:3, internal resonance 1:2 with a drive of the second mode
(saturation), and parametric combination resonances of sum and difference type.

Natural frequencies are ω_1 and, where ω_2 = kω_1 + εσ, kω_1 at leading order.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass

import numpy as np
import pytest
import sympy as sp

import multiscale as ms

from .averaging import Averaged
from .integration import integrate, slope
from .motion import Change, full, motion_errors, turned
from .rows import Row, difference, over

# First-order flows of quadratic resonances are published as such; the warning that they lack the shift is tested apart.
pytestmark = pytest.mark.filterwarnings("ignore::multiscale.errors.OrderingWarning")


t = sp.Symbol("t", real=True)
NAMES = "epsilon mu_1 mu_2 f h_1 h_2 sigma delta omega_1 omega_2 Omega"
eps, mu1, mu2, f, h1, h2, sigma, delta, w1, w2, Om = sp.symbols(NAMES, positive=True)
b1, b2, *c = sp.symbols("b_1 b_2 c_1:9", real=True)
p1, q1, p2, q2 = STATE = sp.symbols("p_1 q_1 p_2 q_2", real=True)
phi1, phi2 = sp.symbols("phi_1 phi_2", real=True)
u, v = sp.Function("u")(t), sp.Function("v")(t)
SIN, COS = sp.sin, sp.cos

NAYFEH_MOOK = "Nayfeh & Mook, Nonlinear Oscillations, 1979, {}, from memory, confirmed by computation"
AVERAGING = "averages over the angles of the motion; direct integration of the equations of motion"


def cubic_forces(x: sp.Expr, y: sp.Expr) -> tuple[sp.Expr, sp.Expr]:
    """The general cubic forces of two modes, on the right-hand side."""
    monomials = (x**3, x**2 * y, x * y**2, y**3)
    return tuple(sum(k * m for k, m in zip(part, monomials, strict=True)) for part in (c[:4], c[4:]))


def damped(first: sp.Expr, second: sp.Expr) -> list[sp.Expr]:
    return [
        u.diff(t, 2) + w1**2 * u + 2 * eps * mu1 * u.diff(t) + eps * first,
        v.diff(t, 2) + w2**2 * v + 2 * eps * mu2 * v.diff(t) + eps * second,
    ]


def problem(equations: list[sp.Expr], resonances: Mapping[sp.Expr, sp.Expr]) -> ms.Problem:
    return ms.Problem(equations, [u, v], small=eps, resonances=resonances)


ONE_THREE = problem(damped(*(-x for x in cubic_forces(u, v))), {w2: 3 * w1 + eps * sigma})
ONE_TWO = problem(
    damped(-b1 * u * v, -b2 * u**2 - f * sp.cos(Om * t)), {w2: 2 * w1 + eps * sigma, Om: w2 + eps * delta}
)
_PARAMETRIC = damped(h1 * v * sp.cos(Om * t), h2 * u * sp.cos(Om * t))
SUM = problem(_PARAMETRIC, {Om: w1 + w2 + eps * sigma})
DIFFERENCE = problem(_PARAMETRIC, {Om: w2 - w1 + eps * sigma})


def polar(e: ms.Expansion) -> tuple[sp.Expr, ...]:
    return tuple(e.slow_flow.polar.values())


def one_three(s) -> tuple[sp.Expr, ...]:
    """γ = σT_1 + β_2 − 3β_1, with β_2 of the source taken from ω_2 t; the library gives a_1, a_2, γ, β_1."""
    (a1, a2), (g,) = s.a, s.gamma
    turn1 = -((3 * c[0] * a1**2 + 2 * c[2] * a2**2) * a1 + c[1] * a1**2 * a2 * COS(g)) / (8 * w1 * a1)
    turn2 = -((2 * c[5] * a1**2 + 3 * c[7] * a2**2) * a2 + c[4] * a1**3 * COS(g)) / (8 * 3 * w1 * a2)
    return (
        eps * (-mu1 * a1 + c[1] / (8 * w1) * a1**2 * a2 * SIN(g)),
        eps * (-mu2 * a2 - c[4] / (8 * 3 * w1) * a1**3 * SIN(g)),
        eps * (sigma + turn2 - 3 * turn1),
        eps * turn1,
    )


def one_two(s) -> tuple[sp.Expr, ...]:
    """The phases of the source, γ_1 = β_2 − 2β_1 + σT_1 and γ_2 = δT_1 − β_2, are 2γ_1 − γ_2 and γ_2 of the library."""
    (a1, a2), (g1, g2) = s.a, s.gamma
    inner, outer = 2 * g1 - g2, g2
    turn1 = -b1 * a2 / (4 * w1) * COS(inner)
    turn2 = -b2 * a1**2 / (4 * 2 * w1 * a2) * COS(inner) - f / (2 * 2 * w1 * a2) * COS(outer)
    return (
        eps * (-mu1 * a1 + b1 * a1 * a2 / (4 * w1) * SIN(inner)),
        eps * (-mu2 * a2 - b2 * a1**2 / (8 * w1) * SIN(inner) + f / (4 * w1) * SIN(outer)),
        eps * ((delta + sigma) / 2 - turn1),
        eps * (delta - turn2),
    )


def shifts(e: ms.Expansion) -> list[sp.Expr]:
    """(Φ_j' − ω_j)/ε of both modes in the frame of a parametric expansion."""
    rates = (angle.diff(t).subs(dict(e.problem.resonances)) for angle in e.slow_flow.frame.values())
    return [sp.cancel((rate - natural) / eps) for rate, natural in zip(rates, (w1, w2), strict=True)]


def natural_polar(e: ms.Expansion) -> tuple[sp.Expr, ...]:
    """The polar form with β_1 taken from ω_1 t, as the source has it."""
    *rest, turn = polar(e)
    return *rest, turn + eps * shifts(e)[0]


def sum_type(s) -> tuple[sp.Expr, ...]:
    """γ = σT_1 − β_1 − β_2."""
    (a1, a2), (g,) = s.a, s.gamma
    turn1, turn2 = h1 * a2 / (4 * w1 * a1) * COS(g), h2 * a1 / (4 * w2 * a2) * COS(g)
    return (
        eps * (-mu1 * a1 - h1 * a2 / (4 * w1) * SIN(g)),
        eps * (-mu2 * a2 - h2 * a1 / (4 * w2) * SIN(g)),
        eps * (sigma - turn1 - turn2),
        eps * turn1,
    )


def difference_type(s) -> tuple[sp.Expr, ...]:
    """γ = σT_1 + β_1 − β_2."""
    (a1, a2), (g,) = s.a, s.gamma
    turn1, turn2 = h1 * a2 / (4 * w1 * a1) * COS(g), h2 * a1 / (4 * w2 * a2) * COS(g)
    return (
        eps * (-mu1 * a1 + h1 * a2 / (4 * w1) * SIN(g)),
        eps * (-mu2 * a2 - h2 * a1 / (4 * w2) * SIN(g)),
        eps * (sigma + turn1 - turn2),
        eps * turn1,
    )


SECTION_5_6 = NAYFEH_MOOK.format("section 5.6")
ROWS = [
    Row("1:3", ONE_THREE, 1, polar, one_three, NAYFEH_MOOK.format("section 6.6"), AVERAGING),
    Row("1:2 with a drive", ONE_TWO, 1, polar, one_two, NAYFEH_MOOK.format("section 6.5"), AVERAGING),
    Row("sum type", SUM, 1, natural_polar, sum_type, SECTION_5_6, AVERAGING),
    Row("difference type", DIFFERENCE, 1, natural_polar, difference_type, SECTION_5_6, AVERAGING),
]


@over(ROWS)
def test_published_value(row: Row):
    assert row.difference() == []


# Averages


def _averaged_cases():
    one, three = Averaged(phi1, w1, (p1, q1)), Averaged(3 * phi1, 3 * w1, (p2, q2), -sigma)
    forces = cubic_forces(one.displacement, three.displacement)
    half, double = Averaged(phi1, w1, (p1, q1), (sigma + delta) / 2), Averaged(2 * phi1, 2 * w1, (p2, q2), delta)
    cases = {
        "1:3": (ONE_THREE, (one, three), tuple(-x for x in forces)),
        "1:2 with a drive": (
            ONE_TWO,
            (half, double),
            (
                -b1 * half.displacement * double.displacement,
                -b2 * half.displacement**2 - f * sp.cos(2 * phi1),
            ),
        ),
    }
    for name, stated, angle in (("sum type", SUM, phi1 + phi2), ("difference type", DIFFERENCE, phi2 - phi1)):
        s1, s2 = shifts(ms.expand(stated, 1))
        first, second = Averaged(phi1, w1, (p1, q1), s1), Averaged(phi2, w2, (p2, q2), s2)
        drive = sp.cos(angle)
        cases[name] = (stated, (first, second), (h1 * second.displacement * drive, h2 * first.displacement * drive))
    return cases


AVERAGED = _averaged_cases()


def library_and_averages(name: str, extra: sp.Expr | int = 0) -> tuple[list[sp.Expr], list[sp.Expr]]:
    stated, modes, forces = AVERAGED[name]
    e = ms.expand(stated, 1)
    own = [x for pair in zip(e.symbols.p, e.symbols.q, strict=True) for x in pair]
    got = [e.slow_flow.cartesian[x].subs(dict(zip(own, STATE, strict=True))) / eps for x in own]
    wanted = []
    for mode, force, damping in zip(modes, forces, (mu1, mu2), strict=True):
        wanted += mode.rates(2 * (damping + extra) * mode.velocity + force, (phi1, phi2))
    return got, wanted


@pytest.mark.parametrize("name", AVERAGED)
def test_averages_give_the_first_order_flow(name: str):
    assert difference(*library_and_averages(name)) == []


@pytest.mark.parametrize("name", AVERAGED)
def test_averages_see_a_changed_coefficient(name: str):
    assert len(difference(*library_and_averages(name, extra=mu1 / 9))) == 4


# Consequences that the sources draw from these flows


def test_saturation():
    """Nayfeh & Mook 1979, section 6.5, from memory; Nayfeh, Mook & Marshall, Nonlinear coupling of pitch and roll
    modes in ship motions, 1973: with the first mode in motion a_2 = (4ω_1/b_1)√(μ_1² + (σ + δ)²/4), whatever f is."""
    e = ms.expand(ONE_TWO, 1)
    (a1, a2), (g1, g2) = e.symbols.a, e.symbols.gamma
    flow = e.slow_flow.polar
    lag = sp.Symbol("chi", real=True)
    first, turn = (sp.expand(x / eps).subs(g1, (lag + g2) / 2) for x in (flow[a1] / a1, flow[g1]))
    s, k = first.coeff(SIN(lag)), turn.coeff(COS(lag))
    held = sp.expand((first - s * SIN(lag)) ** 2 + (turn - k * COS(lag)) ** 2)
    assert difference(s**2, k**2) == []
    assert difference(held / s**2 * a2**2, (4 * w1 / b1) ** 2 * (mu1**2 + (sigma + delta) ** 2 / 4)) == []


SATURATION = {mu1: 0.4, mu2: 0.5, b1: 0.9, b2: 0.7, w1: 1.1, w2: 2.2, Om: 2.2, eps: 0.02}


def late_amplitudes(force: float) -> tuple[float, float]:
    """Half of peak-to-peak of both unknowns after a time of 40/ε."""
    times = np.array([0.0, *np.linspace(40.0, 40.5, 400) / SATURATION[eps]])
    late = integrate(full(ONE_TWO, {**SATURATION, f: force}), [0.5, 0, 0.5, 0], times)[:, 1:]
    return float(np.ptp(late[0]) / 2), float(np.ptp(late[2]) / 2)


@pytest.fixture(scope="module")
def driven() -> dict[float, tuple[float, float]]:
    return {force: late_amplitudes(force) for force in (3.0, 6.0, 12.0)}


@pytest.mark.slow
def test_saturation_in_the_equations_of_motion(driven):
    """Below the threshold the second mode follows f/(2ω_2μ_2); above it, it stays and the first one grows."""
    held = 4 * 1.1 / 0.9 * 0.4
    assert driven[3.0] == pytest.approx((0, 3 / (2 * 2.2 * 0.5)), abs=0.02)
    assert driven[6.0][1] == pytest.approx(held, rel=0.03)
    assert driven[12.0][1] == pytest.approx(held, rel=0.03)
    assert driven[12.0][0] > 1.5 * driven[6.0][0] > 1


def test_threshold_of_the_sum_type():
    """Nayfeh & Mook 1979, section 5.6, from memory: rest loses stability at
    h_1h_2/(16ω_1ω_2) = μ_1μ_2(1 + σ²/(μ_1 + μ_2)²), where an exponent of the slow flow becomes imaginary."""
    e = ms.expand(SUM, 1)
    x, strength = sp.symbols("lambda kappa")
    at_rest = e.slow_flow.jacobian("cartesian").subs(dict.fromkeys((*e.symbols.p, *e.symbols.q), 0)) / eps
    found = at_rest.charpoly(x).as_expr().subs(h1, 16 * w1 * w2 * strength / h2)
    # In the frame of the library the shifts s_1 and s_2 of the two modes add up to σ.
    s1, s2 = shifts(e)
    published = [(x + mu1 + k * s1) * (x + mu2 - k * s2) - strength for k in (sp.I, -sp.I)]
    assert difference((found, s1 + s2), (sp.prod(published), sigma)) == []
    critical = mu1 * mu2 * (1 + sigma**2 / (mu1 + mu2) ** 2)
    turning = sp.I * (mu1 * s2 - mu2 * s1) / (mu1 + mu2)
    assert difference(found.subs({x: turning, strength: critical}), 0) == []
    assert difference(found.subs({x: turning, strength: critical * sp.Rational(101, 100)}), 0) != []


def published_exponent(damping: tuple[float, float], strength: float, detuning: float) -> complex:
    """The root of largest real part of (λ + μ_1 + iσ/2)(λ + μ_2 − iσ/2) = h_1h_2/(16ω_1ω_2), up to a rotation."""
    m1, m2 = damping
    quadratic = [1, m1 + m2, (m1 + 0.5j * detuning) * (m2 - 0.5j * detuning) - strength]
    return max(np.roots(quadratic), key=lambda z: z.real)


RUN_EPS = (0.02, 0.01, 0.005)


@pytest.mark.parametrize("detuning", [0.0, 0.6, -0.9])
@pytest.mark.parametrize("factor", [0.5, 1.0, 3.0])
def test_floquet_exponents_of_the_sum_type(factor: float, detuning: float):
    """The largest real part, from the fundamental matrix of the equations over one period, is right to O(ε)."""
    m1, m2, n1, n2 = 0.2, 0.35, 1.1, 2.3
    strength = factor * m1 * m2 * (1 + detuning**2 / (m1 + m2) ** 2)
    published = published_exponent((m1, m2), strength, detuning).real
    assert published == pytest.approx(0, abs=1e-12) if factor == 1.0 else published * (factor - 1) > 0
    product = 16 * n1 * n2 * strength
    errors = []
    for small in RUN_EPS:
        values = {mu1: m1, mu2: m2, w1: n1, w2: n2, h1: product / 1.7, h2: 1.7, eps: small}
        values[Om] = n1 + n2 + small * detuning
        rhs, period = full(SUM, values), 2 * np.pi / values[Om]
        matrix = np.column_stack([integrate(rhs, x, np.array([0.0, period]))[:, -1] for x in np.eye(4)])
        largest = max(abs(np.linalg.eigvals(matrix)))
        errors.append(abs(np.log(largest) / period / small - published))
    assert slope(RUN_EPS, errors) > 0.9
    assert errors[-1] < 3 * RUN_EPS[-1]
    assert slope(RUN_EPS, [x + 0.02 for x in errors]) < 0.7


# Direct integration


@dataclass(frozen=True)
class Run:
    problem: ms.Problem
    eliminated: dict[sp.Symbol, sp.Expr]
    values: dict[sp.Symbol, float]
    bounds: dict[int, float]
    start: tuple[float, ...] = (0.5, -0.4, 0.3, 0.6)

    def errors(self, order: int, change: Change | None = None) -> list[float]:
        expansion = ms.expand(self.problem, order)
        return motion_errors(expansion, self.values, self.eliminated, self.start, STEPS[order], HORIZON, change)


STEPS = {1: (0.02, 0.01, 0.005), 2: (0.04, 0.02, 0.01)}
HORIZON = 2.0
DAMPING = {mu1: 0.2, mu2: 0.35}
RUNS = {
    "1:3": Run(
        ONE_THREE,
        {w2: 3 * w1 + eps * sigma},
        {**DAMPING, sigma: 0.4, w1: 1.1} | dict(zip(c, (-0.7, 1.3, 0.5, 0.9, 1.1, -0.6, 0.8, -1.2), strict=True)),
        {1: 0.05, 2: 0.005},
    ),
    "1:2 with a drive": Run(
        ONE_TWO,
        {w2: 2 * w1 + eps * sigma, Om: 2 * w1 + eps * (sigma + delta)},
        {**DAMPING, sigma: 0.4, delta: -0.3, w1: 1.1, b1: 0.9, b2: -0.7, f: 1.6},
        {1: 0.1, 2: 0.012},
    ),
    "sum type": Run(
        SUM,
        {Om: w1 + w2 + eps * sigma},
        {**DAMPING, sigma: 0.4, w1: 1.1, w2: 2.3, h1: 1.9, h2: 2.4},
        {1: 0.06, 2: 0.06},
    ),
    "difference type": Run(
        DIFFERENCE,
        {Om: w2 - w1 + eps * sigma},
        {**DAMPING, sigma: 0.4, w1: 1.1, w2: 2.3, h1: 1.9, h2: 2.4},
        {1: 0.45, 2: 0.2},
    ),
}


@pytest.mark.parametrize("name", RUNS)
@pytest.mark.parametrize("order", STEPS)
def test_motion_error_is_of_the_order_of_the_expansion(name: str, order: int):
    errors = RUNS[name].errors(order)
    assert slope(STEPS[order], errors) > order - 0.15
    assert errors[-1] < RUNS[name].bounds[order] * STEPS[order][-1] ** order


@pytest.mark.parametrize("name", RUNS)
@pytest.mark.parametrize("order", STEPS)
def test_a_changed_coefficient_is_seen_by_integration(name: str, order: int):
    errors = RUNS[name].errors(order, turned(order))
    assert slope(STEPS[order], errors) < order - 0.5
