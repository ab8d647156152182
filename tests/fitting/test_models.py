"""Models of measurements: derivatives against differences, predictions against the equations, recovered values."""

from __future__ import annotations

import numpy as np
import pytest
import sympy as sp
from scipy.integrate import solve_ivp

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


@pytest.mark.parametrize("observed", ["displacement", "velocity", "amplitude"])
def test_ring_down_derivatives(free_motion, observed):
    times = np.linspace(0, 80, 300)
    model = ms.ring_down_model(free_motion, times, free=[mu, alpha, "omega_0"], known={eps: 0.1}, observed=observed)
    x = [0.3, 1.1, 1.4, 0.8, -0.6]
    assert model.names == ("mu", "alpha", "omega_0", "p", "q")
    np.testing.assert_allclose(model.jacobian(x), differences(model, x), atol=2e-6 * np.abs(model.jacobian(x)).max())


@pytest.mark.parametrize("index", [0, 1])
def test_ring_down_of_two_modes(pair, index):
    model = ms.ring_down_model(pair, np.linspace(3, 50, 90), free=["mu", "sigma"], known={eps: 0.05}, index=index)
    x = [0.4, 0.3, 0.8, -0.6, 0.1, 0.2]
    assert model.names == ("mu", "sigma", "p_1", "q_1", "p_2", "q_2")
    np.testing.assert_allclose(model.jacobian(x), differences(model, x), atol=2e-6 * np.abs(model.jacobian(x)).max())


@pytest.mark.parametrize("observed", ["amplitude", "quadratures"])
@pytest.mark.parametrize("swept", [Omega, sigma], ids=str)
def test_response_derivatives(driven, observed, swept):
    values = np.linspace(1.97, 2.05, 31) if swept == Omega else np.linspace(-0.6, 1.0, 31)
    model = ms.response_model(
        driven, {swept: values}, free=["mu", alpha, "omega_0", f], known={eps: 0.05}, observed=observed
    )
    x = [0.1, 1.0, 2.0, 0.3]
    slopes = model.jacobian(x)
    np.testing.assert_allclose(slopes, differences(model, x, 1e-7), atol=1e-5 * np.abs(slopes).max())


def test_rising_and_falling_sweeps_differ_where_two_states_are_stable(driven):
    values = np.linspace(1.97, 2.1, 80)
    known, x = {eps: 0.05, w0: 2.0}, [0.05, 1.0, 0.6]
    rising = ms.response_model(driven, {Omega: values}, free=[mu, alpha, f], known=known).predict(x)
    falling = ms.response_model(driven, {Omega: values[::-1]}, free=[mu, alpha, f], known=known).predict(x)[::-1]
    assert (rising >= falling - 1e-9).all()
    assert (rising > 1.5 * falling).sum() > 5
    jump = np.abs(np.diff(rising)).argmax()
    assert rising[jump] > 2 * rising[jump + 1]


def test_values_are_recovered_from_the_equation_itself(free_motion):
    """The record is an integration of the full equation with noise; the truth lies within three standard deviations,
    and the expansion's own error O(ε²) below the noise."""
    truth = {"epsilon": 0.02, "mu": 0.5, "alpha": 1.3, "omega_0": 2.0}
    rng = np.random.default_rng(5)
    times = np.linspace(0, 150, 1500)

    def rate(time, y):
        e, m, a, w = truth.values()
        return [y[1], -(w**2) * y[0] - e * (2 * m * y[1] + a * y[0] ** 3)]

    record = solve_ivp(rate, (0, 150), [1.0, 0.0], t_eval=times, rtol=1e-10, atol=1e-12, method="DOP853").y[0]
    record = record + rng.normal(0, 0.01, len(times))
    model = ms.ring_down_model(free_motion, times, free=[mu, alpha, w0], known={eps: truth["epsilon"]})
    found = ms.fit(model, record, {"mu": 0.4, "alpha": 1.0, "omega_0": 2.001, "p": 0.9, "q": 0.1})
    for name in ("mu", "alpha", "omega_0"):
        assert abs(found.values[name] - truth[name]) < 3 * found.uncertainties[name]
        assert found.uncertainties[name] < 0.03 * truth[name]
    assert found.misfit == pytest.approx(0.01, rel=0.1)
    assert "mu = " in repr(found)


def test_uncertainties_cover_the_truth_as_often_as_they_should(free_motion):
    """Of 40 records with new noise about 68 % of the deviations are below one standard deviation."""
    times = np.linspace(0, 60, 200)
    model = ms.ring_down_model(free_motion, times, free=[mu, alpha], known={eps: 0.05, w0: 1.5})
    truth = np.array([0.4, 1.0, 1.0, 0.0])
    clean = model.predict(truth)
    rng = np.random.default_rng(11)
    inside = []
    for _ in range(40):
        found = ms.fit(model, clean + rng.normal(0, 0.02, len(times)), truth, noise=0.02)
        inside += [
            abs(value - true) < found.uncertainties[name]
            for (name, value), true in zip(found.values.items(), truth, strict=True)
        ]
    assert 0.58 < np.mean(inside) < 0.78


@pytest.mark.parametrize(
    ("call", "words"),
    [
        (lambda e, d: ms.ring_down_model(e, [0, 1], free=["nu"], known={eps: 0.1}), "unknown parameter 'nu'"),
        (lambda e, d: ms.ring_down_model(e, [0, 1], free=["mu"], known={eps: 0.1}), "missing parameter alpha"),
        (lambda e, d: ms.ring_down_model(e, [0, 1], free=[mu, mu], known={}), "given twice"),
        (lambda e, d: ms.ring_down_model(e, [0, 1], free=[mu], known={"mu": 1}), "given twice"),
        (lambda e, d: ms.ring_down_model(e, [1, 0], free=[mu, alpha, w0], known={eps: 1}), "increasing"),
        (lambda e, d: ms.ring_down_model(e, [0, 1], free=[mu], observed="phase"), "observed"),
        (lambda e, d: ms.ring_down_model(e, [0, 1], free=[mu], index=1), "index"),
        (lambda e, d: ms.ring_down_model(e, [0, 1], free=[3.0]), "no parameter"),
        (lambda e, d: ms.response_model(d, {Omega: [1, 3, 2]}, free=[mu]), "rise, or fall"),
        (lambda e, d: ms.response_model(d, {}, free=[mu]), "expected one"),
        (lambda e, d: ms.response_model(d, {Omega: [1, 2]}, free=[mu], mode=2), "mode is 2"),
        (lambda e, d: ms.response_model(d, {Omega: [1, 2]}, free=[mu], observed="phase"), "observed"),
    ],
)
def test_errors_say_what_to_write(free_motion, driven, call, words):
    with pytest.raises(ms.EvaluationError, match=words):
        call(free_motion, driven)


def test_errors_of_a_fit(free_motion):
    model = ms.ring_down_model(free_motion, np.linspace(0, 9, 40), free=[mu], known={eps: 0.1, alpha: 1.0, w0: 1.0})
    with pytest.raises(ms.EvaluationError, match="expected one value for each of mu, p, q"):
        ms.fit(model, np.zeros(40), {"mu": 1.0})
    with pytest.raises(ms.EvaluationError, match="shape"):
        ms.fit(model, np.zeros(41), [0.1, 1.0, 0.0])
    with pytest.raises(ms.EvaluationError, match=r"x has shape \(2,\)"):
        model.predict([1.0, 2.0])
    with pytest.raises(ms.EvaluationError, match="3 finite values"):
        ms.fit(model, np.zeros(40), [0.1, np.nan, 0.0])


def test_values_that_data_do_not_determine_have_infinite_uncertainty():
    """Only ε μ and ε α matter to a first-order flow."""
    result = ms.expand(ms.Problem(damped.subs(w0, 1), u, small=eps), 1)
    times = np.linspace(0, 60, 120)
    model = ms.ring_down_model(result, times, free=[mu, eps], known={alpha: 0})
    data = model.predict([0.3, 0.05, 1.0, 0.2]) + np.random.default_rng(3).normal(0, 0.01, 120)
    found = ms.fit(model, data, [0.25, 0.06, 1.0, 0.1], noise=0.01)
    assert found.uncertainties["mu"] == found.uncertainties["epsilon"] == np.inf
    known = ms.fit(ms.ring_down_model(result, times, free=[mu], known={alpha: 0, eps: 0.05}), data, [0.25, 1.0, 0.1])
    assert found.uncertainties["p"] == pytest.approx(known.uncertainties["p"], rel=0.2)
    assert found.values["mu"] * found.values["epsilon"] == pytest.approx(0.05 * known.values["mu"], rel=1e-6)


def test_a_parameter_without_influence_is_not_determined():
    class Line:
        names = ("slope", "idle")

        def predict(self, x):
            return x[0] * np.arange(5.0)

        def jacobian(self, x):
            return np.array([np.arange(5.0), np.zeros(5)]).T

    found = ms.fit(Line(), 2 * np.arange(5.0), [1.0, 1.0], noise=1.0)
    assert found.uncertainties["idle"] == np.inf
    assert found.uncertainties["slope"] == pytest.approx(1 / np.sqrt(30))


@pytest.mark.parametrize("times", [[0, 1, np.inf], [-np.inf, 0, 1]])
def test_times_are_finite(free_motion, times):
    with pytest.raises(ms.EvaluationError, match="finite"):
        ms.ring_down_model(free_motion, times, free=[mu], known={alpha: 1, eps: 0.1, w0: 1})


@pytest.mark.parametrize("sweep", [np.array([]), np.array(2.0), [[1.0, 2.0]]])
def test_a_sweep_is_one_dimensional_and_has_values(driven, sweep):
    with pytest.raises(ms.EvaluationError, match="1-D and finite, at least one"):
        ms.response_model(driven, {Omega: sweep}, free=[mu])


def test_a_swept_parameter_is_not_known_too(driven):
    with pytest.raises(ms.EvaluationError, match="'f' is given twice: it is either swept or known"):
        ms.response_model(driven, {f: [1.0, 2.0]}, free=[mu], known={"f": 3.0})


def test_values_without_a_steady_state_are_told(driven):
    known = {eps: 0.05, f: 0.4, alpha: 1, w0: 1}
    model = ms.response_model(driven, {Omega: [0.98, 1.02]}, free=[mu], known=known)
    with pytest.raises(ms.EvaluationError, match=r"Omega = 0.98 for mu = -0.1: .* with bounds"):
        model.predict([-0.1])


@pytest.mark.filterwarnings("error")
def test_amplitude_at_rest_has_no_slope(free_motion):
    known = {eps: 0.1, alpha: 1.0, w0: 1.0}
    model = ms.ring_down_model(free_motion, [0, 1, 2], free=[mu], known=known, observed="amplitude")
    assert not model.jacobian([0.1, 0.0, 0.0]).any()


@pytest.mark.parametrize(
    ("change", "words"),
    [
        ({"noise": 0.0}, "noise is 0.0"),
        ({"noise": -1.0}, "noise is -1.0"),
        ({"noise": np.nan}, "noise is nan"),
        ({"data": np.full(9, np.nan)}, "not finite"),
        ({"start": {mu: 0.1, "mu": 0.2, "p": 1, "q": 0}}, "one value for each"),
    ],
    ids=str,
)
def test_what_a_fit_refuses(free_motion, change, words):
    model = ms.ring_down_model(free_motion, np.arange(9.0), free=[mu], known={eps: 0.1, alpha: 1.0, w0: 1.0})
    given = {"data": np.ones(9), "start": [0.1, 1.0, 0.0], "noise": None} | change
    with pytest.raises(ms.EvaluationError, match=words):
        ms.fit(model, given["data"], given["start"], noise=given["noise"])


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
