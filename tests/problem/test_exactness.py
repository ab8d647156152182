"""Resonance is decided exactly, whichever way numbers, signs and names come in; what cannot be decided is said."""

from __future__ import annotations

import threading

import numpy as np
import pytest
import sympy as sp

import multiscale as ms

t = sp.Symbol("t", real=True)
eps, alpha, f, h, s, s1, s2, mu, g, w, w0, w1, w2, Om = sp.symbols(
    "epsilon alpha f h sigma sigma_1 sigma_2 mu g omega omega_0 omega_1 omega_2 Omega", positive=True
)
O1, O2 = sp.symbols("Omega_1 Omega_2", positive=True)
u, v, x = (sp.Function(name)(t) for name in "uvx")
U = u.diff(t, 2)


def problem(equations, unknowns=u, resonances=()):
    return ms.Problem(equations, unknowns, small=eps, resonances=resonances)


FLOATS = {
    "drive": (U + u + eps * u**3 - eps * f * sp.cos(1.0 * t), ()),
    "drive and stiffness": (U + 4.0 * u + eps * u**3 - eps * f * sp.cos(2.0 * t), ()),
    "relation": (U + w0**2 * u + eps * u**3 - eps * f * sp.cos(Om * t), {Om: 1.0 * w0 + eps * s}),
    "half": (U + w0**2 * u + eps * u**3 - eps * f * sp.cos(Om * t) ** 2, {Om: 0.5 * w0 + eps * s}),
    "number": (U + 1.44 * u + eps * u**3 - eps * f * sp.cos(Om * t), {Om: 1.2 + eps * s}),
}


@pytest.mark.parametrize("name", FLOATS)
def test_floats_in_frequencies_are_the_decimals_they_print(name):
    equation, relation = FLOATS[name]
    result = ms.expand(problem(equation, resonances=relation), 2)
    assert result.slow_flow.phases
    assert f in result.slow_flow.polar[result.symbols.a[0]].free_symbols


def test_an_exact_hard_drive_in_decimals():
    result = ms.expand(problem(U + 1.44 * u + eps * alpha * u**3 - f * sp.cos(0.6 * t)), 1)
    assert np.isfinite(result.to_numpy().bind(alpha=0.3, epsilon=0.1, f=0.2)(0.3, [0.2, 0.1])).all()


NOT_POLYNOMIAL = {
    "exponential": sp.exp(sp.cos(Om * t)),
    "absolute value": sp.Abs(sp.cos(t)),
    "square root": sp.sqrt(2 + sp.cos(Om * t)),
    "hyperbolic": sp.tanh(5 * sp.sin(Om * t)),
    "denominator": 1 / (2 + sp.cos(Om * t)),
}


@pytest.mark.parametrize("name", NOT_POLYNOMIAL)
def test_a_function_of_a_drive_is_refused(name):
    with pytest.raises(ms.UnsupportedTermError, match="Write its Fourier sum"):
        problem(U + u + eps * u**3 - eps * f * NOT_POLYNOMIAL[name])


def test_a_relation_inside_a_slow_function_is_expanded_at_fixed_slow_time():
    stated = problem(
        U + w0**2 * u + eps * alpha * u**3 * (1 + h * sp.cos(eps * Om * t)) - eps * f * sp.cos(Om * t),
        resonances={Om: w0 + eps * s},
    )
    rate = ms.expand(stated, 1).slow_flow.polar[sp.Symbol("gamma", real=True)]
    assert rate.has(sp.cos(eps * t * w0))


def test_a_dependent_frequency_with_a_symbol_is_resonant():
    squares = (w**2, 2 * w**2, (3 - 2 * sp.sqrt(2)) * w**2)
    products = (v * x, u * x, u * v)
    equations = [y.diff(t, 2) + c * y + eps * p for y, c, p in zip((u, v, x), squares, products, strict=True)]
    result = ms.expand(problem(equations, [u, v, x]), 2)
    assert result.slow_flow.phases
    assert not any(sp.N(d.subs(w, 1.3)) == 0 for d in result.nonresonance)


def test_an_unknown_as_key_sees_later_relations():
    equations = [U + w1**2 * u + eps * u * v - eps * f * u * sp.cos(Om * t), v.diff(t, 2) + w2**2 * v + eps * u**2]
    first, second = {v: 2 * w1 + eps * s1}, {w1: Om / 2 + eps * s2}
    assert ms.expand(problem(equations, [u, v], first | second), 2).equals(
        ms.expand(problem(equations, [u, v], second | first), 2)
    )


NAMES = {
    "in a relation": lambda: problem(U + w0**2 * u + eps * u**3, resonances={w0: Om + sp.Symbol("epsilon") * s}),
    "as the small parameter": lambda: ms.Problem(U + u + eps * u**3, u, small=sp.Symbol("epsilon")),
    "in an ordering": lambda: ms.Problem(U + u + alpha * u**3, u, ordering={u: 1, sp.Symbol("alpha"): 1}),
}


@pytest.mark.parametrize("name", NAMES)
def test_two_symbols_of_one_name_are_found_everywhere(name):
    with pytest.raises(ms.ProblemError, match="two different symbols are both called"):
        NAMES[name]()


@pytest.mark.parametrize("name", ["@z0", "@0.0", "@e"])
def test_names_of_the_library_are_refused(name):
    with pytest.raises(ms.ProblemError, match="keeps for itself"):
        problem(U + u + eps * sp.Symbol(name, positive=True) * u**3)


def test_imaginary_parameters_are_refused():
    with pytest.raises(ms.ProblemError, match="assumed not to be real"):
        problem(U + u + eps * sp.Symbol("y", imaginary=True) * u**3)


def test_a_detuning_without_its_power_of_epsilon_is_warned_about():
    with pytest.warns(ms.OrderingWarning, match=r"if sigma is a detuning, write epsilon\*sigma"):
        problem(U + w0**2 * u + eps * u**3 - eps * f * sp.cos(Om * t), resonances={Om: w0 + s})
    with pytest.warns(ms.OrderingWarning, match="an order for sigma"):
        ms.Problem(U + w0**2 * u + alpha * u**3 - f * sp.cos(Om * t), u, ordering={u: 1, f: 3}, resonances={Om: w0 + s})


def test_the_sign_of_a_difference_is_that_of_its_square():
    (found,) = problem(U + (w2 - w1) ** 2 * u + eps * u**3).natural_frequencies
    assert sp.expand(found - (w2 - w1)) == 0
    driven = problem(U + w0**2 * u + eps * u**3 - eps * f * sp.cos((O2 - O1) * t), resonances={w0: O2 - O1 + eps * s})
    flow = ms.expand(driven, 1).slow_flow
    assert sp.expand(next(iter(flow.frame.values())) - (O2 - O1) * t) == 0
    gamma = flow.polar[sp.Symbol("gamma", real=True)]
    assert sp.expand(gamma).coeff(s) == -eps
    negative = sp.Symbol("n", negative=True)
    assert problem(U + negative**2 * u + eps * u**3).natural_frequencies == (-negative,)


def test_near_resonance_is_found_on_both_sides_and_names_the_relation():
    equations = [U + u + eps * u * v, v.diff(t, 2) + sp.Rational(41, 10) * v + eps * u**2]
    with pytest.warns(ms.SmallDivisorWarning, match=r"2\*omega_u = 2 is close to omega_v = 2\.02485") as caught:
        ms.expand(problem(equations, [u, v]), 2)
    assert len(caught) == 1


def test_frequencies_that_differ_by_rounding_are_near_not_equal():
    equations = [U + u + eps * u * v, v.diff(t, 2) + (2 * sp.Rational("1.0000000000000002")) ** 2 * v + eps * u**2]
    with pytest.warns(ms.SmallDivisorWarning, match=r"2\*omega_u"):
        ms.expand(problem(equations, [u, v]), 2)


def test_extension_keeps_the_tolerance_and_warns_of_new_divisors():
    equations = [U + u + eps**2 * u**2 * v, v.diff(t, 2) + sp.Rational(305, 100) ** 2 * v + eps * u**3]
    short = ms.expand(problem(equations, [u, v]), 1, tolerance=1e-3)
    assert ms.extend(short, 2).tolerance == 1e-3
    with pytest.warns(ms.SmallDivisorWarning):
        ms.expand(problem(equations, [u, v]), 1)


def test_a_natural_frequency_and_its_detuning_are_checked_against_each_other():
    equations = [U + w1**2 * u + eps * u * v, v.diff(t, 2) + w2**2 * v + eps * u**2]
    rhs = ms.expand(problem(equations, [u, v], {v: 2 * w1 + eps * s}), 2).slow_flow.to_numpy()
    assert rhs.parameters == ("epsilon", "omega_1", "sigma")
    assert rhs.values(epsilon=0.1, omega_1=1.0, omega_2=2.05)[-1] == pytest.approx(0.5)
    with pytest.raises(ms.EvaluationError, match=r"sigma = 55.* contradicts omega_2"):
        rhs.values(epsilon=0.1, omega_1=1.0, omega_2=2.05, sigma=55.0)
    assert rhs.values(epsilon=0.1, omega_1=1.0, sigma=0.3)[-1] == 0.3


def test_chained_relations_may_be_given_in_any_order():
    equations = [U + w1**2 * u + eps * u * v, v.diff(t, 2) + w2**2 * v + eps * u**2 - eps * f * sp.cos(Om * t)]
    relations = {w2: 2 * w1 + eps * s1, Om: w2 + eps * s2}
    for chosen in (relations, dict(reversed(relations.items()))):
        rhs = ms.expand(problem(equations, [u, v], chosen), 2).slow_flow.to_numpy()
        values = dict(
            zip(rhs.parameters, rhs.values(epsilon=0.1, f=0.2, omega_1=1.0, omega_2=2.05, Omega=2.07), strict=True)
        )
        assert values["sigma_1"] == pytest.approx(0.5)
        assert values["sigma_2"] == pytest.approx(0.2)


def test_the_detuning_is_the_symbol_that_the_equations_do_not_hold():
    stated = problem(
        U + w0**2 * u + 2 * eps * mu * u.diff(t) + eps * u**3 - eps * f * sp.cos(Om * t),
        resonances={Om: w0 - eps * mu / 2 + eps * s},
    )
    rhs = ms.expand(stated, 1).slow_flow.to_numpy()
    values = dict(zip(rhs.parameters, rhs.values(epsilon=0.1, f=0.2, mu=0.4, omega_0=1.0, Omega=1.03), strict=True))
    assert values["sigma"] == pytest.approx(0.5)


@pytest.mark.parametrize("value", [w0, w0 + eps])
def test_a_relation_without_a_detuning_checks_the_frequency(value):
    rhs = ms.expand(
        problem(U + w0**2 * u + eps * u**3 - eps * f * sp.cos(Om * t), resonances={Om: value}), 1
    ).slow_flow.to_numpy()
    exact = float(value.subs({w0: 1.0, eps: 0.1}))
    assert rhs.values(epsilon=0.1, f=0.2, omega_0=1.0, Omega=exact) == rhs.values(epsilon=0.1, f=0.2, omega_0=1.0)
    with pytest.raises(ms.EvaluationError, match="contradicts"):
        rhs.values(epsilon=0.1, f=0.2, omega_0=1.0, Omega=exact + 0.1)


BAD_VALUES = {
    "text": {"Omega": "1.3"},
    "text beside": {"Omega": 1.3, "sigma": "a"},
    "epsilon zero": {"Omega": 1.3, "epsilon": 0},
}


@pytest.mark.parametrize("name", BAD_VALUES)
def test_bad_values_beside_a_relation(name):
    stated = problem(U + w0**2 * u + eps * u**3 - eps * f * sp.cos(Om * t), resonances={Om: w0 + eps * s})
    rhs = ms.expand(stated, 1).slow_flow.to_numpy()
    with pytest.raises(ms.EvaluationError):
        rhs.bind({"epsilon": 0.1, "f": 0.2, "omega_0": 1.0} | BAD_VALUES[name])


HARMLESS = ['"""+__import__("os").abort()+"""', r"\xi", r"\sigma", "ω", "x²", "µ", "ϕ", "两"]


@pytest.mark.parametrize("name", HARMLESS)
def test_no_text_of_a_name_reaches_generated_source(name):
    detuning = sp.Symbol(name, positive=True)
    stated = problem(U + w0**2 * u + eps * u**3 - eps * f * sp.cos(Om * t), resonances={Om: w0 + eps * detuning})
    rhs = ms.expand(stated, 2).slow_flow.to_numpy()
    values = rhs.values(epsilon=0.1, f=0.2, omega_0=1.0, Omega=1.05)
    assert values[rhs.parameters.index(name)] == pytest.approx(0.5)
    assert rhs.source.isascii()
    assert np.isfinite(rhs(0.0, [0.1, 0.2], *values)).all()


def test_names_that_python_would_merge_stay_apart():
    names = sp.symbols("µ μ φ ϕ", positive=True)
    result = ms.expand(problem(U + u + eps * sp.Mul(*names) * u**3), 1)
    values = dict(zip(names, (2.0, 3.0, 5.0, 7.0), strict=True))
    np.testing.assert_allclose(result.slow_flow.to_numpy().bind(values, epsilon=0.01)(0.0, [1.0, 0.0])[1], -0.375 * 2.1)


def test_float_exponents_are_whole_powers():
    assert ms.expand(problem(U + u + eps * u**3.0), 2).equals(ms.expand(problem(U + u + eps * u**3), 2))


def test_orders_must_be_integers():
    with pytest.raises(ms.ProblemError, match="integer ≥ 0"):
        ms.Problem(U + u + u**3, u, ordering={u: "x"})


def test_numpy_integers_are_orders():
    assert ms.expand(problem(U + u + eps * u**3), np.int64(2)).order == 2


def test_threads_may_extend_one_expansion():
    base = ms.expand(problem(U + u + eps * (u**2 - 1) * u.diff(t)), 2, representation="sympy")
    wanted = ms.expand(base.problem, 5, representation="sympy")
    found = []
    threads = [threading.Thread(target=lambda: found.append(ms.extend(base, 5))) for _ in range(6)]
    for thread in threads:
        thread.start()
    for thread in threads:
        thread.join()
    assert [x == wanted for x in found] == [True] * 6


def test_transition_curves_fix_their_own_relation():
    delta = sp.Symbol("delta", positive=True)
    stated = problem(U + (delta + eps * sp.cos(Om * t)) * u, resonances={Om: 2 * w + eps * s})
    with pytest.raises(ms.ProblemError, match="state it without them"):
        ms.transition_curves(stated, delta, order=2, tongue=1)
