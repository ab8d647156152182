"""Harmonics and observables agree with the displacement, with Fourier analysis, and with conservation of energy."""

from __future__ import annotations

from contextlib import nullcontext

import numpy as np
import pytest
import sympy as sp

import multiscale as ms

t = sp.Symbol("t", real=True)
eps, mu, alpha, beta, f, sigma, w, w2, m, k, Om = sp.symbols(
    "epsilon mu alpha beta f sigma omega omega_2 m k Omega", positive=True
)
u, v = sp.Function("u")(t), sp.Function("v")(t)
VALUES = {mu: 0.05, alpha: 0.8, beta: 0.6, f: 0.3, sigma: 0.4, w: 1.3, w2: 2.9, m: 0.7, k: 2.1}


def problem(equations, unknowns=u, resonances=()):
    return ms.Problem(equations, unknowns, small=eps, resonances=resonances)


def bound(function, small, extra=()):
    return function.bind(
        {s: x for s, x in VALUES.items() if s.name in function.parameters} | dict(extra), epsilon=small
    )


FREE = problem(m * u.diff(t, 2) + k * u + eps * beta * u**2 + eps**2 * alpha * u**3)
DRIVEN = problem(
    u.diff(t, 2) + w**2 * u + eps * (2 * mu * u.diff(t) + alpha * u**3 - f * sp.cos(Om * t)),
    resonances={Om: w + eps * sigma},
)
PAIR = problem([u.diff(t, 2) + w**2 * u + eps * alpha * u * v, v.diff(t, 2) + w2**2 * v + eps * beta * u**2], [u, v])


@pytest.mark.parametrize("stated", [FREE, DRIVEN, PAIR], ids=["free", "driven", "pair"])
def test_an_unknown_is_its_own_observable(stated):
    result = ms.expand(stated, 3)
    y = np.array([0.3, 0.2, -0.4, 0.5])[: 2 * len(stated.unknowns)]
    for j, x in enumerate(stated.unknowns):
        for d in (0, 1, 2):
            quantity = ms.observable(result, x.diff(t, d) if d else x)
            whole = bound(result.to_numpy(d), 0.1)(0.7, y)[j]
            np.testing.assert_allclose(bound(quantity.to_numpy(), 0.1)(0.7, y), whole, rtol=1e-12)


def test_energy_is_constant_along_the_motion_to_the_retained_order():
    """On a torus of fixed amplitude the energy of the reconstruction varies by O(ε^{N+1}) over a fast period."""
    energy = m * u.diff(t) ** 2 / 2 + k * u**2 / 2 + eps * beta * u**3 / 3 + eps**2 * alpha * u**4 / 4
    for order in (1, 2, 3):
        with pytest.warns(ms.OrderingWarning) if order == 1 else nullcontext():
            quantity = ms.observable(ms.expand(FREE, order), energy)
        varying = [c for key, c in quantity.harmonics.items() if key != 0]
        assert all(sp.expand(c) == 0 for c in varying)


def test_a_wrong_energy_is_seen():
    quantity = ms.observable(ms.expand(FREE, 2), m * u.diff(t) ** 2 / 2 + k * u**2 / 2)
    assert any(sp.expand(c) != 0 for key, c in quantity.harmonics.items() if key != 0)


@pytest.mark.parametrize("stated", [FREE, DRIVEN], ids=["free", "driven"])
def test_harmonics_are_the_fourier_coefficients(stated):
    result = ms.expand(stated, 3)
    found = ms.harmonics(result)[u]
    angle = next(iter(result.slow_flow.frame.values()))
    rate = float((angle / t).subs(Om, w + eps * sigma).subs(VALUES).subs(eps, 0.1))
    times = np.arange(64) / 64 * 2 * np.pi / rate
    y = np.array([0.5, 0.3])
    samples = bound(result.to_numpy(), 0.1)(times, y)[0]
    spectrum = np.fft.rfft(samples) / 64
    numbers = VALUES | {eps: 0.1, result.symbols.A[0]: (y[0] - 1j * y[1]) / 2}
    for key, c in found.items():
        assert complex(c.subs(numbers)) == pytest.approx(spectrum[key], rel=1e-9, abs=1e-12)
    assert set(found) >= {1, 3}
    assert (0 in found) == (stated is FREE)


def test_harmonics_of_two_modes_are_named_by_their_angles():
    found = ms.harmonics(ms.expand(PAIR, 2))[v]
    assert sp.expand(w2 * t) in {sp.expand(key) for key in found if key != 0}
    assert sp.expand(2 * w * t) in {sp.expand(key) for key in found if key != 0}


def test_transmitted_force_with_an_eliminated_frequency():
    result = ms.expand(DRIVEN, 2)
    force = ms.observable(result, Om**2 * u + 2 * eps * mu * u.diff(t))
    y = [0.4, 0.1]
    frequency = 1.3 + 0.1 * 0.4
    values = [bound(result.to_numpy(d), 0.1)(0.9, y)[0] for d in (0, 1)]
    found = bound(force.to_numpy(), 0.1)(0.9, y)
    assert float(found) == pytest.approx(frequency**2 * values[0] + 2 * 0.1 * 0.05 * values[1], abs=3e-3 * 0.1)
    numbers = VALUES | {eps: 0.1, Om: frequency, t: 0.9, result.symbols.A[0]: 0.2 - 0.05j}
    assert complex(force.solution("complex").subs(numbers)).real == pytest.approx(float(found), rel=1e-9)


@pytest.mark.parametrize("form", ["polar", "cartesian"])
def test_forms_of_an_observable_agree(form):
    result = ms.expand(DRIVEN, 2)
    quantity = ms.observable(result, u**2)
    s = result.symbols
    points = {"polar": {s.a[0]: 0.5, s.gamma[0]: np.arctan2(0.3, 0.4)}, "cartesian": {s.p[0]: 0.4, s.q[0]: 0.3}}
    numbers = VALUES | {eps: 0.1, Om: 1.34, t: 0.6}
    found = float(quantity.solution(form).subs(numbers | points[form]))
    assert found == pytest.approx(float(bound(quantity.to_numpy(), 0.1)(0.6, [0.4, 0.3])), rel=1e-9)


REFUSED = {
    "not a polynomial": (sp.sin(u), "expected a polynomial"),
    "third derivative": (u.diff(t, 3), "expected a polynomial"),
    "explicit time": (t * u, "constant in time"),
    "no expression": ("u", "expected a SymPy expression"),
}


@pytest.mark.parametrize("name", REFUSED)
def test_refused(name):
    expression, message = REFUSED[name]
    with pytest.raises(ms.MultiscaleError, match=message):
        ms.observable(ms.expand(FREE, 2), expression)


def test_a_stranger_has_no_number():
    with pytest.raises(ms.EvaluationError, match="lambda is no parameter"):
        ms.observable(ms.expand(FREE, 2), sp.Symbol("lambda") * u).to_numpy()
