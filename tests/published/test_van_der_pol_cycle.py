"""u'' + ε(u² − 1)u' + u = 0: the limit cycle alone to high order, and where its frequency series diverges."""

from __future__ import annotations

import math

import numpy as np
import pytest
import sympy as sp

import multiscale as ms

t = sp.Symbol("t", real=True)
eps = sp.Symbol("epsilon", positive=True)
u = sp.Function("u")(t)
PROBLEM = ms.Problem(u.diff(t, 2) + eps * (u**2 - 1) * u.diff(t) + u, u, small=eps)

# Andersen & Geer, Power series expansions for the frequency and period of the limit cycle of the van der Pol equation,
# SIAM Journal on Applied Mathematics 42 (1982) 678: frequency, and modulus of the nearest singularities in ε².
# From memory, confirmed by computation.
FREQUENCY = {0: "1", 2: "-1/16", 4: "17/3072", 6: "35/884736", 8: "-678899/5096079360"}
AMPLITUDE = {0: "2", 2: "1/64", 4: "-23/49152"}
MODULUS = 3.42


def test_coefficients():
    orbit = ms.periodic_series(PROBLEM, 8)
    assert orbit.frequency_coefficients == tuple(sp.Rational(FREQUENCY.get(n, 0)) for n in range(9))
    assert orbit.amplitude_coefficients[:6] == tuple(sp.Rational(AMPLITUDE.get(n, 0)) for n in range(6))


def test_the_peak():
    """Largest displacement 2 + ε²/96 − 1033ε⁴/552960, at the angle where u' = 0."""
    orbit = ms.periodic_series(PROBLEM, 12, shape=5)
    theta = sp.Symbol("theta")
    shape = orbit.displacement(theta)
    angle = sp.Integer(0)
    slope, bend = shape.diff(theta), shape.diff(theta, 2)
    for n in range(1, 6):
        value = sp.series(sp.expand(slope.subs(theta, angle)), eps, 0, n + 1).removeO()
        angle -= sp.cancel(value.coeff(eps, n) / bend.subs({theta: 0, eps: 0})) * eps**n
    peak = sp.series(shape.subs(theta, angle), eps, 0, 6).removeO()
    assert sp.expand(peak - (2 + eps**2 / 96 - sp.Rational(1033, 552960) * eps**4)) == 0


def test_period_at_epsilon_one():
    """2π/ω at ε = 1, within the circle of convergence, against integration in Taylor series."""
    pytest.importorskip("flint")
    orbit = ms.periodic_series(PROBLEM, 80, shape=0)
    frequency = sp.N(orbit.frequency.subs(eps, 1), 30)
    assert float(2 * math.pi / frequency) == pytest.approx(_period(1.0), abs=1e-11)


def _period(e):
    """The time between upward passages through zero on the cycle, by Taylor steps of order 24."""

    def step(x, y, h):
        p, q = [x], [y]
        for n in range(24):
            square = [sum(p[i] * p[k - i] for i in range(k + 1)) for k in range(n + 1)]
            damping = sum((square[k] - (k == 0)) * q[n - k] for k in range(n + 1))
            p.append(q[n] / (n + 1))
            q.append((-e * damping - p[n]) / (n + 1))
        return np.polyval(p[::-1], h), np.polyval(q[::-1], h)

    x, y, time, crossings, h = 2.0, 0.0, 0.0, [], 1 / 16
    while len(crossings) < 6:
        x_new, y_new = step(x, y, h)
        if x < 0 <= x_new:
            part = h * -x / (x_new - x)
            for _ in range(6):
                at = step(x, y, part)
                part -= at[0] / at[1]
            crossings.append(time + part)
        x, y, time = x_new, y_new, time + h
    return crossings[-1] - crossings[-2]


@pytest.mark.parametrize(
    ("order", "within"), [(40, 2e-3), pytest.param(80, 1e-4, marks=pytest.mark.slow)], ids=lambda x: str(x)
)
def test_nearest_singularities(order, within):
    """In ε²: a pair of modulus about 3.42; from order 80 on 3.4202 at ±1.7923 rad."""
    pytest.importorskip("flint")
    orbit = ms.periodic_series(PROBLEM, order, shape=0)
    found = orbit.singularities
    assert found.stride == 2
    lower, upper = found.points
    assert lower == upper.conjugate()
    assert abs(upper) == pytest.approx(MODULUS, abs=0.005)
    assert abs(upper) == pytest.approx(3.42019, abs=within)
    assert math.atan2(upper.imag, upper.real) == pytest.approx(1.79229, abs=within)
    assert orbit.radius == pytest.approx(MODULUS**0.5, abs=0.002)
    assert found.spread < within
