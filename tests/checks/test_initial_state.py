"""Slow states of given displacements and velocities: reconstruction, records, series, errors."""

from __future__ import annotations

from fractions import Fraction as F

import mpmath
import numpy as np
import pytest
import sympy as sp
from published import elliptic
from published.rational_series import taylor

import multiscale as ms

from .systems import SYSTEMS, alpha, beta, ddu, du, dv, eps, expanded, f, mu, perturbed, t, u, v, w

# Order 1 with quadratic terms is meant here; the warning is tested apart.
pytestmark = pytest.mark.filterwarnings("ignore::multiscale.errors.OrderingWarning")


def bound(name: str, small: float = 0.05) -> dict[sp.Symbol, float]:
    system = SYSTEMS[name]
    return system.values | ({} if system.ordering else {eps: small})


def conditions(expansion: ms.Expansion, places, velocities) -> dict[sp.Expr, object]:
    unknowns = expansion.problem.unknowns
    return dict(zip(unknowns, places, strict=True)) | {x.diff(t): y for x, y in zip(unknowns, velocities, strict=True)}


def motion(expansion: ms.Expansion, values, time, state) -> tuple[np.ndarray, np.ndarray]:
    return tuple(expansion.to_numpy(derivative=d).bind(values)(time, state) for d in (0, 1))


@pytest.mark.parametrize("name", SYSTEMS)
@pytest.mark.parametrize("time", [0.0, 17.3])
def test_the_state_gives_the_motion_back(name: str, time: float):
    """Drives have their exact phase at the time given."""
    expansion, values = expanded(name, 3), bound(name)
    if SYSTEMS[name].ordering is not None:
        values = {s: x / 20 for s, x in values.items()} | {w: 1.1}
    size = 0.05 if SYSTEMS[name].ordering is not None else 1.0
    start = [size * x for x in SYSTEMS[name].start]
    given = conditions(expansion, start[::2], start[1::2])
    state = ms.initial_state(expansion, given, values, time=time)
    assert state.shape == (len(start),)
    place, velocity = motion(expansion, values, time, state)
    np.testing.assert_allclose([*place, *velocity], [*start[::2], *start[1::2]], atol=1e-13 * size)


@pytest.mark.parametrize("name", ["damped", "driven hard", "one to two", "two oscillators", "slow stiffness"])
def test_a_record_gives_its_states_back(name: str):
    """Displacements and velocities along a slow path with its times: one state for each instant."""
    expansion, values = expanded(name, 2), bound(name)
    times = np.linspace(0.0, 40.0, 500)
    rng = np.random.default_rng(3)
    count = 2 * len(expansion.problem.unknowns)
    path = rng.uniform(-0.6, 0.6, (count, 1)) * np.exp(-0.01 * times) + rng.uniform(-0.2, 0.2, (count, 1))
    place, velocity = motion(expansion, values, times, path)
    state = ms.initial_state(expansion, conditions(expansion, place, velocity), values, time=times)
    assert state.shape == (count, 500)
    np.testing.assert_allclose(state, path, atol=1e-11)


def test_shapes_broadcast():
    """A grid of starts against a range of the small parameter, entry by entry as alone."""
    expansion = expanded("damped", 2)
    values = SYSTEMS["damped"].values
    places, small = np.linspace(-0.8, 0.8, 5), np.array([[0.01], [0.05]])
    state = ms.initial_state(expansion, {u: places, du: 0.3}, values | {eps: small})
    assert state.shape == (2, 2, 5)
    alone = ms.initial_state(expansion, {u: places[3], du: 0.3}, values | {"epsilon": 0.05})
    np.testing.assert_allclose(state[:, 1, 3], alone, rtol=1e-12)


def test_rest():
    expansion = expanded("damped", 3)
    np.testing.assert_allclose(ms.initial_state(expansion, {u: 0.0, du: 0.0}, bound("damped")), 0, atol=1e-20)


@pytest.mark.parametrize("scale", [1e-9, 1e7])
def test_any_units(scale: float):
    """Displacements of nanometres, or in other units: the state scales when the coefficients do."""
    problem = ms.Problem(ddu + w**2 * u + eps * (alpha * u**3 - f * sp.cos(w * t)), u, small=eps)
    expansion = ms.expand(problem, 2)
    plain = ms.initial_state(expansion, {u: 0.0, du: 0.3}, {eps: 0.1, alpha: 0.8, f: 0.5, w: 1.1})
    values = {eps: 0.1, alpha: 0.8 / scale**2, f: 0.5 * scale, w: 1.1}
    found = ms.initial_state(expansion, {u: 0.0, du: 0.3 * scale}, values)
    np.testing.assert_allclose(found, plain * scale, rtol=1e-10)


def test_a_frequency_may_stand_for_its_detuning():
    expansion, values = expanded("driven", 2), bound("driven")
    sigma = next(s for s in values if s.name == "sigma")
    by_frequency = {s: x for s, x in values.items() if s != sigma} | {"Omega": values[w] + 0.05 * values[sigma]}
    given = {u: 0.4, du: 0.1}
    found, wanted = (ms.initial_state(expansion, given, x, time=3.0) for x in (by_frequency, values))
    np.testing.assert_allclose(found, wanted, rtol=1e-12)


# --- series


@pytest.mark.parametrize(
    ("name", "order"),
    [
        pytest.param(name, order, marks=pytest.mark.slow if name == "damped" and order > 1 else ())
        for name in ("self-excited", "quadratic and cubic", "inertial", "damped")
        for order in (1, 2, 3)
    ],
)
def test_the_mismatch_of_the_series(name: str, order: int):
    """Displacement and velocity of the series miss what was asked for by O(ε^{N+1}); without its last term O(ε^N)."""
    expansion = expanded(name, order)
    values = {s: sp.Rational(x) for s, x in SYSTEMS[name].values.items()}
    x0, v0 = sp.symbols("x_0 v_0", real=True)
    found = ms.initial_state(expansion, {u: x0, du: v0})
    (p,), (q,) = expansion.symbols.p, expansion.symbols.q
    assert list(found) == [p, q]
    small = sp.Symbol("epsilon", positive=True)
    numbers = {x0: sp.Rational(3, 5), v0: -sp.Rational(2, 5)}
    place = expansion.solution("cartesian")[u].subs(values)
    # V = Σ D_k U_n: the slow flow makes the velocity of p and q.
    flow = {s: rate.subs(values) for s, rate in expansion.slow_flow.cartesian.items()}
    whole = place.diff(t) + sum(place.diff(s) * rate for s, rate in flow.items())
    whole = sp.expand(whole.subs(t, 0))
    velocity = sum(whole.coeff(small, n) * small**n for n in range(order + 1))
    functions = [sp.lambdify((p, q, small), x.subs(values).subs(t, 0), "mpmath") for x in (place, velocity)]
    state = [sp.expand(x.subs(values).subs(numbers)) for x in found.values()]
    shorter = [sum(x.coeff(small, n) * small**n for n in range(order)) for x in state]
    for series, slope in ((state, order + 1), (shorter, order)):
        misses = []
        with mpmath.workdps(60):
            for e in (mpmath.mpf("1e-6"), mpmath.mpf("1e-7")):
                y = [mpmath.mpmathify(sp.N(x.subs(small, sp.Rational(str(e))), 60)) for x in series]
                wanted = [mpmath.mpf(3) / 5, -mpmath.mpf(2) / 5]
                misses.append(max(abs(g(*y, e) - b) for g, b in zip(functions, wanted, strict=True)))
            observed = mpmath.log10(misses[0] / misses[1])
        if series is state:
            assert observed > slope - 0.01
        elif shorter != state:
            assert observed < slope + 0.01


@pytest.mark.slow
def test_series_and_number_agree():
    expansion = expanded("damped", 3)
    found = ms.initial_state(expansion, {u: sp.Rational(1, 2), du: -sp.Rational(1, 3)})
    misses = []
    for small in (0.04, 0.02, 0.01):
        values = bound("damped", small)
        number = ms.initial_state(expansion, {u: 0.5, du: -1 / 3}, values)
        misses.append(np.max(np.abs(number - [float(x.subs(values)) for x in found.values()])))
    assert np.log2(misses[1] / misses[2]) > 4 - 0.2


def test_a_series_where_the_frequency_is_a_root():
    """m u'' + k u + …: ω = √(k/m) is no parameter of the problem."""
    m, k = sp.symbols("m k", positive=True)
    expansion = ms.expand(ms.Problem(m * ddu + k * u + eps * (u**2 + mu * du), u, small=eps), 2)
    found = ms.initial_state(expansion, {u: sp.Rational(1, 2), du: sp.Rational(1, 5)})
    misses = []
    for small in (0.02, 0.01):
        values = {m: 1.7, k: 2.9, mu: 0.4, eps: small}
        number = ms.initial_state(expansion, {u: 0.5, du: 0.2}, values)
        misses.append(np.max(np.abs(number - [float(x.subs(values)) for x in found.values()])))
    assert np.log2(misses[0] / misses[1]) > 3 - 0.2


def test_the_cubic_oscillator_at_its_peak():
    """From rest at α the slow state is the fundamental of cn: DLMF 22.11.2."""
    expansion = ms.expand(ms.Problem(ddu + u + eps * u**3, u, small=eps), 5)
    found = ms.initial_state(expansion, {u: alpha, du: 0})
    (p,), (q,) = expansion.symbols.p, expansion.symbols.q
    assert found[q] == 0
    ratio = sp.Poly(sp.expand(found[p].subs(eps, 1) / alpha), alpha)
    coefficients = [F(*map(int, ratio.coeff_monomial(alpha ** (2 * n)).as_numer_denom())) for n in range(6)]
    assert coefficients == taylor(elliptic.cubic_fundamental_ratio, 6)


def test_linear_damping():
    """u'' + 2εu' + u = 0: u = e^{−εt}(x cos θt + (y + εx)/θ sin θt), θ = √(1 − ε²)."""
    expansion = ms.expand(ms.Problem(ddu + 2 * eps * du + u, u, small=eps), 5)
    x, y = sp.symbols("x y", real=True)
    p, q = ms.initial_state(expansion, {u: x, du: y}).values()
    assert sp.expand(p - x) == 0
    exact = sp.series((y + eps * x) / sp.sqrt(1 - eps**2), eps, 0, 6).removeO()
    assert sp.expand(q - exact) == 0


@pytest.mark.parametrize("order", [1, 3])
def test_a_constant_force_at_leading_order(order: int):
    """u = f/ω² at leading order belongs to the motion, not to the state."""
    equation = ddu + w**2 * u - f + eps * (alpha * u**2 + mu * du)
    expansion = ms.expand(ms.Problem(equation, u, small=eps), order)
    found = ms.initial_state(expansion, {u: sp.Rational(9, 10), du: sp.Rational(1, 5)})
    misses = []
    for small in (0.02, 0.01):
        values = {w: 1.1, f: 0.7, alpha: 0.8, mu: 0.2, eps: small}
        number = ms.initial_state(expansion, {u: 0.9, du: 0.2}, values)
        misses.append(np.max(np.abs(number - [float(x.subs(values)) for x in found.values()])))
    assert np.log2(misses[0] / misses[1]) > order + 1 - 0.2


def test_in_the_peak_convention():
    """From rest at α the peak of an odd conservative motion is α itself."""
    expansion = ms.with_amplitude(ms.expand(ms.Problem(ddu + w**2 * u + eps * beta * u**3, u, small=eps), 4), "peak")
    found = ms.initial_state(expansion, {u: alpha, du: 0})
    assert [sp.expand(x) for x in found.values()] == [alpha, 0]
    state = ms.initial_state(expansion, {u: 0.7, du: 0.0}, {w: 1.1, beta: 0.6, eps: 0.1})
    np.testing.assert_allclose(state, [0.7, 0.0], rtol=1e-13)


def test_ordering_takes_the_small_parameter_as_one():
    expansion = expanded("ordering", 2)
    values = SYSTEMS["ordering"].values | {mu: 0.01, f: 0.001, "sigma": 0.01}
    values = {str(k): x for k, x in values.items()}
    state = ms.initial_state(expansion, {u: 0.05, du: 0.01}, values)
    place, velocity = motion(expansion, values, 0.0, state)
    np.testing.assert_allclose([place[0], velocity[0]], [0.05, 0.01], rtol=1e-12)


def test_a_changed_field_changes_the_state():
    expansion, values = expanded("damped", 2), bound("damped")
    given = {u: 0.4, du: 0.1}
    change = ms.initial_state(perturbed(expansion, displacement=2), given, values) - ms.initial_state(
        expansion, given, values
    )
    assert 1e-5 < np.max(np.abs(change)) < 1e-2


# --- errors

one = ms.Problem(ddu + u - eps * u**3, u, small=eps)


@pytest.mark.parametrize(
    ("given", "message"),
    [
        ({u: 1.0}, r"the velocity Derivative\(u\(t\), t\) is missing: give a value for each of u\(t\), Derivative"),
        ({du: 1.0}, r"the displacement u\(t\) is missing"),
        ({u: 1.0, du: 0.0, v: 1.0}, r"condition for v\(t\): expected the unknowns and their velocities"),
        ({u: 1.0, du: 0.0, ddu: 1.0}, "expected the unknowns and their velocities"),
        ({u: "1", du: 0.0}, "is '1': expected real numbers"),
        ({u: 1j, du: 0.0}, "expected real numbers"),
        ({u: np.nan, du: 0.0}, "is nan: expected finite numbers"),
        ({u: np.zeros(2), du: np.zeros(3)}, r"do not broadcast.*\(2,\), \(3,\)"),
        ({u: 5.0, du: 0.0}, "Newton's method leaves a residual of 0.38"),
        ({u: 3.0, du: 0.0}, "the amplitude is out of range.*outweigh"),
        ({u: 8.0, du: 0.0}, "amplitude is out of (the )?range"),
        ([1.0, 0.0], "conditions are a list: expected a mapping with the keys"),
    ],
)
def test_errors_name_what_is_wrong(given, message: str):
    with pytest.raises(ms.EvaluationError, match=message):
        ms.initial_state(ms.expand(one, 1), given, {eps: 0.5})


def test_entries_without_a_state_are_counted():
    with pytest.raises(ms.EvaluationError, match="at 2 of 4 entries"):
        ms.initial_state(ms.expand(one, 1), {u: [0.5, 5.0, 1.0, 5.1], du: 0.0}, {eps: 0.5})


@pytest.mark.parametrize("name", ["driven", "two oscillators", "slow stiffness"])
def test_no_series_for_others(name: str):
    system = SYSTEMS[name]
    with pytest.raises(ms.UnsupportedTermError, match=r"one undriven oscillator.*Give `parameters`"):
        ms.initial_state(expanded(name, 1), system.initial)


@pytest.mark.parametrize(
    ("given", "message"),
    [({u: np.zeros(3), du: 0}, "arrays need `parameters`"), ({u: sp.sin(t), du: 0}, "depends on t")],
)
def test_series_need_expressions(given, message: str):
    with pytest.raises(ms.EvaluationError, match=message):
        ms.initial_state(ms.expand(one, 1), given)


def test_parameters_are_checked():
    with pytest.raises(ms.EvaluationError, match="missing parameter epsilon"):
        ms.initial_state(ms.expand(one, 1), {u: 1.0, du: 0.0}, {})
    with pytest.raises(ms.EvaluationError, match="was given a str"):
        ms.initial_state("x", {u: 1.0, du: 0.0}, {})


def test_two_unknowns_are_both_needed():
    with pytest.raises(ms.EvaluationError, match=r"v\(t\) is missing"):
        ms.initial_state(expanded("two oscillators", 1), {u: 1.0, du: 0.0, dv: 0.0}, bound("two oscillators"))
