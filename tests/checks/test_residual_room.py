"""The arithmetic of jets, the reading of statements, and that the room knows nothing of the engine."""

from __future__ import annotations

import ast
from pathlib import Path

import mpmath
import pytest
import sympy as sp

import multiscale as ms
from multiscale.checks import residual
from multiscale.checks.residual.evaluation import Evaluation
from multiscale.checks.residual.jets import Jet
from multiscale.checks.residual.statement import stated

t, tau = sp.symbols("t tau", real=True)
eps, w, w1, w2, sigma, Om, alpha = sp.symbols("epsilon omega omega_1 omega_2 sigma Omega alpha", positive=True)
u, v = (sp.Function(name)(t) for name in "uv")
x, y = sp.symbols("x y")
CONTEXT = mpmath.MPContext()
CONTEXT.dps = 60

# x and y as polynomials in τ; y is complex.
SERIES = {x: sp.Rational(7, 10) + tau / 3 - tau**2 / 5 + tau**3 / 7, y: 1 + sp.I / 2 + tau * (2 - sp.I) + tau**2 / 3}
EXPRESSIONS = [
    x + y - 3,
    x * y**2 / 7,
    x**3 - 2 * x**-2 + y**5,
    1 / (1 + x * y),
    sp.exp(x * y),
    sp.sin(x) + sp.cos(y) * sp.tan(x),
    sp.sinh(x) * sp.tanh(y) + sp.cosh(x),
    sp.log(1 + x) - sp.atan(x * y),
    sp.sqrt(x) + y ** sp.Rational(3, 2) + x**sp.pi,
    x**x + 2**y,
    sp.erf(x) + sp.asin(x / 2),
    sp.conjugate(y) * y,
    sp.Abs(y) + sp.re(y) * sp.im(y),
]


@pytest.mark.parametrize("expression", EXPRESSIONS, ids=str)
def test_jets_are_taylor_series(expression):
    """Against derivatives by SymPy of the expression with the polynomials put in."""
    jets = {}
    for symbol, series in SERIES.items():
        coefficients = [sp.expand(series).coeff(tau, n).as_real_imag() for n in range(4)]
        jets[symbol] = Jet([CONTEXT.mpc(*(CONTEXT.mpf(int(c.p)) / int(c.q) for c in pair)) for pair in coefficients])
    found = Evaluation(CONTEXT, {}, jets)(expression).coefficients
    along = expression.subs(SERIES)
    assert len(found) == 4
    for n, value in enumerate(found):
        expected = sp.N((sp.diff(along, tau, n).doit() / sp.factorial(n)).subs(tau, 0), 60)
        assert abs(value - CONTEXT.convert(expected)) < CONTEXT.mpf(10) ** -50


def test_an_operation_is_known_as_far_as_its_operands_are():
    short, long = Jet((2, 1)), Jet((1, 1, 1, 1))
    assert (short * long).coefficients == (2, 3)
    assert (short + long).coefficients == (3, 2)
    assert (2 * long + 1).coefficients == (3, 2, 2, 2)
    assert (long**3).coefficients == (1, 3, 6, 10)
    assert (long * long.reciprocal()).coefficients == (1, 0, 0, 0)
    assert Jet((3, 4)).integral(7).coefficients == (7, 3, 2)


def test_what_has_no_value_is_named():
    evaluation = Evaluation(CONTEXT, {}, {})
    with pytest.raises(ms.EvaluationError, match="stranger"):
        evaluation(sp.Symbol("stranger") + 1)
    with pytest.raises(ms.EvaluationError, match="only integrals over time"):
        evaluation(sp.Integral(sp.sin(x), (x, 0, sp.Symbol("z"))))
    with pytest.raises(ms.EvaluationError, match="without a value"):
        evaluation(sp.Function("g")(sp.Integer(1)))


def test_constants_are_shared_and_varying_values_are_not():
    fixed = {x: CONTEXT.mpf(2)}
    for value in (3, 5):
        evaluation = Evaluation(CONTEXT, fixed, {y: CONTEXT.mpf(value)})
        assert evaluation(x**2 + x**2 * y) == 4 + 4 * value
    assert fixed[x**2] == 4
    assert not any(y in key.free_symbols for key in fixed)


RELATIONS = {
    "symbol": ({Om: w + eps * sigma}, {Om: w + eps * sigma}),
    "multiple": ({3 * Om: w + eps * sigma}, {Om: (w + eps * sigma) / 3}),
    "square": ({Om**2: w**2 + eps * sigma}, {Om: sp.sqrt(w**2 + eps * sigma)}),
    "decimal": ({Om: 0.5 * w + eps * sigma}, {Om: w / 2 + eps * sigma}),
}


@pytest.mark.parametrize("name", RELATIONS)
def test_relations_are_solved_for_a_symbol(name):
    given, expected = RELATIONS[name]
    problem = ms.Problem(u.diff(t, 2) + w**2 * u + eps * (u**3 - sp.cos(Om * t)), u, small=eps, resonances=given)
    found = dict(stated(problem).relations)
    assert {s: sp.expand(value) for s, value in found.items()} == {s: sp.expand(value) for s, value in expected.items()}


def test_relations_in_chains_end_in_free_symbols():
    problem = ms.Problem(
        [
            u.diff(t, 2) + w1**2 * u + eps * u * v,
            v.diff(t, 2) + w2**2 * v + eps * (u**2 - sp.cos(Om * t)),
        ],
        [u, v],
        small=eps,
        resonances={Om: w2 + eps * sigma, w2: 2 * w1 + eps * alpha},
    )
    statement = stated(problem)
    assert dict(statement.relations) == {w2: 2 * w1 + eps * alpha, Om: 2 * w1 + eps * alpha + eps * sigma}
    assert set(statement.parameters) == {alpha, sigma, w1}


def test_a_relation_for_an_unknown_changes_its_stiffness_alone():
    equations = [u.diff(t, 2) + w**2 * u + eps * u * v, 3 * v.diff(t, 2) + 13 * v + eps * w2 * u**2]
    problem = ms.Problem(equations, [u, v], small=eps, resonances={v: 2 * w + eps * sigma})
    first, second = stated(problem).equations
    assert first == equations[0]
    assert sp.expand(second) == sp.expand(3 * v.diff(t, 2) + 3 * (2 * w + eps * sigma) ** 2 * v + eps * w2 * u**2)


def test_the_room_knows_nothing_of_the_engine():
    """Statements and published expressions in, nothing computed by ring, hierarchy, force or linear part."""
    allowed = {"errors", "expansion", "problem", "checks"}
    for path in Path(residual.__file__).parent.glob("*.py"):
        modules = [node.module for node in ast.walk(ast.parse(path.read_text())) if isinstance(node, ast.ImportFrom)]
        own = [m.split(".") for m in modules if m and m.startswith("multiscale.")]
        assert {m[1] for m in own} <= allowed, path
        assert all(m[1] != "problem" or m == ["multiscale", "problem"] for m in own), path
