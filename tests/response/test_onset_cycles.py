"""Cycles at an onset against the periodic orbit itself, found by shooting on the equations as stated.

At μ = μ(a), of a series to order N, the orbit has the amplitude a(1 + O(a^N)), and its frequency at its own amplitude
is ω(a) + O(a^{N+2}). Numbers are invented where they are not those of a well-known model.
"""

from __future__ import annotations

import numpy as np
import pytest
import sympy as sp
from support.coupled import slope

import multiscale as ms

t = sp.Symbol("t", real=True)
mu = sp.Symbol("mu", real=True)
x, y, z, v = (sp.Function(name)(t) for name in "xyzv")
R = sp.Rational


def fitzhugh_nagumo():
    """x' = x − x³/3 − y + I, y' = (x − y/2)/4, about the state in which the trace vanishes; μ is added to I."""
    rest = -sp.sqrt(R(7, 8))
    X = rest + x
    fields = [X - X**3 / 3 - y + mu - (rest - rest**3 / 3), (x - y / 2) / 4]
    return [x, y], fields


def lorenz():
    """σ = 10, b = 8/3 about the state of rest x = y = c: r = 1 + c²/b, critical r = 470/19; c = c_0 + μ."""
    s, b = 10, R(8, 3)
    c = sp.sqrt(b * (R(470, 19) - 1)) + mu
    r = 1 + c**2 / b
    X, Y, Z = c + x, c + y, r - 1 + z
    return [x, y, z], [s * (Y - X), X * (r - Z) - Y, X * Y - b * Z]


def flutter():
    """A section with plunge x and pitch y in a stream: lift Q y, damping at leading order, pitch with a cubic spring.

    Q = Q_c + μ, with Q_c a root of Routh's condition.
    """
    mass, damping = sp.Matrix([[1, R(1, 5)], [R(1, 5), R(1, 4)]]), sp.diag(R(1, 10), R(1, 20))
    Q, s = sp.symbols("Q s")
    stiffness = sp.Matrix([[R(1, 4), Q], [0, R(1, 2) - R(2, 5) * Q]])
    c4, c3, c2, c1, c0 = sp.Poly((s**2 * mass + s * damping + stiffness).det(), s).all_coeffs()
    critical = min(sp.Poly(c3 * c2 * c1 - c4 * c1**2 - c3**2 * c0, Q).all_roots())
    force = damping * sp.Matrix([z, v]) + stiffness.subs(Q, critical + mu) * sp.Matrix([x, y]) + sp.Matrix([0, y**3])
    return [x, y, z, v], [z, v, *(-(mass.inv() * force))]


MODELS = {"FitzHugh-Nagumo": fitzhugh_nagumo, "Lorenz": lorenz, "flutter of a section": flutter}
CRITICALITY = {"FitzHugh-Nagumo": True, "Lorenz": False, "flutter of a section": True}


def series(name, order):
    unknowns, fields = MODELS[name]()
    equations = [sp.expand(u.diff(t) - f) for u, f in zip(unknowns, fields, strict=True)]
    problem = ms.Problem(equations, unknowns, ordering={**dict.fromkeys(unknowns, 1), mu: 2})
    result = ms.expand(problem, order, tolerance=0.0)
    return unknowns, fields, result, ms.onset(result, mu)


def orbit(unknowns, fields, deviation, start, period):
    """(amplitude of the fundamental of the first unknown, angular frequency) of the orbit near `start`."""
    integrate = pytest.importorskip("scipy.integrate").solve_ivp
    optimize = pytest.importorskip("scipy.optimize")
    rates = sp.lambdify(unknowns, [f.subs(mu, deviation) for f in fields])
    options = {"method": "DOP853", "rtol": 1e-12, "atol": 1e-15}
    forward = np.array(rates(*start), dtype=float)

    def closes(guess):
        state, T = guess[:-1], guess[-1]
        end = integrate(lambda _, s: rates(*s), (0, T), state, **options).y[:, -1]
        return [*(end - state), float(np.dot(state - start, forward))]

    found, _, _, message = optimize.fsolve(closes, [*start, period], xtol=1e-13, full_output=True)
    assert np.linalg.norm(closes(found)) < 1e-10, message
    grid = np.arange(256) * found[-1] / 256
    path = integrate(lambda _, s: rates(*s), (0, found[-1]), found[:-1], t_eval=grid, **options).y[0]
    return 2 * abs(np.fft.rfft(path)[1]) / 256, 2 * np.pi / found[-1]


@pytest.mark.slow
@pytest.mark.parametrize("name", MODELS)
@pytest.mark.parametrize("order", [2, 4])
def test_orbit_at_the_onset(name, order):
    size = {"FitzHugh-Nagumo": 0.2, "Lorenz": 1.0, "flutter of a section": 0.3}[name]
    sizes = [size, size / 2, size / 4]
    errors, turning = errors_at(name, order, sizes)
    assert slope(sizes, errors) > order - 0.3
    assert slope(sizes, turning) > order + 1.4


@pytest.mark.parametrize("name", MODELS)
def test_residual_has_the_order_promised(name):
    ms.certify(series(name, 2)[2]).require()


@pytest.mark.slow
def test_a_wrong_parameter_is_seen():
    sizes = [0.2, 0.1, 0.05]
    errors, _ = errors_at("FitzHugh-Nagumo", 2, sizes, wrong=1.05)
    assert slope(sizes, errors) < 0.5


def errors_at(name, order, sizes, wrong=1.0):
    """(relative errors of the amplitude, errors of the frequency) of orbits whose series have these amplitudes."""
    unknowns, fields, result, cycle = series(name, order)
    assert cycle.supercritical is CRITICALITY[name]
    a, small = result.symbols.a[0], result.problem.small
    parameter, frequency = (sp.lambdify(a, e.subs(small, 1)) for e in (cycle.parameter, cycle.frequency))
    errors, turning = [], []
    place = result.to_numpy()
    for amplitude in sizes:
        deviation = wrong * float(parameter(amplitude))
        start = place.bind({mu: deviation, small: 1})(0.0, np.array([amplitude, 0.0]))
        found, rate = orbit(unknowns, fields, deviation, start, 2 * np.pi / float(frequency(amplitude)))
        errors.append(abs(found / amplitude - 1))
        turning.append(abs(rate - float(frequency(found))))
    return errors, turning


def test_internal_damping_of_a_rotor():
    """Circular whirl beyond the threshold is exact: (c_e + c_i)W = c_i(Ω_c + μ), W² = 1 + a², through a⁴."""
    outer, inner = R(1, 5), R(1, 10)
    critical = 1 + outer / inner
    square = x**2 + y**2
    equations = [
        x.diff(t, 2) + (outer + inner) * x.diff(t) + x + inner * (critical + mu) * y + x * square,
        y.diff(t, 2) + (outer + inner) * y.diff(t) + y - inner * (critical + mu) * x + y * square,
    ]
    result = ms.expand(ms.Problem(equations, [x, y], ordering={x: 1, y: 1, mu: 2}), 4, tolerance=0.0)
    cycle, a = ms.onset(result, mu), result.symbols.a[0]
    whirl = 1 + a**2 / 2 - a**4 / 8
    found = [sp.expand(e.subs(result.problem.small, 1)) for e in (cycle.parameter, cycle.frequency)]
    assert found == [sp.expand(critical * (whirl - 1)), sp.expand(whirl)]
    assert cycle.supercritical
    ms.certify(result).require()
