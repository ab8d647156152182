"""Forces that depend on two oscillators, or on one that is driven hard: averages over the torus."""

from __future__ import annotations

import numpy as np
import pytest
import sympy as sp

import multiscale as ms
from tests.published.integration import integrate, slope

t = sp.Symbol("t", real=True)
eps, w1, w2, c, s, f, Omega = sp.symbols("epsilon omega_1 omega_2 c sigma f Omega", positive=True)
u1, u2 = sp.Function("u1")(t), sp.Function("u2")(t)
VALUES = {"epsilon": 0.1, "omega_1": 1.1, "omega_2": 1.7, "c": 0.7, "sigma": 0.3, "f": 0.8, "Omega": 2.9}
STATE = np.array([0.5, 0.3, -0.4, 0.9])


def coupled(force, relation=None) -> ms.Expansion:
    equations = [u1.diff(t, 2) + w1**2 * u1 + eps * c * force, u2.diff(t, 2) + w2**2 * u2 - eps * c * force]
    return ms.expand(ms.Problem(equations, [u1, u2], small=eps, resonances=relation or {}), 1)


def bound(expansion: ms.Expansion, form: str = "cartesian", **options):
    function = expansion.slow_flow.to_numpy(form, **options)
    return function.bind({name: VALUES[name] for name in function.parameters})


REST = u1.diff(t) - u2.diff(t)
GAP = sp.Rational(1, 5)
CASES = {
    "tanh of the relative velocity": (sp.tanh(REST), np.tanh, None, None),
    "drag of the relative velocity": (sp.Abs(REST) * REST, lambda x: abs(x) * x, None, None),
    "tanh near 1:1": (sp.tanh(REST), np.tanh, {w2: w1 + eps * s}, (1, 1)),
    "tanh near 1:2": (sp.tanh(REST), np.tanh, {w2: 2 * w1 + eps * s}, (1, 2)),
    "drag near 1:1": (sp.Abs(REST) * REST, lambda x: abs(x) * x, {w2: w1 + eps * s}, (1, 1)),
    "drag near 1:2": (sp.Abs(REST) * REST, lambda x: abs(x) * x, {w2: 2 * w1 + eps * s}, (1, 2)),
    "clearance near 1:2": (sp.Max(REST - GAP, 0), lambda x: np.maximum(x - 0.2, 0), {w2: 2 * w1 + eps * s}, (1, 2)),
    "dry friction near 1:2": (sp.sign(REST), np.sign, {w2: 2 * w1 + eps * s}, (1, 2)),
}
PLAIN = {"dry friction near 1:2": 2e-6}


def average(function, numbers) -> np.ndarray:
    """The slow flow without detuning by a plain sum over the phases, in this test."""
    n = 512 if numbers is None else 65536
    angles = 2 * np.pi * np.arange(n) / n
    if numbers is None:
        first, second = np.meshgrid(angles, angles)
        omegas = VALUES["omega_1"], VALUES["omega_2"]
    else:
        first, second = numbers[0] * angles, numbers[1] * angles
        omegas = VALUES["omega_1"] * numbers[0], VALUES["omega_1"] * numbers[1]
    p, q = STATE[::2], STATE[1::2]
    speeds = [
        omega * (-a * np.sin(phi) + b * np.cos(phi))
        for omega, a, b, phi in zip(omegas, p, q, (first, second), strict=True)
    ]
    force = function(speeds[0] - speeds[1])
    rates = []
    for sign, omega, phi in zip((1, -1), omegas, (first, second), strict=True):
        # D_1A = i/(2ω) mean(force e^{−iφ}), p = 2 Re A, q = −2 Im A.
        change = 0.1 * 0.7 * sign * 1j / (2 * omega) * np.mean(force * np.exp(-1j * phi))
        rates += [2 * change.real, -2 * change.imag]
    return np.array(rates)


@pytest.mark.parametrize("name", CASES)
def test_against_a_sum_over_the_phases(name):
    force, function, relation, numbers = CASES[name]
    expected = average(function, numbers)
    if relation:
        # The detuning turns the second oscillator: dA/dt gets iεσA in the frame of the first.
        expected += 0.1 * 0.3 * np.array([0, 0, STATE[3], -STATE[2]])
    found = bound(coupled(force, relation))(0.0, STATE)
    # The plain sum is geometric for tanh, of order 1/n³ for drag, 1/n² for a clearance and 1/n for friction.
    assert np.abs(found - expected).max() < (
        1e-13 if function is np.tanh else PLAIN.get(name, 1e-9 if numbers else 1e-7)
    )


@pytest.mark.parametrize("name", CASES)
def test_the_three_forms_agree(name):
    force, _, relation, _ = CASES[name]
    expansion = coupled(force, relation)
    cartesian = bound(expansion)(0.0, STATE)
    amplitudes = (STATE[::2] - 1j * STATE[1::2]) / 2
    change = bound(expansion, "complex")(0.0, amplitudes)
    assert np.allclose(np.ravel([2 * change.real, -2 * change.imag], order="F"), cartesian, rtol=0, atol=1e-14)
    a, delta = 2 * np.abs(amplitudes), np.angle(amplitudes)
    growth = 2 * (change * np.exp(-1j * delta)).real
    turning = (change / amplitudes).imag
    frame = expansion.computation.frame
    phases = [np.dot(row, delta) for row in frame.resonant]
    polar = bound(expansion, "polar")(0.0, [*a, *phases, *(delta[j] for j in frame.cyclic)])
    expected = [*growth, *(np.dot(row, turning) for row in frame.resonant), *(turning[j] for j in frame.cyclic)]
    assert np.allclose(polar, expected, rtol=0, atol=1e-13)


@pytest.mark.parametrize("name", CASES)
def test_jacobian(name):
    force, _, relation, _ = CASES[name]
    expansion = coupled(force, relation)
    flow, h = bound(expansion), 1e-6
    differences = [(flow(0.0, STATE + h * e) - flow(0.0, STATE - h * e)) / (2 * h) for e in np.eye(4)]
    assert np.abs(bound(expansion, wrt="state")(0.0, STATE) - np.array(differences).T).max() < 1e-9


def test_an_oscillator_at_rest_is_driven_by_the_other():
    """Near 1:1 the force on a resting oscillator is not zero: the Cartesian form is regular there."""
    expansion = coupled(sp.tanh(REST), {w2: w1 + eps * s})
    flow = bound(expansion)
    at_rest, near = flow(0.0, [0.5, 0.3, 0.0, 0.0]), flow(0.0, [0.5, 0.3, 1e-9, 0.0])
    assert np.abs(at_rest[2:]).max() > 1e-3
    assert np.allclose(at_rest, near, atol=1e-9)


def test_symbolic_result_is_the_average():
    expansion = coupled(sp.tanh(REST))
    rate = expansion.slow_flow.polar[expansion.symbols.a[0]]
    (integral,) = rate.atoms(sp.Integral)
    assert len(integral.limits) == 2
    assert "theta" in sp.latex(rate)


def hard_driven(force) -> ms.Expansion:
    u = u1
    return ms.expand(ms.Problem(u.diff(t, 2) + w1**2 * u + eps * force - f * sp.cos(Omega * t), u, small=eps), 1)


def test_a_hard_drive_changes_the_damping():
    """tanh(u') along a cos + forced response, against direct integration: the error is O(ε)."""
    expansion = hard_driven(sp.tanh(2 * u1.diff(t)))
    assert expansion.slow_flow.phases == {}
    smalls, errors, controls = [0.1, 0.05, 0.025], [], []
    for small in smalls:
        values = {name: VALUES[name] for name in ("omega_1", "f", "Omega")} | {"epsilon": small}
        flow, motion = expansion.slow_flow.to_numpy().bind(values), expansion.to_numpy().bind(values)
        velocity = expansion.to_numpy(derivative=1).bind(values)
        times, start = np.linspace(0, 2 / small, 200), np.array([0.9, 0.2])

        def rhs(x, y, e=small):
            return [y[1], -(1.1**2) * y[0] - e * np.tanh(2 * y[1]) + 0.8 * np.cos(2.9 * x)]

        initial = [motion(0.0, start)[0], velocity(0.0, start)[0]]
        exact = integrate(rhs, initial, times)[0]
        errors.append(np.abs(motion(times, integrate(flow, start, times))[0] - exact).max())
        # Without the forced response in the argument, the damping is another one.
        undriven = expansion.slow_flow.to_numpy().bind(values | {"f": 1e-9})
        controls.append(np.abs(motion(times, integrate(undriven, start, times))[0] - exact).max())
    assert slope(smalls, errors) > 0.85
    assert slope(smalls, controls) < 0.5


def test_friction_between_two_oscillators():
    """sgn of the relative velocity: the force jumps, and the arcs end where the velocities meet."""
    found = bound(coupled(sp.sign(REST)))(0.0, STATE)
    # A plain sum over a torus with a jump has an error of order 1/n.
    assert np.abs(found - average(np.sign, None)).max() < 1e-4


REFUSED = {
    "second order": (lambda: ms.expand(_two(sp.tanh(REST)), 2), "leading order only"),
    "times a drive": (lambda: ms.expand(_two(sp.tanh(REST) * sp.cos(Omega * t)), 1), "multiplied by a drive"),
}


def _two(force) -> ms.Problem:
    return ms.Problem([u1.diff(t, 2) + w1**2 * u1 + eps * force, u2.diff(t, 2) + w2**2 * u2], [u1, u2], small=eps)


@pytest.mark.parametrize("name", REFUSED)
def test_refused(name):
    build, message = REFUSED[name]
    with pytest.raises(ms.UnsupportedTermError, match=message):
        build()


@pytest.mark.slow
def test_steady_states_of_two_oscillators_that_touch():
    """Near 1:2 a stop between the two: the state found is periodic to first order in the equations themselves."""
    gap, mu = 0.5, 0.1
    x1, x2, k = u1, u2, sp.Symbol("k", positive=True)
    push = k * sp.Max(x1 - x2 - sp.Rational(1, 2), 0)
    equations = [
        u1.diff(t, 2) + u1 + eps * (u1.diff(t) / 5 + push - f * sp.cos(Omega * t)),
        u2.diff(t, 2) + 4 * u2 + eps * (u2.diff(t) / 5 - push),
    ]
    expansion = ms.expand(ms.Problem(equations, [u1, u2], small=eps, resonances={Omega: 1 + eps * s}), 1)
    misses = []
    for small in (0.04, 0.02):
        (state,) = ms.equilibria(expansion, {"epsilon": small, "f": 0.3, "k": 0.5, "sigma": 0.1})
        assert state.stable
        assert state.amplitudes[1] > 0.05
        frequency = 1 + 0.1 * small

        def rhs(time, y, small=small, frequency=frequency):
            contact = 0.5 * max(y[0] - y[2] - gap, 0.0)
            first = -y[0] - small * (2 * mu * y[1] + contact - 0.3 * np.cos(frequency * time))
            return [y[1], first, y[3], -4 * y[2] - small * (2 * mu * y[3] - contact)]

        p1, q1, p2, q2 = state.state
        period = 2 * np.pi / frequency
        # From the state of the slow flow the motion settles on the periodic one.
        times = np.arange(0.0, 12 / (small * mu), period)[-1:]
        settled = pytest.importorskip("scipy.integrate").solve_ivp(
            rhs, (0, times[0]), [p1, q1, p2, 2 * q2], method="DOP853", rtol=1e-8, atol=1e-9
        )
        misses.append(np.linalg.norm(settled.y[:, -1] - [p1, q1, p2, 2 * q2]))
    assert misses[0] < 0.1
    assert np.log2(misses[0] / misses[1]) > 0.7
