"""Which statements a noisy flow accepts, and what their order makes of it."""

from __future__ import annotations

import numpy as np
import pytest
import sympy as sp

import multiscale as ms

t = sp.Symbol("t", real=True)


eps, mu, alpha, f, Omega, w0, m, S = sp.symbols("epsilon mu alpha f Omega omega_0 m S", positive=True)


sigma = sp.Symbol("sigma", real=True)


u, v = sp.Function("u")(t), sp.Function("v")(t)


OMEGA0, MASS = 1.5, 2.0


VALUES = {eps: 0.02, mu: 0.6, alpha: 2.0, f: 2.4, Omega: 1.506, w0: OMEGA0, m: MASS}


DENSITY = 2e-4


@pytest.fixture(scope="module")
def driven():
    equation = m * (u.diff(t, 2) + w0**2 * u + eps * (2 * mu * u.diff(t) + alpha * u**3 - f * sp.cos(Omega * t)))
    return ms.expand(ms.Problem(equation, u, small=eps, resonances={Omega: w0 + eps * sigma}), 2)


@pytest.fixture(scope="module")
def record():
    """Quadratures of 400 oscillators under independent noise, from the full equation: the linear motion is exact in
    every step, and the weak forces act in its middle."""
    rng = np.random.default_rng(42)
    e, damping, cubic, drive, frequency = (float(VALUES[s]) for s in (eps, mu, alpha, f, Omega))
    count, step, keep = 400, 0.2, 5
    x, y = np.zeros(count), np.zeros(count)
    cosine, sine = np.cos(OMEGA0 * step / 2), np.sin(OMEGA0 * step / 2)
    loss, kick = np.exp(-2 * e * damping * step), np.sqrt(DENSITY * step) / MASS

    def turned(x, y):
        return x * cosine + y / OMEGA0 * sine, y * cosine - x * OMEGA0 * sine

    kept = []
    for n in range(20_000):
        x, y = turned(x, y)
        weak = drive * np.cos(frequency * (n + 0.5) * step) - cubic * x**3
        y = loss * y + e * step * weak + kick * rng.normal(size=count)
        x, y = turned(x, y)
        if n >= 2_500 and n % keep == 0:
            angle = frequency * (n + 1) * step
            turn = np.cos(angle), np.sin(angle)
            kept.append([x * turn[0] - y / frequency * turn[1], x * turn[1] + y / frequency * turn[0]])
    return step * keep, np.array(kept)


@pytest.fixture(scope="module")
def state(driven):
    (only,) = ms.equilibria(driven, VALUES)
    return only.state


@pytest.mark.parametrize(
    "equations",
    [
        [u.diff(t, 2) + 3 * u - v + eps * mu * u.diff(t), v.diff(t, 2) + 4 * v - u],
        [u.diff(t, 2) + 3 * u - v.diff(t), v.diff(t, 2) + 4 * v + u.diff(t) + eps * mu * v.diff(t)],
        [u.diff(t, 2) + 3 * u + eps * u**3 + eps * mu * u.diff(t), v.diff(t) + v],
    ],
    ids=["stiffness", "gyroscopic", "slaved"],
)
def test_coupled_leading_orders_are_refused(equations):
    """A force on one equation acts on several modes there: no intensity of one oscillator alone is right."""
    coupled = ms.expand(ms.Problem(equations, [u, v], small=eps), 1)
    with pytest.raises(ms.ProblemError, match="no oscillators of their own"):
        ms.noisy_flow(coupled, {u: S})


def test_the_order_of_the_equations_does_not_matter():
    equations = [3 * v.diff(t, 2) + 6 * v + eps * mu * v.diff(t), u.diff(t, 2) + u + eps * mu * u.diff(t)]
    pair = ms.expand(ms.Problem(equations, [u, v], small=eps), 1)
    assert list(ms.noisy_flow(pair, {v: S}).intensity.values()) == [0, 0, S / 36, S / 36]
    ordered = ms.Problem(2 * u.diff(t, 2) + 8 * u + mu * u.diff(t) + u**3, u, ordering={u: 1, mu: 2})
    assert list(ms.noisy_flow(ms.expand(ordered, 2), {u: S}).intensity.values()) == [S / 32, S / 32]
