"""What may be stated, and that equivalent statements give one result."""

from __future__ import annotations

import pickle

import pytest
import sympy as sp

import multiscale as ms

t = sp.Symbol("t", real=True)
eps, k, m, mu, w, alpha = sp.symbols("epsilon k m mu omega alpha", positive=True)
u, v = sp.Function("u")(t), sp.Function("v")(t)


def small(equations, unknowns=u, **options):
    return ms.Problem(equations, unknowns, small=eps, **options)


FREQUENCIES = {
    "number": (sp.Integer(9), 3),
    "symbol": (w**2, w),
    "ratio": (k / m, sp.sqrt(k) / sp.sqrt(m)),
    "root": (sp.sqrt(2), 2 ** sp.Rational(1, 4)),
    "perfect square": ((w + mu) ** 2, w + mu),
    "sum": (w**2 + mu**2, sp.sqrt(w**2 + mu**2)),
    "decimal": (sp.Float("4.41"), sp.Rational(21, 10)),
    "function": (w**2 * sp.cos(alpha) / m, w * sp.sqrt(sp.cos(alpha)) / sp.sqrt(m)),
}


@pytest.mark.parametrize("name", FREQUENCIES)
def test_natural_frequency(name):
    square, expected = FREQUENCIES[name]
    problem = small(u.diff(t, 2) + square * u + eps * u**3)
    (found,) = problem.natural_frequencies
    assert sp.simplify(found - expected) == 0
    assert (
        sp.simplify(
            ms.expand(problem, 1).frequency_corrections()[1]
            - 3 * ms.expand(problem, 1).symbols.a[0] ** 2 / (8 * expected)
        )
        == 0
    )


RATIOS = {
    "numbers": (sp.Integer(2), sp.Integer(8), 2),
    "ratios": (k / m, 4 * k / m, 2),
    "same": (w**2, w**2, 1),
    "three halves": (4 * w**2, 9 * w**2, sp.Rational(3, 2)),
    "decimals": (sp.Float("0.01"), sp.Float("0.09"), 3),
    "nested roots": (3 - 2 * sp.sqrt(2), 12 - 8 * sp.sqrt(2), 2),
}


@pytest.mark.parametrize("name", RATIOS)
def test_commensurate_frequencies_share_a_base(name):
    first, second, ratio = RATIOS[name]
    problem = small([u.diff(t, 2) + first * u + eps * v**2, v.diff(t, 2) + second * v + eps * u**2], [u, v])
    bases = problem.canonical(1).bases
    assert len(bases.values) == 1
    assert sp.Rational(bases.rates[1][0], bases.rates[0][0]) == ratio
    assert next(iter(ms.expand(problem, 2).relations.values())) == ratio * sp.Symbol("omega_u")


INDEPENDENT = {
    "roots": (sp.Integer(2), sp.Integer(3)),
    "symbols": (w**2, mu**2),
    "root and one": (sp.Integer(1), sp.Integer(2)),
    "root times symbol": (w**2, 2 * w**2),
    "nested roots": (2 - sp.sqrt(2), 2 + sp.sqrt(2)),
    "ratio and stiffness": (k / m, k),
}


@pytest.mark.parametrize("name", INDEPENDENT)
def test_incommensurate_frequencies_have_two_bases(name):
    first, second = INDEPENDENT[name]
    problem = small([u.diff(t, 2) + first * u + eps * v**2, v.diff(t, 2) + second * v + eps * u**2], [u, v])
    assert len(problem.canonical(1).bases.values) == 2
    assert not ms.expand(problem, 2).relations


def test_a_dependent_frequency_is_a_combination():
    """√(3 + 2√2) = 1 + √2: three modes over two base frequencies."""
    x = sp.Function("x")(t)
    equations = [
        u.diff(t, 2) + u + eps * v * x,
        v.diff(t, 2) + 2 * v + eps * u * x,
        x.diff(t, 2) + (3 + 2 * sp.sqrt(2)) * x + eps * u * v,
    ]
    result = ms.expand(small(equations, [u, v, x]), 2)
    assert len(result.problem.canonical(1).bases.values) == 2
    assert list(result.slow_flow.phases.values()) == [
        -result.symbols.beta[0] - result.symbols.beta[1] + result.symbols.beta[2]
    ]


def test_mass_in_front_and_on_the_right():
    direct = small(u.diff(t, 2) + k / m * u + eps * alpha / m * u**3)
    moved = small(sp.Eq(m * u.diff(t, 2), -k * u - eps * alpha * u**3))
    assert ms.expand(direct, 3).equals(ms.expand(moved, 3))


def test_equations_may_come_in_any_order():
    one, two = u.diff(t, 2) + u + eps * v**2, v.diff(t, 2) + 2 * v + eps * u**2
    assert ms.expand(small([one, two], [u, v]), 2).equals(ms.expand(small([two, one], [u, v]), 2))


def test_unevaluated_derivatives_are_carried_out():
    inertial = sp.Derivative(u * u.diff(t), t)
    written = u.diff(t) ** 2 + u * u.diff(t, 2)
    assert ms.expand(small(u.diff(t, 2) + u + eps * u * inertial), 2).equals(
        ms.expand(small(u.diff(t, 2) + u + eps * u * written), 2)
    )


def test_ordering_gives_what_powers_of_epsilon_give():
    ordered = ms.Problem(u.diff(t, 2) + w**2 * u + mu * u.diff(t) + alpha * u**2 + k * u**3, u, ordering={u: 1, mu: 2})
    powers = small(u.diff(t, 2) + w**2 * u + eps**2 * mu * u.diff(t) + eps * alpha * u**2 + eps**2 * k * u**3)
    assert ms.expand(ordered, 4).equals(ms.expand(powers, 4))
    assert ordered.small == eps


def test_unequal_orders_divide_out_each_unknowns_own_power():
    unequal = ms.Problem([u.diff(t, 2) + 2 * u + v**3, v.diff(t, 2) + 3 * v + u * v], [u, v], ordering={u: 2, v: 1})
    powers = small([u.diff(t, 2) + 2 * u + eps * v**3, v.diff(t, 2) + 3 * v + eps**2 * u * v], [u, v])
    assert ms.expand(unequal, 3).equals(ms.expand(powers, 3))


def test_floats_are_put_back():
    result = ms.expand(small(u.diff(t, 2) + u + sp.Float("0.3") * eps * u**3), 1)
    assert result.frequency_corrections()[1] == sp.Float("0.3") * 3 * result.symbols.a[0] ** 2 / 8


def test_constants_stay_exact():
    result = ms.expand(small(u.diff(t, 2) + 2 * u + sp.pi * sp.sqrt(3) * eps * u**3), 1)
    assert result.frequency_corrections()[1] == 3 * sp.sqrt(6) * sp.pi * result.symbols.a[0] ** 2 / 16


def test_taken_names_are_avoided():
    a, A, p = sp.symbols("a A p", positive=True)
    result = ms.expand(small(u.diff(t, 2) + u + eps * a * A * p * u**3), 1)
    assert [s.name for s in (*result.symbols.a, *result.symbols.A, *result.symbols.p)] == ["a_u", "A_u", "p_u"]
    assert result.frequency_corrections()[1] == 3 * a * A * p * result.symbols.a[0] ** 2 / 8


def test_properties():
    problem = small(u.diff(t, 2) + k / m * u + eps * alpha * u**3, time=t)
    assert problem.parameters == (alpha, k, m)
    assert (problem.small, problem.time, problem.unknowns) == (eps, t, (u,))
    assert "aligned" in problem._repr_latex_()
    assert problem == small(u.diff(t, 2) + k / m * u + eps * alpha * u**3)
    assert hash(problem) == hash(small(u.diff(t, 2) + k / m * u + eps * alpha * u**3))


def test_assumptions_are_said():
    x = sp.Symbol("x")
    result = ms.expand(small(u.diff(t, 2) + x * u + eps * u**3), 2)
    assert any("assumed to be positive" in remark for remark in result.warnings)
    pi = ms.expand(small([u.diff(t, 2) + u + eps * v**2, v.diff(t, 2) + sp.pi**2 * v + eps * u**2], [u, v]), 2)
    assert any("pi is assumed to be rationally independent" in remark for remark in pi.warnings)


PICKLED = {
    "small": lambda: small([u.diff(t, 2) + w**2 * u + eps * v * u.diff(t), v.diff(t, 2) + v + eps * u**2], [u, v]),
    "ordering": lambda: ms.Problem(u.diff(t, 2) + u + mu * u.diff(t) + u**3, u, ordering={u: 1, mu: 2}),
    "assumptions": lambda: small(x_real.diff(t, 2) + x_real + eps * x_real**3, x_real),
}
x_real = sp.Function("x", real=True)(t)


@pytest.mark.parametrize("name", PICKLED)
def test_problems_pickle(name):
    problem = PICKLED[name]()
    assert pickle.loads(pickle.dumps(problem)) == problem
