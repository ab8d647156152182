"""Damping that is not linear: drag, Coulomb friction, powers of the velocity, at first order."""

from __future__ import annotations

import mpmath
import numpy as np
import pytest
import sympy as sp

import multiscale as ms

from .integration import TOLERANCE, slope
from .rows import Row, over

t = sp.Symbol("t", real=True)
eps, w = sp.symbols("epsilon omega_0", positive=True)
u = sp.Function("u")(t)
v = u.diff(t)


def damped(force: sp.Expr, omega: sp.Expr | int = 1) -> ms.Problem:
    return ms.Problem(u.diff(t, 2) + omega**2 * u + eps * force, u, small=eps)


def decay(expansion: ms.Expansion) -> sp.Expr:
    return expansion.slow_flow.polar[expansion.symbols.a[0]]


NAYFEH = "Nayfeh & Mook, Nonlinear Oscillations, 1979, §3.3 (from memory, confirmed by computation)"
ROWS = [
    Row(
        name="drag",
        problem=damped(sp.Abs(v) * v),
        order=1,
        quantity=decay,
        value=lambda s: -4 * eps * s.a[0] ** 2 / (3 * sp.pi),
        source=NAYFEH,
        confirmed="energy lost in a cycle",
    ),
    Row(
        name="drag, any frequency",
        problem=damped(sp.Abs(v) * v, w),
        order=1,
        quantity=decay,
        value=lambda s: -4 * eps * w * s.a[0] ** 2 / (3 * sp.pi),
        source=NAYFEH,
        confirmed="energy lost in a cycle",
    ),
    Row(
        name="Coulomb friction",
        problem=damped(sp.sign(v)),
        order=1,
        quantity=lambda e: tuple(e.slow_flow.polar.values()),
        value=lambda s: (-2 * eps / sp.pi, 0),
        source="elementary: shifted cosines between stops",
        confirmed="the piecewise solution",
    ),
]


@over(ROWS)
def test_published_value(row: Row):
    assert row.difference() == []


def test_coulomb_friction_takes_four_epsilon_in_a_cycle():
    assert decay(ms.expand(ROWS[2].problem, 1)) * 2 * sp.pi == -4 * eps


def coulomb_stops(start: float, small: float) -> list[tuple[float, float]]:
    """(time, |u|) at the stops of u'' + u + ε sgn u' = 0 from rest at `start`, by shifted cosines."""
    found, height, time = [], start, 0.0
    while height > small:
        # Between stops u ∓ ε turns like a cosine: half a turn about the centre ±ε.
        height, time = height - 2 * small, time + np.pi
        if height < 0:
            break
        found.append((time, height))
    return found


@pytest.mark.parametrize("small", [0.01, 0.05, 0.13])
def test_coulomb_friction_is_exact_at_every_stop(small: float):
    stops = np.array(coulomb_stops(1.0, small)).T
    times = np.concatenate(([0.0], stops[0], [np.pi / (2 * small) + 1]))
    found = ms.ring_down(ms.expand(ROWS[2].problem, 1), {eps: small}, [1.0, 0.0], times)
    assert len(stops[0]) >= 3
    assert np.abs(found.amplitude[1:-1] - stops[1]).max() < 1e-9
    assert found.amplitude[-1] == 0
    assert found.stop == pytest.approx(np.pi / (2 * small), rel=1e-9)
    # The oscillator rests within a half-period of that; from a = 2ε on, averaging cannot say where.
    assert found.in_range_until == pytest.approx(found.stop - np.pi, rel=1e-6)
    assert stops[0][-1] <= found.stop <= stops[0][-1] + np.pi + 1e-6


@pytest.mark.parametrize("p", [sp.Integer(0), sp.Rational(1, 2), sp.Integer(1), sp.Rational(3, 2), sp.Integer(2), 3])
def test_power_law_from_the_energy_lost_in_a_cycle(p):
    """a a' ω² = −ε·(mean of |u'|^{p+1}), by mpmath to 30 digits."""
    p = sp.sympify(p)
    expansion = ms.expand(damped(sp.Abs(v) ** p * sp.sign(v), w), 1)
    with mpmath.workdps(30):
        a, omega = mpmath.mpf("1.37"), mpmath.mpf("1.9")
        mean = mpmath.quad(lambda x: (a * omega * mpmath.sin(x)) ** (mpmath.mpf(p.p) / p.q + 1), [0, mpmath.pi / 2])
        expected = -mean * 2 / mpmath.pi / (a * omega**2)
        got = decay(expansion).subs({eps: 1, w: sp.Rational(19, 10), expansion.symbols.a[0]: sp.Rational(137, 100)})
        assert abs(mpmath.mpf(str(sp.N(got, 30))) / expected - 1) < 1e-25


def test_a_symbolic_power_contains_the_numbers():
    p = sp.Symbol("p", positive=True)
    symbolic = decay(ms.expand(damped(sp.Abs(v) ** p * sp.sign(v), w), 1))
    for value in (sp.Rational(1, 2), sp.Rational(3, 2), sp.Integer(2), sp.Integer(3)):
        numeric = decay(ms.expand(damped(sp.Abs(v) ** value * sp.sign(v), w), 1))
        assert sp.simplify(symbolic.subs(p, value) - numeric) == 0


def free_decay(small: float, horizon: float, linear: float, drag: float, friction: float) -> tuple[np.ndarray, ...]:
    """Turning points of u'' + u + ε(2μu' + c|u'|u' + f sgn u') = 0 from rest at 1, half-cycle by half-cycle."""
    scipy_integrate = pytest.importorskip("scipy.integrate")

    def turning(_: float, y: np.ndarray) -> float:
        return y[1]

    turning.terminal = True
    times, heights, y, time = [0.0], [1.0], np.array([1.0, 0.0]), 0.0
    while time < horizon:
        sign = -np.sign(y[0])
        turning.direction = -sign

        def rhs(_: float, z: np.ndarray, sign: float = sign) -> list[float]:
            force = 2 * linear * z[1] + drag * sign * z[1] ** 2 + friction * sign
            return [z[1], -z[0] - small * force]

        # A tiny first velocity keeps the event at the start from being found again.
        begin = rhs(0.0, y)[1] * 1e-6
        found = scipy_integrate.solve_ivp(
            rhs, (time, time + 5), [y[0], y[1] + begin], events=turning, max_step=0.1, **TOLERANCE
        )
        time, y = found.t_events[0][-1], np.array([found.y_events[0][-1][0], 0.0])
        times.append(time)
        heights.append(abs(y[0]))
    return np.array(times), np.array(heights)


def test_ring_down_with_three_kinds_of_damping():
    """The amplitude on t ~ 1/ε is right to O(ε), and leaving out one of the three is seen."""
    linear, drag, friction = 0.2, 0.5, 0.15
    mu, c, f = sp.symbols("mu c f", positive=True)
    expansion = ms.expand(damped(2 * mu * v + c * sp.Abs(v) * v + f * sp.sign(v)), 1)
    smalls, errors, controls = [0.16, 0.08, 0.04], [], []
    for small in smalls:
        times, heights = free_decay(small, 1.2 / small, linear, drag, friction)
        values = {eps: small, mu: linear, c: drag, f: friction}
        errors.append(np.abs(ms.ring_down(expansion, values, [1.0, 0.0], times).amplitude - heights).max())
        worse = ms.ring_down(expansion, values | {f: 0.8 * friction}, [1.0, 0.0], times)
        controls.append(np.abs(worse.amplitude - heights).max())
    assert slope(smalls, errors) > 0.9
    assert errors[-1] < 0.2 * smalls[-1]
    assert slope(smalls, controls) < 0.4
