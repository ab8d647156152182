"""Onset of oscillation: the Brusselator and the planar first coefficient."""

from __future__ import annotations

import numpy as np
import pytest
import sympy as sp
from support.coupled import motion_errors, slope

import multiscale as ms

from .rows import Row, difference, over

t = sp.Symbol("t", real=True)
mu, beta = sp.symbols("mu beta", real=True)
omega = sp.Symbol("omega", positive=True)
x, y = sp.Function("x")(t), sp.Function("y")(t)
R = sp.Rational

KURAMOTO = (
    "Kuramoto, Chemical Oscillations, Waves, and Turbulence, 1984, appendix on the Brusselator, from memory, "
    "confirmed by computation"
)
GUCKENHEIMER_HOLMES = (
    "Guckenheimer & Holmes, Nonlinear Oscillations, Dynamical Systems, and Bifurcations of Vector Fields, 1983, "
    "eq. (3.4.11), from memory, confirmed by computation"
)


def brusselator(A, B):
    """X' = A − (B + 1)X + X²Y, Y' = BX − X²Y, measured from the equilibrium X = A, Y = B/A."""
    X, Y = A + x, B / A + y
    return [sp.expand(x.diff(t) - (A - (B + 1) * X + X**2 * Y)), sp.expand(y.diff(t) - (B * X - X**2 * Y))]


BRUSSELATOR = ms.Problem(brusselator(1, 2 + mu), [x, y], ordering={x: 1, y: 1, mu: 2})


def named_jets(letter):
    """{derivatives of f or g at the origin}, of the second and third order, and the function they define."""
    orders = [(i, n - i) for n in (2, 3) for i in range(n, -1, -1)]
    jets = {(i, j): sp.Symbol(letter + "x" * i + "y" * j, real=True) for i, j in orders}
    return jets, sum(c * x**i * y**j / (sp.factorial(i) * sp.factorial(j)) for (i, j), c in jets.items())


F, f = named_jets("f")
G, g = named_jets("g")
PLANAR = ms.Problem(
    [x.diff(t) - mu * x + omega * y - f, y.diff(t) - mu * y - omega * x - g], [x, y], ordering={x: 1, y: 1, mu: 2}
)


def first_coefficient():
    """a of r' = μr + a r³."""
    cubic = F[3, 0] + F[1, 2] + G[2, 1] + G[0, 3]
    quadratic = F[1, 1] * (F[2, 0] + F[0, 2]) - G[1, 1] * (G[2, 0] + G[0, 2]) - F[2, 0] * G[2, 0] + F[0, 2] * G[0, 2]
    return cubic / 16 + quadratic / (16 * omega)


def leading(e: ms.Expansion) -> tuple[sp.Expr, ...]:
    """μ and ω through a², ε = 1."""
    cycle, a = ms.onset(e, mu), e.symbols.a[0]
    parts = [sp.expand(z.subs(e.problem.small, 1)) for z in (cycle.parameter, cycle.frequency)]
    return tuple(sp.Add(*(z.coeff(a, n) * a**n for n in (0, 2))) for z in parts)


def coefficients(cycle: ms.Onset, small: sp.Symbol) -> tuple[sp.Expr, sp.Expr]:
    return cycle.coefficient.subs(small, 1), cycle.crossing.subs(small, 1)


ROWS = [
    Row(
        "Brusselator at A = 1, B = 2 + mu",
        BRUSSELATOR,
        2,
        leading,
        lambda s: (3 * s.a[0] ** 2 / 4, 1 - s.a[0] ** 2 / 24),
        KURAMOTO,
        "test_cycle_of_the_brusselator_by_integration",
    ),
    Row(
        "planar onset, first coefficient",
        PLANAR,
        2,
        lambda e: (
            ms.onset(e, mu).coefficient.subs(e.problem.small, 1),
            ms.onset(e, mu).crossing.subs(e.problem.small, 1),
        ),
        lambda s: (first_coefficient(), 1),
        GUCKENHEIMER_HOLMES,
        "test_decay_of_a_planar_onset_by_integration",
    ),
]


@over(ROWS)
def test_library_gives_the_published_value(row):
    assert row.difference() == []


@pytest.mark.parametrize("problem", [BRUSSELATOR, PLANAR], ids=["Brusselator", "planar"])
def test_residual_has_the_order_promised(problem):
    ms.certify(ms.expand(problem, 2)).require()


def test_the_comparison_can_fail():
    assert difference(leading(ms.expand(BRUSSELATOR, 2))[0], BRUSSELATOR.parameters[0]) != []


def cycle_by_integration(deviation: float) -> tuple[float, float]:
    """(amplitude of the fundamental of x, frequency) of the settled cycle."""
    integrate = pytest.importorskip("scipy.integrate").solve_ivp
    equations = zip(brusselator(1, 2 + mu), (x, y), strict=True)
    rates = sp.lambdify((x, y), [z.diff(t) - e.subs(mu, deviation) for e, z in equations])

    def crossing(_, s):
        return s[0]

    crossing.direction = 1
    options = {"method": "DOP853", "rtol": 1e-11, "atol": 1e-13}
    size = 2 * np.sqrt(deviation / 3)
    settled = integrate(lambda _, s: rates(*s), (0, 60 / deviation), [size, -size], **options).y[:, -1]
    found = integrate(
        lambda _, s: rates(*s), (0, 60), settled, events=crossing, dense_output=True, max_step=0.05, **options
    )
    times = found.t_events[0]
    period = (times[-1] - times[0]) / (len(times) - 1)
    grid = times[0] + np.arange(512) * period / 512
    harmonic = np.fft.rfft(found.sol(grid)[0])[1] / 512
    return 2 * abs(harmonic), 2 * np.pi / period


@pytest.mark.slow
def test_cycle_of_the_brusselator_by_integration():
    """Amplitude and frequency of the cycle, N = 4: errors of order μ^{5/2} and μ³ (half-integer powers of μ = ε²)."""
    (cycle,) = ms.limit_cycles(ms.expand(BRUSSELATOR, 4))
    small = BRUSSELATOR.small
    deviations = [0.08, 0.04, 0.02]
    exact = [cycle_by_integration(m) for m in deviations]
    series = [[float(z.subs({small: 1, mu: m})) for z in (cycle.amplitude, cycle.frequency)] for m in deviations]
    for k, least in ((0, 2.2), (1, 2.7)):
        errors = [abs(a[k] - b[k]) for a, b in zip(exact, series, strict=True)]
        assert slope(deviations, errors) > least
    shorter = [float(cycle.amplitude.coeff(small, 0).subs(mu, m)) for m in deviations]
    assert slope(deviations, [abs(a[0] - b) for a, b in zip(exact, shorter, strict=True)]) < 1.8


@pytest.mark.slow
def test_decay_of_a_planar_onset_by_integration():
    """Motion of an invented planar system over t ≤ T/ε²: error O(ε²) on the scale of the unknowns, size divided out."""
    values = {z: R((3 * k * k + 5 * k + 2) % 11 - 5, 4) for k, z in enumerate((*F.values(), *G.values()))}
    eps = sp.Symbol("epsilon", positive=True)
    plain = [e.subs(values).subs(omega, 2) for e in PLANAR.equations]
    scaled = [sp.expand(e.subs({x: eps * x, y: eps * y, mu: eps**2 * mu}).doit() / eps) for e in plain]
    result = ms.expand(ms.Problem(scaled, [x, y], small=eps), 3)
    small = [0.08, 0.04, 0.02]
    right = motion_errors(result, {mu: 0.3}, [0.5, 0.2], small, 0.5, power=2)
    assert slope(small, right) > 1.7
    wrong = motion_errors(result, {mu: 0.3}, [0.5, 0.2], small, 0.5, power=2, turn=0.3, level=2)
    assert slope(small, wrong) < 0.7
