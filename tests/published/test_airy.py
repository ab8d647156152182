"""u'' + (1 + εt)u = 0: a slowly growing stiffness, against Airy functions.

With s = 1 + εt and x = −s/ε^{2/3} the solutions are Ai(x) and Bi(x). Their modulus and phase have the expansions
DLMF 9.8.20 and 9.8.22 (from memory, confirmed here against mpmath), x → −∞:

    π√−x · M²(x) ~ Σ_k 1·3·5···(6k − 1)/(k! 96^k) x^{−3k},     θ(x) ~ π/4 + (2/3)(−x)^{3/2} Σ_k θ_k x^{−3k},

θ_k = 1, 5/32, 1105/6144, 82825/65536. A second route to the same rates is the Riccati equation of u'/u.
"""

from __future__ import annotations

from functools import cache

import mpmath
import numpy as np
import pytest
import sympy as sp

import multiscale as ms

from .integration import slope
from .rows import Row, difference, over

t = sp.Symbol("t", real=True)
eps, s = sp.symbols("epsilon s", positive=True)
u = sp.Function("u")(t)
PROBLEM = ms.Problem(u.diff(t, 2) + (1 + eps * t) * u, u, small=eps)
HIGH_ORDER = 7

MODULUS = [sp.factorial2(6 * k - 1) / (sp.factorial(k) * 96**k) for k in range(4)]
PHASE = [sp.Integer(1), sp.Rational(5, 32), sp.Rational(1105, 6144), sp.Rational(82825, 65536)]
CONFIRMED = "Riccati equation of u'/u; Airy functions in mpmath"


def truncated(x: sp.Expr, order: int) -> sp.Expr:
    """x through ε^order, x a function of s and ε."""
    return sp.series(x, eps, 0, order + 1).removeO()


def logarithmic_modulus(order: int) -> sp.Expr:
    """a'/a through ε^order, a ∝ M, with x^{−3} = −ε²/s³ and s' = ε."""
    square = sum(m * (-(eps**2) / s**3) ** k for k, m in enumerate(MODULUS)) / sp.sqrt(s)
    return truncated(eps * sp.diff(square, s) / (2 * square), order)


def phase_rate(order: int) -> sp.Expr:
    """dθ/dt − √s through ε^order."""
    series = sum(p * (-(eps**2) / s**3) ** k for k, p in enumerate(PHASE))
    return truncated(sp.expand(sp.diff(sp.Rational(2, 3) * s ** sp.Rational(3, 2) * series, s)) - sp.sqrt(s), order)


def rates(e: ms.Expansion) -> tuple[sp.Expr, sp.Expr]:
    """(a'/a, β') in terms of s."""
    (a,), (beta,) = e.symbols.a, e.symbols.beta
    grown = {t: (s - 1) / eps}
    return tuple(sp.expand(x.subs(grown)) for x in (e.slow_flow.polar[a] / a, e.slow_flow.polar[beta]))


ROWS = [
    Row(
        name="amplitude law of the first level",
        problem=PROBLEM,
        order=1,
        quantity=lambda e: rates(e)[0],
        # a = Cω^{−1/2}, ω = √s
        value=lambda _: eps * sp.diff(sp.log(s ** sp.Rational(-1, 4)), s),
        source="Liouville 1837 and Green 1837; DLMF 2.7(iii), from memory, confirmed by computation",
        confirmed=CONFIRMED,
    ),
    Row(
        name="modulus",
        problem=PROBLEM,
        order=HIGH_ORDER,
        quantity=lambda e: rates(e)[0],
        value=lambda _: logarithmic_modulus(HIGH_ORDER),
        source="DLMF 9.8.20",
        confirmed=CONFIRMED,
    ),
    Row(
        name="phase",
        problem=PROBLEM,
        order=HIGH_ORDER,
        quantity=lambda e: rates(e)[1],
        value=lambda _: phase_rate(HIGH_ORDER),
        source="DLMF 9.8.22",
        confirmed=CONFIRMED,
    ),
]


@over(ROWS)
def test_published_value(row: Row):
    assert row.difference() == []


def test_no_correction_of_the_field():
    """The equation is linear: the motion has one harmonic, and the whole expansion is in A."""
    e = ms.expand(PROBLEM, HIGH_ORDER)
    assert [e.levels[n].corrections[u] for n in range(1, HIGH_ORDER + 1)] == [0] * HIGH_ORDER


def test_phase_of_the_frame_in_closed_form():
    """∫_0^t √(1 + ετ) dτ = (2/3ε)(s^{3/2} − 1)."""
    (angle,) = ms.expand(PROBLEM, 1).slow_flow.frame.values()
    assert sp.simplify(angle.doit() - sp.Rational(2, 3) / eps * ((1 + eps * t) ** sp.Rational(3, 2) - 1)) == 0


def riccati(order: int) -> list[sp.Expr]:
    """Λ_0 … Λ_order of u'/u = Σ εⁿ Λ_n(s): ε dΛ/ds + Λ² + s = 0, one order at a time."""
    found = [sp.I * sp.sqrt(s)]
    for n in range(1, order + 1):
        inner = sum(found[k] * found[n - k] for k in range(1, n))
        found.append(sp.expand(-(sp.diff(found[n - 1], s) + inner) / (2 * found[0])))
    return found


@pytest.mark.parametrize("n", range(1, HIGH_ORDER + 1))
def test_riccati_equation_gives_the_slow_derivatives(n: int):
    e = ms.expand(PROBLEM, n)
    (A,) = e.symbols.A
    assert difference((e.slow_flow.by_scale[n][A] / A).subs(t, (s - 1) / eps), riccati(n)[n]) == []


@pytest.mark.parametrize(("name", "series"), [("modulus", MODULUS), ("phase", PHASE)], ids=["modulus", "phase"])
def test_airy_functions_have_the_published_expansions(name: str, series: list[sp.Expr]):
    """The error of the series falls with the power of the first term left out, at large −x, in 60 digits."""
    with mpmath.workdps(60):
        errors, points = [], [mpmath.mpf(x) for x in (40, 80, 160)]
        for x in points:
            ai, bi = mpmath.airyai(-x), mpmath.airybi(-x)
            total = mpmath.fsum(mpmath.mpf(c.p) / c.q * (-(x**-3)) ** k for k, c in enumerate(series))
            if name == "modulus":
                errors.append(abs(total - mpmath.pi * mpmath.sqrt(x) * (ai**2 + bi**2)))
            else:
                turned = (mpmath.atan2(ai, bi) - mpmath.pi / 4 - mpmath.mpf(2) / 3 * x**1.5 * total) / mpmath.pi
                errors.append(abs(turned - mpmath.nint(turned)))
        order = slope([float(1 / x) for x in points], [float(e) for e in errors])
    assert order > (12 if name == "modulus" else 10.5) - 0.1


# Motion

SMALL = (0.08, 0.04, 0.02)
HORIZON = 3.0


@cache
def exact_motion(small: float, place: float, velocity: float) -> tuple[np.ndarray, np.ndarray]:
    """Times and displacements of the solution with the given start, by Airy functions."""
    scale = mpmath.mpf(small) ** (mpmath.mpf(-2) / 3)
    inner = -small * scale

    def pair(x: mpmath.mpf, order: int) -> tuple[mpmath.mpf, mpmath.mpf]:
        return mpmath.airyai(x, derivative=order), mpmath.airybi(x, derivative=order)

    (ai, bi), (dai, dbi) = pair(-scale, 0), pair(-scale, 1)
    # The Wronskian of Ai and Bi is 1/π.
    first = mpmath.pi * (place * dbi - velocity / inner * bi)
    second = mpmath.pi * (velocity / inner * ai - place * dai)
    times = np.linspace(0.0, HORIZON / small, 160)
    motion = []
    for x in times:
        ai, bi = pair(-scale * (1 + small * mpmath.mpf(float(x))), 0)
        motion.append(float(first * ai + second * bi))
    return times, np.array(motion)


def motion_errors(order: int, start: tuple[float, float], factor: sp.Expr | int = 1) -> list[float]:
    """Largest error for each ε; the last slow derivative is multiplied by `factor`. The flow is integrated in s."""
    e = ms.expand(PROBLEM, order)
    (A,) = e.symbols.A
    exponent = sp.Integer(0)
    for n in range(1, order + 1):
        rate = (e.slow_flow.by_scale[n][A] / A).subs(t, (s - 1) / eps)
        weight = factor if n == order else 1
        exponent += weight * eps ** (n - 1) * sp.integrate(sp.expand(rate), (s, 1, s))
    grown = sp.lambdify((s, eps), exponent, "numpy")
    errors = []
    for small in SMALL:
        place, velocity = (float(e.to_numpy(derivative=d).bind(epsilon=small)(0.0, start)[0]) for d in (0, 1))
        times, exact = exact_motion(small, place, velocity)
        amplitude = (start[0] - 1j * start[1]) / 2 * np.exp(grown(1 + small * times, small))
        state = np.array([2 * amplitude.real, -2 * amplitude.imag])
        errors.append(float(np.abs(e.to_numpy().bind(epsilon=small)(times, state)[0] - exact).max()))
    return errors


STARTS = [(1.0, 0.0), (-0.3, 0.8)]
BOUNDS = {1: 0.13, 2: 0.12, 3: 0.2}


@pytest.mark.parametrize("start", STARTS, ids=str)
@pytest.mark.parametrize("order", BOUNDS)
def test_motion_error_is_of_the_order_of_the_expansion(order: int, start: tuple[float, float]):
    errors = motion_errors(order, start)
    assert slope(SMALL, errors) > order - 0.15
    assert errors[-1] < BOUNDS[order] * SMALL[-1] ** order


@pytest.mark.parametrize("start", STARTS, ids=str)
@pytest.mark.parametrize("order", BOUNDS)
def test_a_changed_coefficient_is_seen(order: int, start: tuple[float, float]):
    assert slope(SMALL, motion_errors(order, start, sp.Rational(5, 2))) < order - 0.5
