"""The predicted length of an expansion, against expansions that are then made."""

from __future__ import annotations

import pytest
import sympy as sp

import multiscale as ms
from benchmarks.problems import driven_cubic, one_to_two, quadratic_and_cubic, three_resonant, two_coupled, van_der_pol

t = sp.Symbol("t", real=True)
eps, alpha, omega = sp.symbols("epsilon alpha omega", positive=True)
u = sp.Function("u")(t)


def many_powers() -> ms.Problem:
    """u'' + ω² u + ε Σ c_k u^k = 0, k = 2 … 7."""
    force = sum(sp.Symbol(f"c_{k}") * u**k for k in range(2, 8))
    return ms.Problem(u.diff(t, 2) + omega**2 * u + eps * force, u, small=eps)


def ordered() -> ms.Problem:
    """Every second level vanishes."""
    return ms.Problem(u.diff(t, 2) + omega**2 * u + alpha * u**3, u, ordering={u: 1})


CASES = {
    "van der Pol": (van_der_pol, 8, 40),
    "quadratic and cubic": (quadratic_and_cubic, 7, 60),
    "two coupled": (two_coupled, 6, 1000),
    "driven": (driven_cubic, 7, 300),
    "one to two": (one_to_two, 7, 300),
    "many powers": (many_powers, 6, 2000),
    "ordered": (ordered, 13, 7),
    "three resonant": (three_resonant, 3, 5000),
}


def actual(problem, order):
    computation = ms.expand(problem, order).computation
    return [computation.size(n) for n in range(order + 1)]


@pytest.mark.parametrize("name", CASES)
def test_two_levels_ahead_within_a_factor_of_three(name):
    build, order, limit = CASES[name]
    found = ms.estimate_terms(build(), order, limit=limit)
    sizes = actual(build(), order)
    assert found.computed < order, "nothing was predicted"
    for n, (fields, flow) in enumerate(sizes):
        pairs = ((found.fields[n], fields), (found.slow_flow[n], flow))
        for predicted, true in pairs:
            if n <= found.computed:
                assert predicted == true
            elif n <= found.computed + 2:
                assert true / 3 - 2 <= predicted <= 3 * true + 2, (n, predicted, true)


def test_all_levels_computed_is_exact():
    found = ms.estimate_terms(van_der_pol(), 4, limit=10**6)
    assert found.computed == 4
    assert list(zip(found.fields, found.slow_flow, strict=True)) == actual(van_der_pol(), 4)
    assert found.total == sum(map(sum, actual(van_der_pol(), 4)))


@pytest.mark.parametrize("order", [0, True, 2.0, "2"])
def test_refused(order):
    with pytest.raises(ms.ProblemError, match="expected an integer"):
        ms.estimate_terms(van_der_pol(), order)
    with pytest.raises(ms.ProblemError, match="state a multiscale"):
        ms.estimate_terms(u, 2)
