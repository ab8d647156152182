"""Free decay with a stop: when powers of the velocity stop, what is refused, states for other functions."""

from __future__ import annotations

import math

import numpy as np
import pytest
import sympy as sp

import multiscale as ms

pytest.importorskip("scipy.integrate")

t = sp.Symbol("t", real=True)
eps, w, mu, f, Omega = sp.symbols("epsilon omega_0 mu f Omega", positive=True)
s = sp.Symbol("sigma", real=True)
u = sp.Function("u")(t)
v = u.diff(t)
VALUES = {eps: 0.05, w: 1.3}


def expansion(force, **options) -> ms.Expansion:
    return ms.expand(ms.Problem(u.diff(t, 2) + w**2 * u + eps * force, u, small=eps, **options), 1)


@pytest.mark.parametrize("p", ["0", "0.25", "0.5", "0.9"])
def test_time_of_the_stop(p):
    """da/dt = −κ a^p, κ = ε ω^{p−1} Γ(1 + p/2)/(√π Γ((3 + p)/2)): it stops at a(0)^{1−p}/(κ (1 − p))."""
    decay = expansion(sp.Abs(v) ** sp.Rational(p) * sp.sign(v))
    p = float(p)
    kappa = 0.05 * 1.3 ** (p - 1) * math.gamma(1 + p / 2) / (math.sqrt(math.pi) * math.gamma((3 + p) / 2))
    stop = 0.8 ** (1 - p) / (kappa * (1 - p))
    times = np.linspace(0, 1.2 * stop, 13)
    found = ms.ring_down(decay, VALUES, [0.48, 0.64], times)
    assert found.stop == pytest.approx(stop, rel=1e-7)
    inside = times < stop
    expected = (0.8 ** (1 - p) - kappa * (1 - p) * times[inside]) ** (1 / (1 - p))
    assert np.abs(found.amplitude[inside] - expected).max() < 1e-8
    assert not found.state[:, ~inside].any()
    # Out of range from where the loss of half a period is the amplitude: a^{1−p} = κ π/ω.
    assert found.in_range_until == pytest.approx(stop - math.pi / 1.3 / (1 - p), rel=1e-6)


@pytest.mark.parametrize("force", [v, sp.Abs(v) * v, mu * v + sp.Abs(v) ** sp.Rational(3, 2) * sp.sign(v)], ids=str)
def test_no_stop(force):
    values = VALUES | ({mu: 0.3} if mu in force.free_symbols else {})
    found = ms.ring_down(expansion(force), values, [1.0, 0.0], np.linspace(0, 200, 5))
    assert found.stop is None
    assert found.in_range_until == math.inf
    assert (np.diff(found.amplitude) < 0).all()


def test_a_viscous_decay_to_nothing_is_no_stop():
    assert ms.ring_down(expansion(v), VALUES, [1.0, 0.0], [0.0, 500.0, 2000.0]).stop is None


def test_an_end_before_the_stop_is_no_stop():
    found = ms.ring_down(expansion(sp.sign(v)), VALUES, [1.0, 0.0], [0.0, 10.0])
    assert found.stop is None
    assert found.in_range_until == math.inf


def test_too_much_friction_is_out_of_range_at_once():
    found = ms.ring_down(expansion(sp.sign(v)), {eps: 2.0, w: 1.0}, [1.0, 0.0], [3.0, 10.0])
    assert found.in_range_until == 3.0


def test_states_are_those_of_the_displacement():
    decay = expansion(sp.sign(v) + u**3)
    times = np.linspace(0, 30, 50)
    found = ms.ring_down(decay, VALUES, [0.6, 0.8], times)
    assert decay.to_numpy().bind(VALUES)(times, found.state).shape == (1, 50)
    assert np.allclose(np.hypot(*found.state), found.amplitude)
    # The cubic force turns the phase: β' = 3εa²/(8ω), integrated over the linear decay of a.
    rate = 2 * 0.05 / (math.pi * 1.3)
    turned = 3 * 0.05 / (8 * 1.3) * (1 - (1 - rate * 30) ** 3) / (3 * rate)
    beta = np.unwrap(np.arctan2(-found.state[1], found.state[0]))
    assert beta[-1] - beta[0] == pytest.approx(turned, rel=1e-9)


def test_refused():
    driven = expansion(sp.sign(v) - f * sp.cos(Omega * t), resonances={Omega: w + eps * s})
    with pytest.raises(ms.EvaluationError, match="one oscillator without drives"):
        ms.ring_down(driven, VALUES | {f: 1.0, s: 0.0}, [1.0, 0.0], [0.0, 1.0])
    decay = expansion(sp.sign(v))
    with pytest.raises(ms.EvaluationError, match="increasing times"):
        ms.ring_down(decay, VALUES, [1.0, 0.0], [0.0, 0.0])
    with pytest.raises(ms.EvaluationError, match="not zero"):
        ms.ring_down(decay, VALUES, [0.0, 0.0], [0.0, 1.0])
