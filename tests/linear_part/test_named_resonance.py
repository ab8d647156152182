"""Internal resonance 1:2 of a chain of three whose frequencies have no closed form, and the response of a driven pair,
against integration. All numbers are invented."""

from __future__ import annotations

import numpy as np
import pytest
import sympy as sp
from support.coupled import Motion, motion_errors, slope

import multiscale as ms

t = sp.Symbol("t", real=True)
eps, mu, f, sigma, Om, w1, w2, w3 = sp.symbols("epsilon mu f sigma Omega omega_1 omega_2 omega_3", positive=True)
x, y, z = (sp.Function(name)(t) for name in "xyz")
R = sp.Rational


def chain(last):
    """Frequencies 1, √2 and 2 for last = 2; the cubic for ω² does not factor for others."""
    return [
        x.diff(t, 2) + 2 * x - y + eps * x**2 + eps * x.diff(t) / 10,
        y.diff(t, 2) + 3 * y - x - z,
        z.diff(t, 2) + last * z - y,
    ]


@pytest.mark.filterwarnings("ignore::multiscale.errors.OrderingWarning")
@pytest.mark.parametrize("order", [1, 2])
def test_modes_without_a_closed_form_by_name(order):
    """The detuning is what the matrices say, so that the equations meant are the equations stated."""
    small, errors = [0.04, 0.02, 0.01], []
    for e in small:
        equations = chain(2 + R(str(e)) * R(7, 10))
        frequencies = ms.Problem(equations, [x, y, z], small=eps).natural_frequencies
        problem = ms.Problem(equations, [x, y, z], small=eps, resonances={w3: 2 * w1 + eps * sigma})
        result = ms.expand(problem, order, tolerance=0.0)
        assert len(result.slow_flow.phases) == 1
        detuning = float(frequencies[2] - 2 * frequencies[0]) / e
        errors += motion_errors(result, {sigma: detuning}, [0.3, 0.1, 0.2, 0.0, 0.2, 0.1], [e], 1.0)
    assert slope(small, errors) > order - 0.4
    assert errors[-1] < 0.02 * small[-1] ** order
    # Not resonant, the first order misses the exchange between the modes.
    plain = ms.expand(ms.Problem(equations, [x, y, z], small=eps), order, tolerance=0.0)
    assert motion_errors(plain, {}, [0.3, 0.1, 0.2, 0.0, 0.2, 0.1], [small[-1]], 1.0)[0] > 20 * errors[-1]


@pytest.mark.slow
def test_response_of_a_driven_pair():
    """Two coupled masses driven near their second mode: the settled fundamental of x, with an error O(ε²)."""
    integrate = pytest.importorskip("scipy.integrate").solve_ivp
    equations = [
        x.diff(t, 2) + 3 * x - y + eps * x**3 + eps * mu * x.diff(t) - eps * f * sp.cos(Om * t),
        y.diff(t, 2) + R(7, 3) * y - x + eps * mu * y.diff(t),
    ]
    problem = ms.Problem(equations, [x, y], small=eps, resonances={Om: w2 + eps * sigma}, modes=[1])
    result = ms.expand(problem, 2, tolerance=0.0)
    ms.certify(result).require()
    small, errors, level_one = [0.04, 0.02], [], []
    for e in small:
        values = {eps: e, mu: 0.5, f: 1.0, sigma: 1.2}
        (state,) = (s for s in ms.equilibria(result, values) if not s.spurious)
        rate = float(problem.mode_frequencies[w2]) + e * 1.2
        motion = Motion(problem, {eps: e, mu: 0.5, f: 1.0, Om: rate})
        jets = [result.to_numpy(derivative=d).bind(values)(0.0, np.array(state.state)) for d in (0, 1)]
        start = [jets[d][k] for k, d in motion.state]
        period = 2 * np.pi / rate
        settled = int(40 / e / period) * period
        grid = settled + np.arange(128) * period / 128
        path = integrate(motion.rhs, (0, settled + period), start, t_eval=grid, rtol=1e-9, atol=1e-11).y
        fundamental = 2 * abs(np.fft.rfft(path[motion.state.index((0, 0))])[1]) / 128
        errors.append(abs(fundamental - state.amplitudes[0]))
        first = ms.equilibria(ms.expand(problem, 1, tolerance=0.0), values)
        level_one.append(abs(fundamental - first[0].amplitudes[0]))
    assert slope(small, errors) > 1.7
    assert slope(small, level_one) < 1.4
