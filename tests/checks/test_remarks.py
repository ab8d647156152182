"""What a careful analyst would say about a result: each remark where it belongs, and not where it does not."""

from __future__ import annotations

import warnings

import numpy as np
import pytest
import sympy as sp

import multiscale as ms

t = sp.Symbol("t", real=True)
eps, alpha, mu, w, w1, w2, f, Om = sp.symbols("epsilon alpha mu omega omega_1 omega_2 f Omega", positive=True)
sigma = sp.Symbol("sigma", real=True)
u, v = sp.Function("u")(t), sp.Function("v")(t)
ud, udd, vdd = u.diff(t), u.diff(t, 2), v.diff(t, 2)


def expansion(equations, unknowns, order: int, **options) -> ms.Expansion:
    stated = ms.Problem(equations, unknowns, **({"small": eps} | options))
    with warnings.catch_warnings():
        warnings.simplefilter("ignore", ms.OrderingWarning)
        return ms.expand(stated, order)


def remarks(result: ms.Expansion, start: str) -> list[str]:
    return [x for x in result.warnings if x.startswith(start)]


# Terms beyond the order, and parameters without effect


def test_terms_beyond_the_order_are_named_with_the_order_that_holds_them():
    result = expansion(udd + u + eps * alpha * u**3 + 5 * eps**3 * u**5, u, 2)
    assert remarks(result, "the terms in") == [
        "the terms in u(t)**5 are of order 3 in epsilon: order 2 leaves them out; use order=3 or more if they matter"
    ]
    assert not remarks(ms.extend(result, 3), "the terms in")


def test_terms_beyond_the_order_with_an_ordering():
    stated = ms.Problem(udd + u + alpha * u**3 + mu * u**5, u, ordering={u: 1})
    result = ms.expand(stated, 3)
    assert remarks(result, "the terms in u(t)**5 are of order 4")
    assert remarks(result, "mu has no effect up to order 3: it enters at order 4")
    assert not ms.extend(result, 4).warnings


def test_squares_of_a_detuning_are_no_omission():
    equation = udd + w**2 * u + 2 * eps * mu * ud + eps * u**3 - eps * f * sp.cos(Om * t)
    result = expansion(equation, u, 1, resonances={w: Om - eps * sigma})
    assert not result.warnings
    more = expansion(equation + eps**2 * alpha * ud, u, 1, resonances={w: Om - eps * sigma})
    assert remarks(more, "the terms in Derivative(u(t), t) are of order 2")


@pytest.mark.parametrize(
    ("equation", "name", "power"),
    [
        (udd + u + eps * alpha * u**3 + eps**3 * mu * u**5, "mu", 3),
        (udd + u + eps * alpha * u**3 + eps**4 * ud / mu, "mu", 4),
        (udd + u + eps * alpha * u**3 + eps**3 * sp.sqrt(1 + mu) * ud, "mu", 3),
    ],
    ids=["coefficient", "denominator", "root"],
)
def test_a_lost_parameter_is_named_with_the_order_at_which_it_enters(equation, name, power):
    result = expansion(equation, u, 2)
    assert remarks(result, f"{name} has no effect up to order 2: it enters at order {power}")
    assert not remarks(ms.extend(result, power), f"{name} has no effect")
    assert not remarks(result, "alpha")


def test_a_parameter_that_cancels_is_not_said_to_enter_later():
    """u(u'' + u) stands at order 1, vanishes there because U_0'' + U_0 = 0, and acts at order 2."""
    equation = udd + u + eps * alpha * u * (udd + u) + eps * u**3
    (remark,) = remarks(expansion(equation, u, 1), "alpha has no effect up to order 1")
    assert remark.endswith("it enters at a higher order, or cancels")
    assert not remarks(expansion(equation, u, 2), "alpha")


# The mean


def test_the_drift_of_a_quadratic_oscillator_is_named():
    """Mean −εα_2a²/(2ω_0²): A. H. Nayfeh & D. T. Mook, Nonlinear Oscillations, 1979, §2.3 (from memory)."""
    result = expansion(udd + w**2 * u + eps * alpha * u**2, u, 2)
    a = result.symbols.a[0]
    mean = sp.sstr(-(a**2) * alpha * eps / (2 * w**2))
    (remark,) = remarks(result, "the motion is not centred")
    assert remark == f"the motion is not centred: the mean of u(t) is {mean} to order 1, not zero"


@pytest.mark.parametrize(
    "equation",
    [udd + u + eps * u**3, udd + u + eps * (u**2 - 1) * ud, udd + u + eps * mu * ud * abs(mu)],
    ids=["cubic", "self-excited", "linear"],
)
def test_odd_forces_have_no_drift(equation):
    assert not remarks(expansion(equation, u, 3), "the motion is not centred")


def test_the_drift_shows_in_every_unknown_and_long_formulas_are_referred_to():
    weights = sp.symbols("c1:12", positive=True)
    stated = [udd + u + eps * v * u, vdd + 7 * v + eps * sum(weights) * u**2 * mu**2 * alpha**3 * (1 + w + f) ** 2]
    found = remarks(expansion(stated, [u, v], 1), "the motion is not centred")
    assert len(found) == 1
    assert "the mean of v(t) is harmonics(expansion)[v(t)][0] to order 1" in found[0]


# Small divisors at given values


def coupled() -> ms.Expansion:
    return expansion([udd + w1**2 * u + 2 * eps * mu * ud + eps * u * v, vdd + w2**2 * v + eps * u**2], [u, v], 2)


NEAR = {eps: 0.01, mu: 0.1, w1: 1.0, w2: 2.03}


def test_small_divisors_at_given_values_name_the_relation_to_declare():
    result = coupled()
    assert not remarks(result, "small divisor")
    found = [x for x in result.warnings_at(NEAR) if x.startswith("small divisor")]
    assert len(found) == 1
    assert "2*omega_u = 2 is close to omega_v = 2.03" in found[0]
    assert "add resonances={v(t): 2*omega_1 + epsilon*sigma}" in found[0]
    assert result.warnings_at({"omega_1": 1.0, "omega_2": 2.03})[-1] == found[0]


def test_no_small_divisors_away_from_resonance_or_when_it_is_declared():
    far = NEAR | {w2: 2.6}
    assert coupled().warnings_at(far) == coupled().warnings
    stated = [udd + w1**2 * u + eps * u * v, vdd + w2**2 * v + eps * u**2]
    declared = expansion(stated, [u, v], 2, resonances={w2: 2 * w1 + eps * sigma})
    assert not [x for x in declared.warnings_at({eps: 0.01, w1: 1.0, sigma: 3.0}) if x.startswith("small")]
    assert coupled().warnings_at({eps: 0.01}) == coupled().warnings


def test_a_drive_near_resonance_at_given_values():
    result = expansion(udd + w**2 * u + eps * u**3 - f * sp.cos(Om * t), u, 1)
    near = [x for x in result.warnings_at({w: 1.0, Om: 3.05}) if x.startswith("small divisor")]
    assert any("Omega" in x and "resonances={Omega: 3*omega + epsilon*sigma}" in x for x in near)
    assert not [x for x in result.warnings_at({w: 1.0, Om: 1.7}) if x.startswith("small divisor")]


def test_unknown_parameters_are_refused():
    with pytest.raises(ms.EvaluationError, match="unknown parameter nu"):
        coupled().warnings_at({"nu": 1.0})


def test_validity_warns_of_small_divisors_at_its_parameters():
    with pytest.warns(ms.SmallDivisorWarning, match=r"2\*omega_u = 2 is close"):
        ms.validity(coupled(), NEAR, 0.5, horizon=5.0, amplitudes=[0.01, 0.02])
    ms.validity(coupled(), NEAR | {w2: 2.6}, 0.5, horizon=5.0, amplitudes=[0.01, 0.02])


def test_equilibria_warn_of_small_divisors_at_their_parameters():
    equations = [
        udd + w1**2 * u + 2 * eps * mu * ud + eps * u**2 * v - eps * f * sp.cos(Om * t),
        vdd + w2**2 * v + 2 * eps * mu * v.diff(t) + eps * u**3,
    ]
    result = expansion(equations, [u, v], 1, resonances={Om: w1 + eps * sigma})
    values = {eps: 0.01, mu: 0.1, w1: 1.0, f: 0.2, sigma: 0.0}
    with pytest.warns(ms.SmallDivisorWarning, match=r"3\*omega_u = 3 is close to omega_v = 3\.05"):
        ms.equilibria(result, values | {w2: 3.05})
    ms.equilibria(result, values | {w2: 4.4})


def test_frequency_responses_warn_of_small_divisors_at_their_parameters():
    equation = udd + w**2 * u + 2 * eps * mu * ud + eps * u**3 - eps * f * sp.cos(Om * t) - eps * f * sp.cos(w2 * t)
    result = expansion(equation, u, 1, resonances={Om: w + eps * sigma})
    values = {eps: 0.01, mu: 0.1, w: 1.0, f: 0.2}
    with pytest.warns(ms.SmallDivisorWarning, match=r"omega_2"):
        ms.frequency_response(result, values | {w2: 1.03}, sweep={sigma: np.linspace(-1, 1, 5)})
    ms.frequency_response(result, values | {w2: 1.7}, sweep={sigma: np.linspace(-1, 1, 5)})
