"""Forces that are no polynomials, against exact periods, exact series and direct integration.

Periods of conservative motion are energy integrals between turning points (elementary mechanics),

    T = ∫ 2 du/√(2(E − V(u))),      u = centre + half·sin φ,

evaluated by the trapezoidal rule, which converges geometrically here. All numbers of the scenarios are invented.
"""

from __future__ import annotations

from collections.abc import Callable
from fractions import Fraction as F

import mpmath
import numpy as np
import pytest
import sympy as sp
from support.claims import examination_of, flow_raised

import multiscale as ms

from . import conservative
from .integration import integrate, slope
from .rational_series import in_terms_of
from .test_pendulum import FREQUENCY, PEAK_FREQUENCY, Nome

t = sp.Symbol("t", real=True)
eps = sp.Symbol("epsilon", positive=True)
k, m, g, V, lam, T, mu, f, W, u_s = sp.symbols("k m g V lambda T mu f Omega u_s", positive=True)
sigma = sp.Symbol("sigma", real=True)
u, v = sp.Function("u")(t), sp.Function("v")(t)


def one(force: sp.Expr, order: int, **options) -> ms.Expansion:
    return ms.expand(ms.Problem(u.diff(t, 2) + force, u, **({"ordering": {u: 1}} | options)), order)


# The pendulum stated as it is

COUNT = 6


@pytest.fixture(scope="module")
def pendulum() -> ms.Expansion:
    return one(sp.sin(u), 2 * COUNT - 2)


def test_pendulum_frequency_in_the_fundamental(pendulum: ms.Expansion):
    """Row 6 of NIST DLMF 22.19(i), from memory; here through a¹⁰, confirmed by series in the nome."""
    nome = Nome(COUNT)
    found = conservative.fundamental_frequency(pendulum, COUNT)
    assert found == in_terms_of(nome.frequency, nome.fundamental_square)
    assert tuple(found[:4]) == FREQUENCY


def test_pendulum_frequency_in_the_peak(pendulum: ms.Expansion):
    nome = Nome(COUNT)
    found = conservative.peak_frequency(pendulum, COUNT)
    assert found == in_terms_of(nome.frequency, nome.peak_square)
    assert tuple(found[:4]) == PEAK_FREQUENCY


def test_pendulum_with_a_small_parameter_written():
    """sin(εu)/ε: the powers of ε are those of the ordering."""
    written = ms.expand(ms.Problem(u.diff(t, 2) + sp.sin(eps * u) / eps, u, small=eps), 6)
    assert written.frequency_corrections() == one(sp.sin(u), 6).frequency_corrections()


def test_periodic_orbit_of_the_pendulum(pendulum: ms.Expansion):
    series = ms.periodic_series(pendulum.problem, 2 * COUNT - 2)
    assert series.frequency_coefficients == pendulum.frequency_corrections()


# Exact periods of conservative motion

POTENTIALS = {
    "rotating pendulum": (sp.sin(u) * (1 - lam * sp.cos(u)), {}, {lam: F(3, 10)}),
    "rotating pendulum beside the axis": (sp.sin(u) * (1 - lam * sp.cos(u)), {u: u_s}, {u_s: F(9, 10)}),
    "plate before an electrode": (k * u - V**2 / (g - u) ** 2, {u: u_s}, {k: F(2), g: F(1), u_s: F(1, 10)}),
    "exponential spring": (sp.exp(u) - 1, {}, {}),
    "logarithmic spring": (sp.log(1 + k * u), {}, {k: F(3, 2)}),
    "pendulum under a torque": (sp.sin(u) - T, {u: u_s}, {u_s: F(1, 2)}),
}


def exact_frequency(force: sp.Expr, peak: mpmath.mpf) -> mpmath.mpf:
    """2π/T of u'' + force(u) = 0, starting from rest at u = peak > 0."""
    x = sp.Symbol("x", real=True)
    potential = sp.lambdify(x, sp.integrate(force.subs(u, x), x), modules="mpmath")
    other = mpmath.findroot(lambda y: (potential(y) - potential(peak)) / (y - peak), -peak)
    centre, half = (peak + other) / 2, (peak - other) / 2

    def integrand(angle: mpmath.mpf) -> mpmath.mpf:
        place = centre + half * mpmath.sin(angle)
        return half * mpmath.cos(angle) / mpmath.sqrt(2 * (potential(peak) - potential(place)))

    # The integrand is even and periodic in the angle about both turning points: midpoints converge geometrically.
    points = 64
    nodes = [mpmath.pi * (mpmath.mpf(2 * j + 1) / (2 * points) - mpmath.mpf(1) / 2) for j in range(points)]
    return points / mpmath.fsum(map(integrand, nodes))


def frequency_errors(expansion: ms.Expansion, force: sp.Expr, values: dict, sizes: list[str]) -> list[float]:
    """|ω(a) − 2π/T|, T from the turning point that the expansion gives for a."""
    (a,), (beta,) = expansion.symbols.a, expansion.symbols.beta
    start = expansion.solution("polar")[u].subs({t: 0, beta: 0, expansion.problem.small: 1}).subs(values)
    frequency = expansion.frequency().subs(expansion.problem.small, 1).subs(values)
    errors = []
    with mpmath.workdps(40):
        for size in sizes:
            peak, w = (mpmath.mpf(str(x.subs(a, sp.Rational(size)).n(40))) for x in (start, frequency))
            errors.append(float(abs(w - exact_frequency(force, peak))))
    return errors


@pytest.mark.parametrize("order", [2, 4])
@pytest.mark.parametrize("name", POTENTIALS)
def test_frequency_against_the_energy_integral(name: str, order: int):
    """ω is even in a, so that the first error after an even order N is of order N + 2."""
    force, about, given = POTENTIALS[name]
    values = {s: sp.Rational(x.numerator, x.denominator) for s, x in given.items()}
    expansion = one(force, order, **({"about": about} if about else {}))
    plain = sp.expand(expansion.problem.equations[0] - u.diff(t, 2))
    numeric = expansion.problem.with_relations(plain).subs(values)
    sizes = ["1/20", "1/40", "1/80"]
    errors = frequency_errors(expansion, numeric, values, sizes)
    assert slope([1 / 20, 1 / 40, 1 / 80], errors) > order + 1.9
    assert errors[0] < 5 * 0.05 ** (order + 2)


def test_a_shorter_polynomial_shows_in_the_energy_integral():
    """Negative control: e^u − 1 without its fifth power at order 4."""
    force = sp.exp(u) - 1
    short = one(sum(u**n / sp.factorial(n) for n in range(1, 5)), 4)
    errors = frequency_errors(short, force, {}, ["1/20", "1/40", "1/80"])
    assert 3.8 < slope([1 / 20, 1 / 40, 1 / 80], errors) < 4.3


# Direct integration

MOTIONS = {
    "plate before an electrode": (
        lambda: {"force": k * u - V**2 / (g - u) ** 2, "about": {u: u_s}},
        {"k": 2.0, "g": 1.0, "u_s": 0.1},
    ),
    "pendulum with tanh damping": (
        lambda: {"force": sp.sin(u) + mu * sp.tanh(u.diff(t)), "ordering": {u: 1, mu: 2}},
        {"mu": 0.4},
    ),
}


def scaled_errors(
    expansion: ms.Expansion, values: dict[str, float], scales: list[float], orders: dict[str, int], change: float = 0.0
) -> list[float]:
    """Largest error of u on 0 ≤ t ≤ 4/s, amplitudes and small parameters shrunk by s, over the amplitude s."""
    problem = expansion.problem
    x, y = sp.symbols("x y")
    plain = problem.with_relations(problem.equations[0] - u.diff(t, 2)).subs(u.diff(t), y).subs(u, x)
    names = sorted(values)
    force = sp.lambdify([x, y, *names], plain.subs({s: sp.Symbol(s.name) for s in plain.free_symbols}), "math")
    errors = []
    for s in scales:
        now = [values[n] * s ** orders.get(n, 0) for n in names]
        bound = dict(zip(names, now, strict=True))
        flow = expansion.slow_flow.to_numpy().bind(bound)
        place, velocity = (expansion.to_numpy(derivative=d).bind(bound) for d in (0, 1))

        def slow(time: float, state: np.ndarray, flow=flow, s=s) -> np.ndarray:
            return flow(time, state) + change * s**2 * np.array([state[1], -state[0]])

        times = np.linspace(0.0, 4.0 / s, 400)
        states = integrate(slow, [0.9 * s, 0.5 * s], times)
        begin = [place(0.0, states[:, 0])[0], velocity(0.0, states[:, 0])[0]]
        exact = integrate(lambda time, z, now=now: [z[1], -force(z[0], z[1], *now)], begin, times)
        errors.append(float(np.abs(place(times, states)[0] - exact[0]).max()) / s)
    return errors


@pytest.mark.parametrize("order", [1, 2, 3])
@pytest.mark.parametrize("name", MOTIONS)
@pytest.mark.filterwarnings("ignore::multiscale.OrderingWarning")
def test_motion_against_direct_integration(name: str, order: int):
    """On times of order 1/ε the error relative to the amplitude is of order ε^N."""
    build, values = MOTIONS[name]
    options = build()
    expansion = one(options.pop("force"), order, **options)
    scales = [0.12, 0.06, 0.03]
    errors = scaled_errors(expansion, values, scales, {"mu": 2})
    assert slope(scales, errors) > order - 0.15
    assert errors[-1] < 10 * scales[-1] ** order


def test_a_wrong_frequency_shows_in_the_motion():
    build, values = MOTIONS["plate before an electrode"]
    options = build()
    expansion = one(options.pop("force"), 3, **options)
    errors = scaled_errors(expansion, values, [0.12, 0.06, 0.03], {}, change=0.3)
    assert slope([0.12, 0.06, 0.03], errors) < 1.3


# Driven and coupled pendula: equations of motion term by term, and residuals


def test_driven_pendulum_near_resonance():
    """θ'' + 2μθ' + sin θ = f cos Ωt: the first-order response of a cubic softening oscillator (textbook form)."""
    problem = ms.Problem(
        u.diff(t, 2) + 2 * mu * u.diff(t) + sp.sin(u) - f * sp.cos(W * t),
        u,
        ordering={u: 1, mu: 2, f: 3, sigma: 2},
        resonances={W: 1 + sigma},
    )
    flow = ms.expand(problem, 2).slow_flow
    (a,), (gamma,) = ms.expand(problem, 2).symbols.a, ms.expand(problem, 2).symbols.gamma
    rate, turning = (sp.expand(flow.polar[s].subs(problem.small, 1)) for s in (a, gamma))
    assert sp.expand(rate - (-mu * a + f * sp.sin(gamma) / 2)) == 0
    assert sp.expand(turning - (sigma + a**2 / 16 + f * sp.cos(gamma) / (2 * a))) == 0


def test_driven_pendulum_settles_on_the_response():
    """The steady state of the equation as stated, integrated until it rests, beside the fourth-order response."""
    values = {"mu": 0.02, "f": 0.03, "sigma": -0.05}
    problem = ms.Problem(
        u.diff(t, 2) + 2 * mu * u.diff(t) + sp.sin(u) - f * sp.cos(W * t),
        u,
        ordering={u: 1, mu: 2, f: 3, sigma: 2},
        resonances={W: 1 + sigma},
    )
    expansion = ms.expand(problem, 4)
    states = [s for s in ms.equilibria(expansion, values) if s.stable and not s.spurious]
    rate = 1 + values["sigma"]
    times = np.linspace(0.0, 2 * np.pi / rate, 65)
    place = expansion.to_numpy().bind(values)
    velocity = expansion.to_numpy(derivative=1).bind(values)

    def pendulum(time: float, z: np.ndarray) -> list[float]:
        return [z[1], -2 * values["mu"] * z[1] - np.sin(z[0]) + values["f"] * np.cos(rate * time)]

    assert states
    for state in states:
        start = np.array([float(place(0.0, state.state)[0]), float(velocity(0.0, state.state)[0])])
        turns = 60 * 2 * np.pi / rate
        settled = integrate(pendulum, start, np.array([0.0, turns]))[:, -1]
        motion = integrate(pendulum, settled, times)[0]
        found = place(times, state.state)[0]
        assert np.abs(motion - found).max() < 0.01 * np.abs(motion).max()


def test_coupled_pendula_in_beat():
    """Two equal pendula joined by a torsion spring k sin(θ_1 − θ_2), which exchange energy.

    At the second order dA_1/dt = i(k/2)(A_1 − A_2) − (i/4)|A_1|²A_1, and the same with 1 and 2 exchanged.
    """
    equations = [u.diff(t, 2) + sp.sin(u) + k * sp.sin(u - v), v.diff(t, 2) + sp.sin(v) + k * sp.sin(v - u)]
    problem = ms.Problem(equations, [u, v], ordering={u: 1, v: 1, k: 2})
    result = ms.expand(problem, 2)
    A, B = result.symbols.A
    expected = sp.I * k / 2 * (A - B) - sp.I / 4 * A**2 * sp.conjugate(A)
    assert sp.expand(result.slow_flow.by_scale[2][A] - expected) == 0
    exchanged = expected.subs({A: B, B: A}, simultaneous=True)
    assert sp.expand(result.slow_flow.by_scale[2][B] - exchanged) == 0


def _in_epsilon(problem: ms.Problem, parameters: dict[sp.Symbol, int]) -> ms.Problem:
    """The statement with powers of ε written: u → εu, and parameters by their orders."""
    scaled = {s: eps**q * s for s, q in parameters.items()}
    place = {x: eps * x for x in problem.unknowns}
    equations = [x.subs(scaled).subs(place, simultaneous=True).doit() for x in problem.equations]
    return ms.Problem(equations, problem.unknowns, small=eps, resonances=dict(problem.resonances))


RESIDUALS: dict[str, tuple[Callable[[], ms.Problem], dict, dict]] = {
    "plate before an electrode": (
        lambda: ms.Problem(u.diff(t, 2) + k * u - V**2 / (g - u) ** 2, u, ordering={u: 1}, about={u: u_s}),
        {},
        {k: sp.Rational(2), g: sp.Integer(1), u_s: sp.Rational(1, 10)},
    ),
    "coupled pendula": (
        lambda: ms.Problem(
            [u.diff(t, 2) + sp.sin(u) + k * sp.sin(u - v), v.diff(t, 2) + 2 * sp.sin(v) + k * sp.sin(v - u)],
            [u, v],
            ordering={u: 1, v: 1, k: 1},
        ),
        {k: 1},
        {k: sp.Rational(3, 5)},
    ),
    "tanh damping": (
        lambda: ms.Problem(u.diff(t, 2) + u + mu * sp.tanh(u.diff(t)), u, ordering={u: 1, mu: 1}),
        {mu: 1},
        {mu: sp.Rational(1, 3)},
    ),
    "exponential spring": (lambda: ms.Problem(u.diff(t, 2) + sp.exp(u) - 1, u, ordering={u: 1}), {}, {}),
}


@pytest.mark.parametrize("order", [1, 3])
@pytest.mark.parametrize("name", RESIDUALS)
@pytest.mark.filterwarnings("ignore::multiscale.OrderingWarning")
def test_residual_of_the_equations_as_stated(name: str, order: int):
    """The functions themselves are evaluated, not their polynomials; orders carried or written out: no difference."""
    build, parameters, _ = RESIDUALS[name]
    problem = build()
    ordered = ms.expand(problem, order)
    assert ms.expand(_in_epsilon(problem, parameters), order).slow_flow.by_scale == ordered.slow_flow.by_scale
    ms.certify(ordered).require()


def test_residual_sees_a_wrong_coefficient():
    examination = examination_of(ms.expand(RESIDUALS["exponential spring"][0](), 3))
    wrong = flow_raised(examination.claim, 2, sp.I * examination.claim.amplitudes[0] / 10)
    assert all(1.8 < x < 2.2 for x in examination.exponents(wrong))
