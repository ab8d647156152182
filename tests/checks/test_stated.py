"""The equations as stated in first-order form: inertia of every kind, relations exactly, drives at their phase."""

from __future__ import annotations

import math
from types import SimpleNamespace

import numpy as np
import pytest
import sympy as sp
from published.motion import full

import multiscale as ms
from multiscale.checks.stated import stated

from .systems import SYSTEMS, VALUES, Om, alpha, beta, ddu, ddv, dv, eps, f, h, mu, sigma, t, u, v, w, w1, w2

x = sp.Function("x")(t)
NUMBERS = {s.name: value for s, value in VALUES.items()} | {"epsilon": 0.3}


def accelerations(problem: ms.Problem, time: float, state: list[float], **values: float) -> list[float]:
    found = stated(problem).rhs(NUMBERS | values)(time, np.array(state))
    count = len(problem.unknowns)
    assert found[:count] == state[count:]
    return found[count:]


def residual(problem: ms.Problem, equations, time: float, state: list[float], found: list[float]) -> list[float]:
    """The equations, every symbol replaced by its number."""
    values = {s: VALUES[s] for s in VALUES} | {eps: 0.3}
    count = len(problem.unknowns)
    result = []
    for e in equations:
        for k, y in enumerate(problem.unknowns):
            e = e.subs(y.diff(t, 2), found[k])
        for k, y in enumerate(problem.unknowns):
            e = e.subs(y.diff(t), state[count + k])
        for k, y in enumerate(problem.unknowns):
            e = e.subs(y, state[k])
        result.append(float(e.subs(values).subs(t, time)))
    return result


@pytest.mark.parametrize(
    ("equations", "unknowns"),
    [
        pytest.param([(1 + eps * alpha * u**2) * ddu + eps * u * u.diff(t) ** 2 + w**2 * u], [u], id="one"),
        pytest.param(
            [
                ddu + w1**2 * u + eps * (v * ddv + alpha * u * ddu),
                (2 + eps * v) * ddv + 2 * w2**2 * v + eps * u * ddu + eps * dv,
            ],
            [u, v],
            id="two coupled by inertia",
        ),
        pytest.param([ddu + w**2 * u + eps * (u * ddu**2 + beta * ddu**3)], [u], id="not linear in the acceleration"),
        pytest.param(
            [ddv + w2**2 * v + eps * u * x, x.diff(t, 2) + x * w**2 + eps * u * v, ddu + w1**2 * u + eps * x * v],
            [u, v, x],
            id="three, in another order",
        ),
        pytest.param(
            [
                ddu + w1**2 * u + eps * u * ddv,
                ddv + w2**2 * v + eps * u * x.diff(t, 2),
                x.diff(t, 2) + x * w**2 + eps * v * ddu,
            ],
            [u, v, x],
            id="three coupled by inertia",
        ),
    ],
)
def test_accelerations_solve_the_equations(equations, unknowns):
    problem = ms.Problem(equations, unknowns, small=eps)
    state = [0.4, -0.7, 0.3, 0.2, 0.5, -0.6][: 2 * len(unknowns)]
    found = accelerations(problem, 0.0, state)
    np.testing.assert_allclose(residual(problem, equations, 0.0, state, found), 0, atol=1e-14)
    moved = [a + 0.01 for a in found]
    assert np.max(np.abs(residual(problem, equations, 0.0, state, moved))) > 1e-3


@pytest.mark.parametrize("name", ["self-excited", "quadratic and cubic", "damped", "driven", "parametric"])
def test_against_another_first_order_form(name: str):
    problem = SYSTEMS[name].problem
    values = {s: VALUES[s] for s in problem.parameters} | {eps: 0.3}
    relation = {s: x.subs(values) for s, x in problem.resonances}
    other = full(problem, values | relation)
    assert accelerations(problem, 1.7, [0.4, -0.3])[0] == pytest.approx(other(1.7, np.array([0.4, -0.3]))[1], rel=1e-13)


def test_a_drive_keeps_its_exact_phase():
    """3Ω = ω + εσ: not the frequency at leading order."""
    problem = SYSTEMS["driven hard"].problem
    found = accelerations(problem, 50.0, [0.0, 0.0])
    turned = VALUES[f] * math.cos((VALUES[w] + 0.3 * VALUES[sigma]) / 3 * 50.0 + 1)
    assert found == [pytest.approx(turned, rel=1e-13)]


def test_a_squared_relation_is_exact():
    """Ω² = ω² + εδ is a square root, not its series."""
    delta = sp.Symbol("delta", real=True)
    problem = ms.Problem(
        ddu + w**2 * u + eps * u**3 - eps * f * Om**2 * sp.cos(Om * t),
        u,
        small=eps,
        resonances={Om**2: w**2 + eps * delta},
    )
    square = VALUES[w] ** 2 + 0.3 * 0.9
    wanted = 0.3 * VALUES[f] * square * math.cos(math.sqrt(square) * 2.0)
    assert accelerations(problem, 2.0, [0.0, 0.0], delta=0.9) == [pytest.approx(wanted, rel=1e-13)]


def test_a_relation_for_an_unknown_sets_its_stiffness():
    """h v'' + h ω_2² v + …, v: 2ω_1 + εσ: own stiffness becomes h (2ω_1 + εσ)², and ω_2 is gone."""
    problem = SYSTEMS["one to two, by the unknown"].problem
    assert "omega_2" not in stated(problem).parameters
    found = accelerations(problem, 0.0, [0.0, 0.5, 0.0, 0.0])
    square = (2 * VALUES[w1] + 0.3 * VALUES[sigma]) ** 2
    np.testing.assert_allclose(found, [0.0, -square * 0.5], rtol=1e-13)


def test_ordering_leaves_the_users_equation():
    problem = SYSTEMS["ordering"].problem
    found = accelerations(problem, 2.0, [0.4, -0.3])
    wanted = -(
        VALUES[w] ** 2 * 0.4
        - 2 * VALUES[mu] * 0.3
        + VALUES[alpha] * 0.16
        + VALUES[beta] * 0.064
        - VALUES[f] * math.cos((VALUES[w] + VALUES[sigma]) * 2.0)
    )
    assert found == [pytest.approx(wanted, rel=1e-13)]


def test_values_that_do_not_exist():
    problem = ms.Problem(ddu + u + eps * u**3, u, small=eps)
    found = stated(problem).rhs({"epsilon": 0.1})(0.0, np.array([1e200, 0.0]))
    assert found[0] == 0.0
    assert math.isnan(found[1])


def test_an_unknown_function_is_named():
    g = sp.Function("g")
    problem = ms.Problem(ddu + u + eps * g(eps * t) * u**3, u, small=eps)
    with pytest.raises(ms.EvaluationError, match=r"g\(epsilon\*t\) has no numeric value"):
        stated(problem)


def test_parameters_of_the_stated_equations():
    problem = ms.Problem(h * ddu + h * w**2 * u + eps * alpha * u**3, u, small=eps)
    assert stated(problem).parameters == ("alpha", "epsilon", "h", "omega")
    assert stated(problem) is stated(ms.Problem(h * ddu + h * w**2 * u + eps * alpha * u**3, u, small=eps))


def test_first_order_equations_among_others():
    """An unknown without an acceleration: its velocity is solved for, and the state has no place for it."""
    problem = SimpleNamespace(
        equations=(ddu + w**2 * u + eps * v, v.diff(t) + alpha * v - u.diff(t) ** 2),
        unknowns=(u, v),
        time=t,
        small=eps,
        ordering=None,
        resonances=(),
        parameters=(alpha, w),
        laws={},
        with_relations=lambda x: x,
    )
    equations = stated.__wrapped__(problem)
    assert equations.second == (0,)
    assert equations.start([1.0, 2.0], [3.0, 4.0]) == (1.0, 2.0, 3.0)
    found = equations.rhs(NUMBERS)(0.0, np.array([0.4, -0.7, 0.3]))
    wanted = [0.3, VALUES[alpha] * 0.7 + 0.09, -(VALUES[w] ** 2) * 0.4 + 0.3 * 0.7]
    np.testing.assert_allclose(found, wanted, rtol=1e-14)


def test_a_relation_for_a_mode_of_coupled_equations_is_refused():
    coupled = SimpleNamespace(
        equations=(ddu + 3 * u - v, ddv + 8 * v - u + eps * u * v),
        unknowns=(u, v),
        time=t,
        small=eps,
        ordering=None,
        parameters=(sigma,),
        with_relations=lambda x: x,
    )
    for key in (v, sp.Symbol("omega_9")):
        coupled.resonances = ((key, 3 + eps * sigma),)
        with pytest.raises(ms.EvaluationError, match="natural frequency of a mode of coupled equations"):
            stated.__wrapped__(coupled)


def test_no_acceleration_solves_the_equation():
    """u'' + ε u''² = −u − … has no real solution far from rest: not-a-number there, a value near rest."""
    problem = ms.Problem(ddu + u + eps * ddu**2, u, small=eps)
    near, far = (stated(problem).rhs({"epsilon": 1.0})(0.0, np.array([x, 0.0]))[1] for x in (0.1, 5.0))
    assert near + 0.1 + near**2 == pytest.approx(0, abs=1e-14)
    assert math.isnan(far)
