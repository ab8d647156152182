"""Models and fits whatever the units, shapes and starting values."""

from __future__ import annotations

import numpy as np
import pytest
import sympy as sp

import multiscale as ms

t = sp.Symbol("t", real=True)


eps, mu, alpha, f, Omega, w0 = sp.symbols("epsilon mu alpha f Omega omega_0", positive=True)


w2 = sp.Symbol("omega_2", positive=True)


sigma = sp.Symbol("sigma", real=True)


u, v = sp.Function("u")(t), sp.Function("v")(t)


damped = u.diff(t, 2) + w0**2 * u + eps * (2 * mu * u.diff(t) + alpha * u**3)


@pytest.fixture(scope="module")
def free_motion():
    return ms.expand(ms.Problem(damped, u, small=eps), 2)


@pytest.fixture(scope="module")
def driven():
    equation = damped - eps * f * sp.cos(Omega * t)
    return ms.expand(ms.Problem(equation, u, small=eps, resonances={Omega: w0 + eps * sigma}), 2)


@pytest.fixture(scope="module")
def pair():
    equations = [
        u.diff(t, 2) + u + eps * (mu * u.diff(t) + 2 * u * v),
        v.diff(t, 2) + w2**2 * v + eps * (mu * v.diff(t) + u**2),
    ]
    return ms.expand(ms.Problem(equations, [u, v], small=eps, resonances={w2: 2 + eps * sigma}), 2)


def differences(model, x, step=1e-6):
    x = np.asarray(x, dtype=float)
    columns = []
    for k in range(len(x)):
        h = step * max(1.0, abs(x[k]))
        up, down = x.copy(), x.copy()
        up[k] += h
        down[k] -= h
        columns.append((model.predict(up) - model.predict(down)) / (2 * h))
    return np.array(columns).T


@pytest.mark.parametrize(("frequency", "amplitude"), [(6e7, 1e-11), (1e13, 1e-11), (1e-5, 1e11)])
def test_si_units(frequency, amplitude, free_motion):
    """Derivatives and fits do not depend on units: metres and radians per second of tiny and of huge oscillators."""
    start = [1e-3 * frequency, 0.02 * frequency**2 / amplitude**2, frequency, amplitude, 0.4 * amplitude]
    model = ms.ring_down_model(free_motion, np.linspace(0, 300 / frequency, 400), free=[mu, alpha, w0], known={eps: 1})
    jacobian = model.jacobian(start)
    for k, value in enumerate(start):
        up, down = list(start), list(start)
        up[k], down[k] = value * (1 + 1e-6), value * (1 - 1e-6)
        slope = (model.predict(up) - model.predict(down)) / (2e-6 * value)
        assert np.abs(jacobian[:, k] - slope).max() < 1e-4 * np.abs(slope).max()
    found = ms.fit(model, model.predict(start), np.multiply(start, [1.1, 0.95, 1.0002, 1.05, 0.95]))
    np.testing.assert_allclose(list(found.values.values()), start, rtol=1e-10)


def test_uncertainties_are_in_the_units_of_the_data(free_motion):
    """The same record in other units: equal values, and a misfit and a stated noise in those units."""
    times, noise = np.linspace(0, 60, 300), 1e-3
    model = ms.ring_down_model(free_motion, times, free=[mu], known={eps: 0.1, alpha: 0, w0: 1})
    record = model.predict([0.4, 1.0, 0.0]) + noise * np.random.default_rng(1).normal(size=300)
    for unit in (1.0, 1e-9):
        given = ms.fit(model, record * unit, [0.5, unit, 0.0], noise=noise * unit, f_scale=unit, loss="soft_l1")
        own = ms.fit(model, record * unit, [0.5, unit, 0.0])
        assert own.misfit == pytest.approx(noise * unit, rel=0.1)
        assert own.uncertainties["mu"] == pytest.approx(given.uncertainties["mu"], rel=0.1)
        assert own.values["mu"] == pytest.approx(0.4, abs=5 * own.uncertainties["mu"])


@pytest.mark.parametrize("observed", ["displacement", "velocity", "amplitude"])
def test_rest(observed, free_motion, driven):
    """At zero amplitude everything is finite; the amplitude counts as having no slope there."""
    model = ms.ring_down_model(
        free_motion, np.arange(20), free=["mu", "alpha"], known={"epsilon": 0.05, w0: 1}, observed=observed
    )
    assert not model.predict([0.3, 1.2, 0, 0]).any()
    jacobian = model.jacobian([0.3, 1.2, 0, 0])
    assert np.isfinite(jacobian).all()
    assert not jacobian[:, :2].any()
    assert jacobian[:, 2:].any() == (observed != "amplitude")
    forced = ms.ring_down_model(
        driven, np.linspace(0, 40, 50), free=[f], known={eps: 0.05, mu: 0.3, alpha: 1, w0: 1, sigma: 0}
    )
    expected = differences(forced, [0.3, 0.0, 0.0])
    assert np.abs(forced.jacobian([0.3, 0.0, 0.0]) - expected).max() < 1e-6 * np.abs(expected).max()
    silent = ms.response_model(driven, {Omega: [0.99, 1.0]}, free=[mu, f], known={eps: 0.05, alpha: 1, w0: 1})
    assert not silent.predict([0.3, 0.0]).any()
    assert np.isfinite(silent.jacobian([0.3, 0.0])).all()


@pytest.mark.parametrize(
    ("call", "words"),
    [
        (lambda free, driven: ms.ring_down_model(free, [0, 1, np.inf], free=[mu]), "finite, increasing"),
        (
            lambda free, driven: ms.ring_down_model(free, [0, 1], free=[mu], known={eps: 1, w0: 1, alpha: [1, 2]}),
            "'alpha' has 2 values",
        ),
        (lambda free, driven: ms.response_model(driven, {Omega: 1.0}, free=[mu]), "1-D and finite"),
        (lambda free, driven: ms.response_model(driven, {Omega: []}, free=[mu]), "at least one"),
        (lambda free, driven: ms.response_model(driven, {Omega: [1, np.nan]}, free=[mu]), "finite"),
    ],
)
def test_arrays_that_are_none(call, words, free_motion, driven):
    with pytest.raises(ms.EvaluationError, match=words):
        call(free_motion, driven)
