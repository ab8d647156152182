"""Forces averaged over a cycle: what the checks can say of them, and what they refuse."""

from __future__ import annotations

import numpy as np
import pytest
import sympy as sp

import multiscale as ms

pytest.importorskip("scipy.integrate")
t = sp.Symbol("t", real=True)
eps, mu = sp.symbols("epsilon mu", positive=True)
u, v = sp.Function("u")(t), sp.Function("v")(t)
F, G = sp.Function("F"), sp.Function("G_1")
du, ddu = u.diff(t), u.diff(t, 2)
START = {u: 1.0, du: 0.0}


def stated(force: sp.Expr, **laws) -> ms.Problem:
    return ms.Problem(ddu + u + eps * force, u, small=eps, laws={sp.Function(name): law for name, law in laws.items()})


def compared(problem: ms.Problem, values=(), small=(0.04, 0.02), **options) -> ms.Comparison:
    return ms.compare(ms.expand(problem, 1), dict(values), START, small, 1.0, **options)


def test_a_law_is_compared_as_its_formula_is():
    law, formula = stated(mu * F(du), F=np.tanh), stated(mu * sp.tanh(du))
    found, wanted = (compared(x, {mu: 0.5}) for x in (law, formula))
    np.testing.assert_allclose(found.errors, wanted.errors, rtol=1e-9)
    assert found.order == pytest.approx(1, abs=0.2)


def test_tables_and_several_laws():
    """A stop as a table, exactly, beside a law of two arguments."""
    law = stated(F(u) + mu * G(u, du), F=([-2, 0.5, 2], [0, 0, 1.5]), G_1=lambda x, y: np.tanh(x) * y)
    formula = stated(sp.Max(u - sp.Rational(1, 2), 0) + mu * sp.tanh(u) * du)
    found, wanted = (compared(x, {mu: 0.5}, points=200) for x in (law, formula))
    np.testing.assert_allclose(found.errors, wanted.errors, rtol=1e-6)


def test_a_table_that_ends_too_early_says_so():
    short = stated(F(u), F=([-0.5, 0.0, 0.5], [-0.1, 0.0, 0.1]))
    with pytest.raises(ms.EvaluationError, match=r"measured from -0.5 to 0.5"):
        compared(short)


def test_dry_friction_from_a_finite_amplitude():
    """The correction by friction does not fall with the amplitude, and is no reason to refuse one of 1 at ε = 0.04."""
    found = compared(stated(sp.sign(du)), points=200)
    assert found.order == pytest.approx(1, abs=0.2)


ROUGH = {
    "drag": (stated(sp.Abs(du) * du), r"Abs\(Derivative\(u\(t\), t\)\)"),
    "friction": (stated(sp.sign(du)), "sign"),
    "clearance": (stated(sp.Max(u - sp.Rational(1, 2), 0)), "Max"),
    "large angle": (stated(sp.sin(u)), r"sin\(u\(t\)\)"),
    "even": (stated(sp.Abs(u)), r"Abs\(u\(t\)\)"),
    "law": (stated(F(du), F=np.tanh), r"F\(Derivative"),
}


@pytest.mark.parametrize("name", ROUGH)
def test_certify_and_validity_refuse_averages_and_name_compare(name):
    problem, term = ROUGH[name]
    result = ms.expand(problem, 1)
    with pytest.raises(ms.UnsupportedTermError, match=rf"{term}.*over a cycle.*compare"):
        ms.certify(result)
    with pytest.raises(ms.EvaluationError, match=r"over a cycle.*compare"):
        ms.validity(result, {eps: 0.1}, 0.01)


def test_averages_of_several_phases_are_refused_too():
    pair = (ddu + u + eps * sp.sign(du - v.diff(t)), v.diff(t, 2) + 2 * v)
    result = ms.expand(ms.Problem(pair, (u, v), small=eps), 1)
    with pytest.raises(ms.UnsupportedTermError, match="compare"):
        ms.certify(result)


def test_smooth_forces_of_small_unknowns_are_certified():
    for force in (sp.sin(u), sp.besselj(1, u), sp.atan2(u, 1 + u**2)):
        assert ms.certify(ms.expand(ms.Problem(ddu + force, u, ordering={u: 1}), 2)).passed
