"""Slow flows under weak random forcing, against simulation of the full equation."""

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


def test_the_covariance_is_that_of_a_simulation(driven, record, state):
    """Within 4 %: the statistical error is about 1.5 %, the averaging error O(ε)."""
    _, kept = record
    flow = ms.noisy_flow(driven, {u: DENSITY})
    predicted = flow.covariance(state, VALUES)
    found = np.cov(kept.transpose(1, 0, 2).reshape(2, -1))
    scale = np.sqrt(np.outer(np.diag(predicted), np.diag(predicted)))
    assert np.abs(found - predicted).max() < 0.04 * scale.max()
    assert np.abs(predicted[0, 1]) > 0.1 * scale[0, 1]  # the drive correlates the quadratures: the test sees that


def test_the_spectrum_is_that_of_a_simulation(driven, record, state):
    """Averaged periodograms of both quadratures, in bands across the line."""
    interval, kept = record
    flow = ms.noisy_flow(driven, {u: DENSITY})
    series = kept - kept.mean(axis=(0, 2))[None, :, None]
    length = len(series)
    window = np.hanning(length)[:, None, None]
    power = np.abs(np.fft.fft(series * window, axis=0)) ** 2 * interval / (window**2).sum()
    nu = 2 * np.pi * np.fft.fftfreq(length, interval)
    for low, high in [(0.002, 0.008), (0.008, 0.016), (0.016, 0.032), (0.032, 0.06)]:
        band = (np.abs(nu) > low) & (np.abs(nu) < high)
        predicted = flow.spectrum(nu[band], state, VALUES)
        for k in range(2):
            ratio = power[band, k].mean() / predicted[k, k].real.mean()
            assert ratio == pytest.approx(1, abs=0.08)


def test_the_spectrum_integrates_to_the_covariance(driven, state):
    flow = ms.noisy_flow(driven, {u: S})
    values = VALUES | {S: DENSITY}
    nu = np.tan(np.linspace(-np.pi / 2, np.pi / 2, 20_001)[1:-1]) * 0.05
    density = flow.spectrum(nu, state, values)
    total = np.trapezoid(density, nu, axis=-1) if hasattr(np, "trapezoid") else np.trapz(density, nu, axis=-1)
    np.testing.assert_allclose(total.real / (2 * np.pi), flow.covariance(state, values), rtol=2e-3, atol=1e-9)


def test_a_linear_oscillator_has_the_variance_of_equipartition():
    """u'' + 2εμu' + ω²u = ξ: ⟨u²⟩ = S/(4εμω²) exactly; with d/(2a) the drift vanishes at ⟨a²⟩ = 2⟨u²⟩."""
    linear = ms.expand(ms.Problem(u.diff(t, 2) + 2 * eps * mu * u.diff(t) + w0**2 * u, u, small=eps), 1)
    flow = ms.noisy_flow(linear, {u: S})
    a = linear.symbols.a[0]
    assert sp.simplify(flow.drift[a].subs(a, sp.sqrt(2 * S / (4 * eps * mu * w0**2)) / sp.sqrt(2))) == 0
    values = {eps: 0.1, mu: 0.5, w0: 1.3, S: 0.01}
    covariance = flow.covariance([0.0, 0.0], values)
    np.testing.assert_allclose(covariance, np.eye(2) * 0.01 / (4 * 0.1 * 0.5 * 1.3**2), rtol=1e-12)


def test_noise_of_two_modes_is_independent():
    equations = [u.diff(t, 2) + u + eps * mu * u.diff(t), 3 * v.diff(t, 2) + 6 * v + eps * (mu * v.diff(t) + u**2 * v)]
    pair = ms.expand(ms.Problem(equations, [u, v], small=eps), 1)
    flow = ms.noisy_flow(pair, {v: S})
    assert list(flow.intensity.values()) == [0, 0, S / 36, S / 36]
    np.testing.assert_allclose(flow.intensities({eps: 0.1, mu: 1.0, S: 0.36}), [0, 0, 0.01, 0.01])


@pytest.mark.parametrize(
    ("call", "kind", "words"),
    [
        (lambda d: ms.noisy_flow(d, {v: 1}), ms.ProblemError, "not an unknown"),
        (lambda d: ms.noisy_flow(d, {u: "S"}), ms.ProblemError, "no SymPy expression"),
        (lambda d: ms.noisy_flow(d, {u: S}).intensities(VALUES), ms.EvaluationError, "missing parameter S"),
        (lambda d: ms.noisy_flow(d, {u: -1}).intensities(VALUES), ms.EvaluationError, "expected a number"),
        (lambda d: ms.noisy_flow(d, {u: 1}).covariance([0, 0], {eps: 1}), ms.EvaluationError, "missing"),
    ],
)
def test_errors(driven, call, kind, words):
    with pytest.raises(kind, match=words):
        call(driven)


def test_growing_fluctuations_are_refused():
    van_der_pol = ms.expand(ms.Problem(u.diff(t, 2) + u + eps * (u**2 - 1) * u.diff(t), u, small=eps), 1)
    with pytest.raises(ms.EvaluationError, match="do not settle"):
        ms.noisy_flow(van_der_pol, {u: 1}).covariance([0.0, 0.0], {eps: 0.1})


COUPLED = {
    "stiffness": [u.diff(t, 2) + 2 * u - v + eps * u**3, v.diff(t, 2) + 2 * v - u],
    "mass": [2 * u.diff(t, 2) + v.diff(t, 2) + 2 * u + eps * u**3, 3 * v.diff(t, 2) + u.diff(t, 2) + 2 * v],
    "gyroscopic": [u.diff(t, 2) + u - v.diff(t) / 2, v.diff(t, 2) + u.diff(t) / 2 + 2 * v + eps * v**3],
    "one way": [u.diff(t, 2) + u - v / 2, v.diff(t, 2) + 2 * v + eps * v**3],
}


@pytest.mark.parametrize("name", COUPLED)
def test_noise_on_coupled_unknowns_is_refused(name):
    result = ms.expand(ms.Problem(COUPLED[name], [u, v], small=eps), 1)
    with pytest.raises(ms.ProblemError, match="have no oscillators of their own at leading order"):
        ms.noisy_flow(result, {u: S})


def test_the_order_of_equations_and_unknowns_does_not_matter():
    first, second = 2 * (u.diff(t, 2) + u) + eps * u * v**2, 3 * (v.diff(t, 2) + 5 * v)
    expected = {u: S / 8, v: S / 45}
    for unknowns in ([u, v], [v, u]):
        for equations in ([first, second], [second, first]):
            result = ms.expand(ms.Problem(equations, unknowns, small=eps), 1)
            found = ms.noisy_flow(result, {u: S, v: 2 * S}).intensity
            for k, x in enumerate(unknowns):
                assert found[result.symbols.p[k]] == found[result.symbols.q[k]] == expected[x]


def test_small_parts_of_the_inertia_do_not_count():
    h = sp.Symbol("h", positive=True)
    equation = m * (1 + h * sp.cos(2 * Omega * t)) * u.diff(t, 2) + m * u + alpha * u**3
    relation = {Omega: 1 + sigma}
    ordered = ms.Problem(equation, u, ordering={u: 1, h: 2, sigma: 2}, resonances=relation)
    assert set(ms.noisy_flow(ms.expand(ordered, 2), {u: S}).intensity.values()) == {S / (2 * m**2)}


@pytest.mark.parametrize("given", [{"Omega": 1.506}, {"sigma": 0.3}])
def test_density_in_terms_of_an_eliminated_frequency(driven, given):
    values = {s.name: x for s, x in VALUES.items() if s != Omega} | given
    found = ms.noisy_flow(driven, {u: S * Omega**2}).intensities({**values, "S": 0.1})
    assert found == pytest.approx([0.1 * 1.506**2 / (2 * (MASS * OMEGA0) ** 2)] * 2, rel=1e-12)


@pytest.mark.parametrize("density", [S * t, S * u])
def test_noise_that_is_not_stationary_is_refused(driven, density):
    with pytest.raises(ms.ProblemError, match="depends on time: expected that of a stationary force"):
        ms.noisy_flow(driven, {u: density})


def test_a_noisy_flow_prints_its_intensities(driven):
    assert repr(ms.noisy_flow(driven, {u: S})) == "NoisyFlow(d_p = S/(2*m**2*omega_0**2), d_q = S/(2*m**2*omega_0**2))"


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
