"""u'' + u + 2εuv = 0, v'' + 4v + εu² = 0: two oscillators in the resonance 1:2, coupled by the potential εu²v."""

from __future__ import annotations

from fractions import Fraction as F

import numpy as np
import pytest
import sympy as sp

import multiscale as ms

from .integration import integrate, slope
from .lindstedt import Trig, add, cosine, derivative, scale, series_product
from .rational_series import along, root, terms
from .rows import Row, difference, over

t = sp.Symbol("t", real=True)
eps = sp.Symbol("epsilon", positive=True)
u, v = sp.Function("u")(t), sp.Function("v")(t)
PROBLEM = ms.Problem([u.diff(t, 2) + u + 2 * eps * u * v, v.diff(t, 2) + 4 * v + eps * u**2], [u, v], small=eps)

NAYFEH_MOOK = "Nayfeh & Mook, Nonlinear Oscillations, 1979, chapter 6, from memory, constants by averaging"
AVERAGING = "average of the forces over the common period by definite integrals; direct integration"


def rate(expression: sp.Expr, expansion: ms.Expansion) -> sp.Expr:
    """D_1 of a polynomial in A and its conjugate, by the product rule."""
    total = sp.Integer(0)
    for A, change in expansion.slow_flow.by_scale[1].items():
        bar = sp.Dummy()
        free = expression.subs(sp.conjugate(A), bar)
        part = free.diff(A) * change + free.diff(bar) * sp.conjugate(change)
        total += part.subs(bar, sp.conjugate(A))
    return sp.expand(total)


ROWS = [
    Row(
        name="slow flow of the first order",
        problem=PROBLEM,
        order=2,
        quantity=lambda e: tuple(e.slow_flow.by_scale[1][A] for A in e.symbols.A),
        value=lambda s: (sp.I * sp.conjugate(s.A[0]) * s.A[1], sp.I * s.A[0] ** 2 / 4),
        source=NAYFEH_MOOK,
        confirmed=AVERAGING,
    ),
    Row(
        name="solvability conditions of the first level",
        problem=PROBLEM,
        order=2,
        quantity=lambda e: tuple(e.levels[1].solvability.values()),
        value=lambda s: (sp.I * sp.conjugate(s.A[0]) * s.A[1], sp.I * s.A[0] ** 2 / 4),
        source=NAYFEH_MOOK,
        confirmed=AVERAGING,
    ),
]


@over(ROWS)
def test_published_value(row: Row):
    assert row.difference() == []


def test_first_order_alone_gives_the_flow_and_warns():
    with pytest.warns(ms.OrderingWarning, match="quadratic"):
        expansion = ms.expand(PROBLEM, order=1)
    a1, a2 = expansion.symbols.a
    (gamma,) = expansion.symbols.gamma
    polar = expansion.slow_flow.polar
    published = (-eps * a1 * a2 * sp.sin(gamma) / 2, eps * a1**2 * sp.sin(gamma) / 8)
    assert difference((polar[a1], polar[a2]), published) == []


def test_averaging_gives_the_published_flow():
    """a' = (1/2πω)∫ f sin, aβ' = (1/2πω)∫ f cos over the common period, for w'' + ω²w + f = 0."""
    a1, a2, theta = sp.symbols("a_1 a_2 theta", positive=True)
    b1, b2 = sp.symbols("beta_1 beta_2", real=True)
    wave1, wave2 = theta + b1, 2 * theta + b2
    f = (2 * a1 * sp.cos(wave1) * a2 * sp.cos(wave2), (a1 * sp.cos(wave1)) ** 2)
    A1, A2 = a1 * sp.exp(sp.I * b1) / 2, a2 * sp.exp(sp.I * b2) / 2
    published = (sp.I * sp.conjugate(A1) * A2, sp.I * A1**2 / 4)
    averaged = []
    for force, wave, omega, A in zip(f, (wave1, wave2), (1, 2), (A1, A2), strict=True):
        # (a' + i aβ')/2 · e^{iβ} is dA/dt.
        turning = (sp.sin(wave) + sp.I * sp.cos(wave)).rewrite(sp.exp)
        mean = sp.integrate(sp.expand(force.rewrite(sp.exp) * turning), (theta, 0, 2 * sp.pi)) / (2 * sp.pi * omega)
        averaged.append(mean * A / sp.Abs(A) / 2)
    assert [sp.simplify(sp.expand(x - y)) for x, y in zip(averaged, published, strict=True)] == [0, 0]


@pytest.mark.parametrize(
    "conserved",
    [
        pytest.param(lambda A1, A2: A1 * sp.conjugate(A1) + 4 * A2 * sp.conjugate(A2), id="action"),
        pytest.param(lambda A1, A2: A1**2 * sp.conjugate(A2) + sp.conjugate(A1) ** 2 * A2, id="coupling energy"),
    ],
)
def test_first_order_flow_conserves(conserved):
    expansion = ms.expand(PROBLEM, 2)
    assert rate(conserved(*expansion.symbols.A), expansion) == 0


@pytest.mark.parametrize("weight", [1, 2, -4])
def test_other_weights_of_the_action_are_not_conserved(weight: int):
    expansion = ms.expand(PROBLEM, 2)
    A1, A2 = expansion.symbols.A
    assert rate(A1 * sp.conjugate(A1) + weight * A2 * sp.conjugate(A2), expansion) != 0


# The periodic orbit of the coupled system in exact rationals: u = √8 x makes the leading amplitudes 1 and 1,
#     x'' + x + 2εxv = 0,  v'' + 4v + 8εx² = 0,   x = (1 + ε c_1 + …) cos θ + …,  v = cos 2θ + ….


def coupled_residual(n: int, x: list[Trig], v: list[Trig], frequency: list[F]) -> tuple[Trig, Trig]:
    """[εⁿ] of both equations with θ = ωt."""
    w = [cosine(0, c) if c else {} for c in frequency]
    square = series_product(w, w, n + 1)
    accelerations = [series_product(square, [derivative(derivative(f)) for f in field], n + 1)[n] for field in (x, v)]
    coupling, force = series_product(x, v, n)[n - 1], series_product(x, x, n)[n - 1]
    return (
        add(accelerations[0], x[n], scale(2, coupling)),
        add(accelerations[1], scale(4, v[n]), scale(8, force)),
    )


def coupled_orbit(order: int) -> tuple[list[F], list[F]]:
    """Frequency (through ε^order) and amplitude of x (through ε^(order − 1))."""
    x, v, frequency, amplitude = [cosine(1)], [cosine(2)], [F(1)], [F(1)]
    for n in range(1, order + 1):
        x.append({})
        v.append({})
        frequency.append(F(0))

        def resonant(n: int = n) -> tuple[F, F]:
            first, second = coupled_residual(n, x, v, frequency)
            return first.get((1, 0), F(0)), second.get((2, 0), F(0))

        # x_{n−1} does not move the first condition, since x cos θ and its frequency shift cancel at ω_1 = 1/2.
        frequency[n] = resonant()[0]
        if n > 1:
            below, left = x[n - 1], resonant()[1]
            x[n - 1] = add(below, cosine(1))
            amplitude.append(-left / (resonant()[1] - left))
            x[n - 1] = add(below, cosine(1, amplitude[-1]))
        assert resonant() == (0, 0)
        first, second = coupled_residual(n, x, v, frequency)
        x[n] = {(k, j): -c / (1 - k * k) for (k, j), c in first.items() if abs(k) != 1}
        v[n] = {(k, j): -c / (4 - k * k) for (k, j), c in second.items() if abs(k) != 2}
    return frequency, amplitude


COUPLED_ORDER = 7


@pytest.fixture(scope="module")
def locked():
    """The slow flow at γ = 0, a_2 = 1, in y = a_1²/8."""
    expansion = ms.expand(PROBLEM, COUPLED_ORDER)
    (a1, a2), (gamma,), beta1 = expansion.symbols.a, expansion.symbols.gamma, expansion.symbols.beta[0]
    y = sp.Symbol("y", positive=True)
    polar = expansion.slow_flow.polar
    names = {"a1": a1, "a2": a2, "gamma": gamma, "beta1": beta1}
    here = {a1: sp.sqrt(8 * y), a2: 1, gamma: 0}
    return {name: sp.expand(polar[x].subs(here)) for name, x in names.items()} | {"y": y}


@pytest.mark.parametrize("amplitude", ["a1", "a2"])
def test_amplitudes_rest_when_the_phases_are_locked(locked, amplitude: str):
    assert locked[amplitude] == 0


def test_locked_motion_is_the_periodic_orbit(locked):
    frequency, amplitude = coupled_orbit(COUPLED_ORDER)
    square = root(terms(locked["gamma"] / eps, locked["y"], eps), 1, COUPLED_ORDER)
    turn = along(terms(locked["beta1"], locked["y"], eps), [*square, F(0)])
    assert square == [sum(amplitude[k] * amplitude[n - k] for k in range(n + 1)) for n in range(COUPLED_ORDER)]
    assert [1 + turn[0], *turn[1:]] == frequency


# Direct integration. The slow state is prescribed and the start of the full system is reconstructed from it, so that
# both begin in the same state to the order that the field has.

SMALL = (0.04, 0.02, 0.01)
HORIZON = 3.0
STATE = (0.35 + 0.1j, 0.2 - 0.15j)


def full(small: float):
    return lambda _, y: [y[1], -y[0] - 2 * small * y[0] * y[2], y[3], -4 * y[2] - small * y[0] ** 2]


def reconstructed(expansion: ms.Expansion, small: float, times: np.ndarray, A: np.ndarray) -> np.ndarray:
    """u, u', v, v' in rows."""
    state = np.array([2 * A[0].real, -2 * A[0].imag, 2 * A[1].real, -2 * A[1].imag])
    parts = [expansion.to_numpy(derivative=d).bind(epsilon=small)(times, state) for d in (0, 1)]
    return np.array([parts[0][0], parts[1][0], parts[0][1], parts[1][1]])


def motion_errors(order: int, flip: tuple[int, int, int] | None = None) -> list[float]:
    """Largest error of u and v for each ε on 0 ≤ t ≤ HORIZON/ε.

    `flip` = (level, mode, term): the sign of that term of the slow flow is reversed.
    """
    expansion = ms.expand(PROBLEM, order)
    s = expansion.symbols
    flow = []
    for k, A in enumerate(s.A):
        total = sp.Integer(0)
        for n in range(1, order + 1):
            parts = list(sp.Add.make_args(expansion.slow_flow.by_scale[n][A]))
            if flip is not None and flip[:2] == (n, k):
                parts[flip[2]] = -parts[flip[2]]
            total += eps**n * sp.Add(*parts)
        flow.append(total)
    rhs = sp.lambdify((*s.A, eps), flow)
    errors = []
    for small in SMALL:
        times = np.linspace(0.0, HORIZON / small, 1500)
        slow = integrate(lambda _, y, small=small: rhs(*y, small), STATE, times)
        found = reconstructed(expansion, small, times, slow)
        exact = integrate(full(small), found[:, 0], times)
        errors.append(float(np.abs(found - exact)[[0, 2]].max()))
    return errors


BOUNDS = {1: 0.5, 2: 0.15, 3: 0.06}


# Order 1 with quadratic terms warns, as a test above requires.
@pytest.mark.filterwarnings("ignore::multiscale.OrderingWarning")
@pytest.mark.parametrize("order", [1, 2, 3])
def test_motion_error_is_of_the_order_of_the_expansion(order: int):
    errors = motion_errors(order)
    assert slope(SMALL, errors) > order - 0.15
    assert errors[-1] < BOUNDS[order] * SMALL[-1] ** order


@pytest.mark.filterwarnings("ignore::multiscale.OrderingWarning")
@pytest.mark.parametrize("flip", [(1, 0, 0), (1, 1, 0), (2, 0, 0), (2, 0, 1)], ids=str)
def test_a_flipped_sign_is_seen_by_integration(flip: tuple[int, int, int]):
    order = flip[0]
    errors = motion_errors(order, flip)
    assert slope(SMALL, errors) < order - 0.5


def leading_action(y: np.ndarray, weight: float) -> np.ndarray:
    """|A_1|² + weight·|A_2|² of the leading motion, from displacement and velocity."""
    return (y[0] ** 2 + y[1] ** 2 + weight * (y[2] ** 2 + y[3] ** 2 / 4)) / 4


@pytest.mark.parametrize(("weight", "least", "most"), [(4, 0.9, 1.5), (1, -0.2, 0.2)])
def test_action_in_direct_integration(weight: float, least: float, most: float):
    """The right combination varies by O(ε) over t = O(1/ε), another one by O(1)."""
    changes = []
    for small in SMALL:
        y = integrate(full(small), [0.7, 0.0, 0.1, 0.6], np.linspace(0.0, HORIZON / small, 1500))
        changes.append(float(np.ptp(leading_action(y, weight))))
    assert least < slope(SMALL, changes) < most
