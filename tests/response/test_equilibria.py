"""All equilibria of one driven mode, at every order; their stability; what only the truncation makes."""

from __future__ import annotations

import numpy as np
import pytest
import sympy as sp
from support.driven import (
    CASES,
    Om,
    Original,
    alpha,
    cubic,
    eps,
    expanded,
    f,
    motion_at_zero,
    mu,
    plain,
    sigma,
    t,
    u,
    used,
    w,
)

import multiscale as ms
from multiscale.response.steady.newton import polished
from multiscale.response.steady.search import states_at
from multiscale.response.steady.steady_flow import SteadyFlow

VALUES = {"epsilon": 0.02, "mu": 0.15, "alpha": 1.0, "beta": 0.8, "f": 0.7, "h": 1.1, "omega": 1.0, "sigma": 1.2}


def everything(name: str, points: int, seed: int) -> dict[str, np.ndarray]:
    random = np.random.default_rng(seed)
    return {
        "epsilon": 10 ** random.uniform(-3, -0.5, points),
        "mu": 10 ** random.uniform(-3, 0, points),
        "alpha": random.uniform(-1, 1, points),
        "beta": random.uniform(-1, 1, points),
        "f": 10 ** random.uniform(-1, 0.5, points),
        "h": 10 ** random.uniform(-1, 0.5, points),
        "omega": random.uniform(0.5, 2, points),
        "sigma": random.uniform(-2, 2, points),
    }


@pytest.mark.parametrize("order", [1, 2, 3])
@pytest.mark.parametrize("name", CASES)
def test_newton_from_many_starts_finds_nothing_more(name, order):
    """Random parameters over decades, 1500 starts each, at amplitudes up to beyond the largest equilibrium."""
    flow, points = SteadyFlow.of(expanded(name, order)), 12
    chosen = used(flow.expansion, everything(name, points, order))
    values = flow.values(chosen)
    index, states, complete = states_at(flow, values, points)
    assert complete
    random = np.random.default_rng(7)
    for point in range(points):
        mine = states[:, index == point]
        largest = float(np.max(np.linalg.norm(mine, axis=0), initial=1e-3))
        sizes, angles = largest * 10 ** random.uniform(-3, 0.7, 1500), random.uniform(0, 2 * np.pi, 1500)
        at = tuple(float(v[point]) for v in values)
        starts = np.stack([sizes * np.cos(angles), sizes * np.sin(angles)])
        found, _, converged = polished(flow, starts, at, largest, 60, 0.5)
        found = found[:, converged & np.isfinite(found).all(axis=0)]
        found = found[:, np.linalg.norm(found, axis=0) > 1e-7 * largest]
        distance = np.min(np.linalg.norm(found[:, :, None] - mine[:, None, :], axis=0), axis=1, initial=np.inf)
        assert np.all(distance < 1e-5 * np.linalg.norm(found, axis=0)), (name, order, point)


@pytest.mark.parametrize("order", [1, 2, 3])
@pytest.mark.parametrize("name", CASES)
def test_states_are_at_rest_and_eigenvalues_are_those_of_the_jacobian(name, order):
    expansion = expanded(name, order)
    values = used(expansion, VALUES)
    rate = expansion.slow_flow.to_numpy().bind(values)
    slope = expansion.slow_flow.to_numpy(wrt="state").bind(values)
    for state in ms.equilibria(expansion, values):
        assert np.max(abs(rate(0.0, state.state))) < 1e-13
        wanted = np.linalg.eigvals(slope(0.0, state.state))
        assert np.sort_complex(state.eigenvalues) == pytest.approx(np.sort_complex(wanted), abs=1e-12)
        assert state.stable == bool(max(wanted.real) < 0)
        assert state.complete


# name: parameters with several steady motions
MOTIONS = {
    "primary": {},
    "quadratic": {"sigma": 0.9},
    "superharmonic": {"epsilon": 0.005, "f": 1.5, "mu": 0.05, "sigma": 4.0},
    "subharmonic": {"f": 5.0, "mu": 0.02, "sigma": 2.0},
    "parametric": {},
    "both": {},
}


@pytest.mark.parametrize("name", MOTIONS)
def test_every_motion_and_its_floquet_multipliers(name):
    """Shooting on the original equation from the displacement and velocity of the expansion, third order."""
    values = VALUES | MOTIONS[name]
    expansion = expanded(name, 3)
    chosen = used(expansion, values)
    states = [s for s in ms.equilibria(expansion, chosen) if not s.spurious]
    original = Original(name, values)
    assert len(states) >= 3
    for state in states:
        guess = motion_at_zero(expansion, state.state, chosen)
        start, multipliers = original.periodic(guess)
        assert np.max(abs(start - guess)) < 2e-3 * max(1.0, np.max(abs(start)))
        assert state.stable == bool(np.max(abs(multipliers)) < 1)
        predicted = np.exp(state.eigenvalues * original.period)
        if name == "subharmonic" and not any(state.state):
            continue  # three rotations of one another: the multipliers are cubes in another frame
        assert np.sort(abs(multipliers)) == pytest.approx(np.sort(abs(predicted)), abs=3e-3)


SMALL = np.array([0.04, 0.02, 0.01])


def errors(order, level=0):
    """Errors of (u, u') at t = 0 against shooting, worst of the three motions, over SMALL; `level` alters D_level."""
    found = []
    for small in SMALL:
        values = VALUES | {"epsilon": small}
        expansion = expanded("primary", order)
        chosen = used(expansion, values)
        original = Original("primary", values)
        worst = 0.0
        for state in [s for s in ms.equilibria(expansion, chosen) if not s.spurious]:
            y = state.state
            if level:
                # A change of D_level by ε^level · 0.4 |y|² y moves the equilibrium by the inverse Jacobian.
                matrix = expansion.slow_flow.to_numpy(wrt="state").bind(chosen)(0.0, y)
                y = y - np.linalg.solve(matrix, small**level * 0.4 * (y @ y) * y)
            guess = motion_at_zero(expansion, y, chosen)
            start, _ = original.periodic(motion_at_zero(expansion, state.state, chosen))
            worst = max(worst, float(np.max(abs(guess - start))))
        found.append(worst)
    return np.array(found)


@pytest.mark.parametrize("order", [1, 2, 3])
def test_order_of_the_error(order):
    """A driven steady state with D_1 non-degenerate is right to O(ε^N)."""
    found = errors(order)
    assert found[-1] < 40 * SMALL[-1] ** order
    assert np.polyfit(np.log(SMALL), np.log(found), 1)[0] > order - 0.25
    if order > 1:
        wrong = errors(order, level=order)
        assert np.polyfit(np.log(SMALL), np.log(wrong), 1)[0] < order - 0.5


# Truncation


def weakly_damped(order):
    return expanded("primary", order), {
        "epsilon": 0.05,
        "mu": 0.002,
        "alpha": 1.0,
        "f": 0.6,
        "omega": 1.0,
        "sigma": 1.0,
    }


def test_spurious_states_are_flagged():
    """3αa²/(8ω) and −15εα²a⁴/(256ω³) cancel at a² = 32ω²/(5εα) = 128: a branch appears there that is none."""
    expansion, values = weakly_damped(2)
    states = ms.equilibria(expansion, values)
    real = [s for s in states if not s.spurious]
    first = ms.equilibria(expanded("primary", 1), values)
    assert len(real) == len(first) == 3
    assert [s.amplitudes[0] for s in real] == pytest.approx([s.amplitudes[0] for s in first], rel=0.1)
    false = [s for s in states if s.spurious]
    assert false
    assert all(s.amplitudes[0] > 8 for s in false)
    assert all("different order" in s.spurious for s in false)


def test_a_spurious_amplitude_scales_as_its_reason_says():
    expansion, values = weakly_damped(2)
    largest = [ms.equilibria(expansion, values | {"epsilon": x})[-1].amplitudes[0] for x in (0.02, 0.005)]
    assert largest[1] / largest[0] == pytest.approx(2, rel=0.05)


def test_states_near_a_fold_are_not_spurious():
    """The fold lies elsewhere at the second order, so these two have no real counterpart at the first."""
    second, first = expanded("primary", 2), expanded("primary", 1)
    values = {"epsilon": 0.05, "mu": 0.1, "alpha": 1.0, "f": 0.6, "omega": 1.0, "sigma": 0.595}
    assert len(ms.equilibria(first, values)) == 1
    states = ms.equilibria(second, values)
    assert len(states) == 3
    assert not any(s.spurious for s in states)


# Other flows


def test_limit_cycle():
    """Van der Pol: amplitude of the fundamental 2 + ε²/64, rate −ε²/16 (Andersen and Geer, SIAM J. Appl. Math. 42,
    1982, 678)."""
    expansion = ms.expand(ms.Problem(u.diff(t, 2) + u + eps * (u**2 - 1) * u.diff(t), u, small=eps), 3)
    rest, cycle = ms.equilibria(expansion, {eps: 0.1})
    assert rest.kind == "oscillatory"
    assert len(rest.eigenvalues) == 2
    assert cycle.stable
    assert len(cycle.eigenvalues) == 1
    assert cycle.amplitudes[0] == pytest.approx(2 + 0.01 / 64, abs=1e-5)
    assert cycle.rates[0] == pytest.approx(-0.01 / 16, abs=1e-5)


@pytest.mark.parametrize("name", ["drive", "no drive"])
def test_two_modes(name):
    """One to two internal resonance, driven at the second mode: closed form of the first order by hand.

    With A_1 ≠ 0:  |A_2| = 2ω|μ + iσ/2|/α (from dA_1/dt = 0). Without a drive the state of rest is all there is.
    """
    v = sp.Function("v")(t)
    force = f * sp.cos(Om * t) if name == "drive" else 0
    relations = {Om: 2 * w + eps * sigma} if name == "drive" else {}
    equations = [
        u.diff(t, 2) + w**2 * u + eps * (2 * mu * u.diff(t) + alpha * u * v),
        v.diff(t, 2) + 4 * w**2 * v + eps * (2 * mu * v.diff(t) + alpha * u**2 - force),
    ]
    problem = ms.Problem(equations, [u, v], small=eps, resonances=relations)
    with pytest.warns(ms.OrderingWarning):
        expansion = ms.expand(problem, 1)
    values = used(expansion, VALUES | {"mu": 0.1, "f": 0.6, "sigma": 0.1})
    states = ms.equilibria(expansion, values)
    assert not any(s.complete for s in states)
    if name == "no drive":
        assert [s.amplitudes for s in states] == [(0, 0)]
        assert states[0].stable
        return
    assert len(states) == 3
    assert states[0].kind == "saddle" or states[-1].kind == "saddle"
    coupled = [s for s in states if s.amplitudes[0] > 0]
    assert len(coupled) == 2
    for s in coupled:
        assert s.amplitudes[1] == pytest.approx(4 * abs(0.1 + 0.05j), rel=1e-12)
        assert s.stable


def test_conserved_amplitude_is_refused():
    expansion = ms.expand(ms.Problem(plain + eps * alpha * u**3, u, small=eps), 2)
    with pytest.raises(ms.EvaluationError, match="every amplitude is a steady state"):
        ms.equilibria(expansion, {"epsilon": 0.1, "alpha": 1.0, "omega": 1.0})


def test_explicit_time_is_refused():
    other, delta = sp.symbols("Omega_2 delta")
    problem = ms.Problem(
        cubic - eps * f * (sp.cos(Om * t) + sp.cos(other * t)),
        u,
        small=eps,
        resonances={Om: w + eps * sigma, other: w + eps * delta},
    )
    with pytest.raises(ms.ResonanceError, match="no steady states"):
        ms.equilibria(ms.expand(problem, 1), {})


@pytest.mark.parametrize(
    ("change", "message"),
    [
        ({"sigma": np.nan}, "sigma = nan: expected a finite"),
        ({"sigma": np.zeros(3)}, "use frequency_response"),
        ({"tau": 1.0}, "unknown parameter 'tau'"),
    ],
)
def test_wrong_parameters_are_refused(change, message):
    expansion = expanded("primary", 1)
    with pytest.raises(ms.EvaluationError, match=message):
        ms.equilibria(expansion, used(expansion, VALUES) | change)


def test_what_is_no_expansion_is_refused():
    with pytest.raises(ms.EvaluationError, match="an Expansion was expected"):
        ms.equilibria(cubic, {})


def test_a_drive_frequency_may_stand_for_its_detuning():
    expansion = expanded("primary", 2)
    values = used(expansion, VALUES)
    by_frequency = {k: v for k, v in values.items() if k != "sigma"} | {Om: 1.0 + 0.02 * 1.2}
    for a, b in zip(ms.equilibria(expansion, values), ms.equilibria(expansion, by_frequency), strict=True):
        assert a.state == pytest.approx(b.state, rel=1e-9)


@pytest.mark.parametrize("order", [1, 2, 3])
def test_without_its_drive_the_oscillator_rests(order):
    expansion = expanded("primary", order)
    (rest,) = ms.equilibria(expansion, used(expansion, VALUES) | {"f": 0.0})
    assert rest.amplitudes == (0.0,)
    assert rest.stable
    with pytest.raises(ms.EvaluationError, match="every amplitude is a steady state"):
        ms.equilibria(expansion, used(expansion, VALUES) | {"f": 0.0, "mu": 0.0})


@pytest.mark.parametrize("order", [1, 2, 3])
def test_without_damping_the_motions_are_neutral(order):
    expansion = expanded("primary", order)
    states = [s for s in ms.equilibria(expansion, used(expansion, VALUES) | {"mu": 0.0}) if not s.spurious]
    assert sorted(s.kind for s in states) == ["neutral", "neutral", "saddle"]
    assert not any(s.stable for s in states)


def test_without_nonlinearity_the_response_is_linear():
    expansion = expanded("primary", 1)
    (state,) = ms.equilibria(expansion, used(expansion, VALUES) | {"alpha": 0.0})
    assert state.amplitudes[0] == pytest.approx(0.7 / 2 / np.hypot(0.15, 1.2), rel=1e-14)
