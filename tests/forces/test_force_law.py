"""Force laws given as numbers: functions, tables, kinks; and what is refused, at the statement or at a call."""

from __future__ import annotations

import pickle
from functools import partial

import numpy as np
import pytest
import sympy as sp

import multiscale as ms

t = sp.Symbol("t", real=True)
eps, w = sp.symbols("epsilon omega_0", positive=True)
u = sp.Function("u")(t)
v = u.diff(t)
F = sp.Function("F")


def stated(force, **options) -> ms.Problem:
    return ms.Problem(u.diff(t, 2) + w**2 * u + eps * force, u, small=eps, **options)


def polar(force, **options):
    return ms.expand(stated(force, **options), 1).slow_flow.to_numpy("polar").bind(epsilon=0.1, omega_0=1.7)


def cubic(x, factor=1.0):
    return factor * x**3


def test_a_function_of_numbers():
    a = np.linspace(0.1, 2, 7)
    found = polar(F(u), laws={F: partial(cubic, factor=2.0)})(0.0, [a, 0 * a])
    assert np.allclose(found[1], 0.1 * 2.0 * 3 * a**2 / (8 * 1.7), rtol=1e-13)
    assert not found[0].any()


def test_a_table_of_a_clearance_is_exact():
    """Straight lines between points are the clearance itself."""
    x = [-3.0, -0.6, 0.6, 3.0]
    table = polar(F(u), laws={F: (x, [-2.4, 0.0, 0.0, 2.4])})
    g = sp.Rational(6, 10)
    closed = polar(sp.Max(u - g, 0) - sp.Max(-u - g, 0))
    a = np.random.default_rng(2).uniform(0.1, 2.9, 30)
    assert np.allclose(table(0.0, [a, 0 * a]), closed(0.0, [a, 0 * a]), rtol=1e-12, atol=1e-15)


def test_a_measured_table_converges_to_its_curve():
    """Linear interpolation of tanh: the error falls as the square of the spacing."""
    exact = polar(sp.tanh(v))(0.0, [1.0, 0.0])[0]
    errors = []
    for n in (11, 21, 41):
        x = np.linspace(-3, 3, n)
        errors.append(abs(polar(F(v), laws={F: (x, np.tanh(x))})(0.0, [1.0, 0.0])[0] - exact))
    assert 3 < errors[0] / errors[1] < 5
    assert 3 < errors[1] / errors[2] < 5


def test_the_jacobian_of_a_table_and_of_a_law_with_derivative():
    x = np.linspace(-3, 3, 9)
    laws = [ms.ForceLaw.table(x, np.sin(x)), ms.ForceLaw(np.tanh, derivative=lambda y: 1 / np.cosh(y) ** 2)]
    for law in laws:
        flow = ms.expand(stated(F(v), laws={F: law}), 1).slow_flow
        rhs, jacobian = (flow.to_numpy(wrt=wrt).bind(epsilon=0.1, omega_0=1.7) for wrt in (None, "state"))
        y, h = np.array([0.7, -0.4]), 1e-6
        expected = [(rhs(0.0, y + h * e) - rhs(0.0, y - h * e)) / (2 * h) for e in np.eye(2)]
        assert np.abs(jacobian(0.0, y) - np.array(expected).T).max() < 1e-9


def test_a_force_that_is_a_small_difference():
    """(x − g + |x − g|)/2, expanded, is max(x − g, 0) with rounding of its own: right to that, and no error."""
    law = ms.ForceLaw(lambda x: x / 2 + np.abs(x - 0.6) / 2 - 0.3, kinks=(0.6,))
    found = polar(F(u), laws={F: law})(0.0, [[0.6001, 0.61, 2.0], [0.0] * 3])
    exact = polar(sp.Max(u - sp.Rational(6, 10), 0))(0.0, [[0.6001, 0.61, 2.0], [0.0] * 3])
    assert np.allclose(found, exact, rtol=1e-9, atol=1e-16)


def test_a_law_travels_with_the_expansion():
    expansion = ms.expand(stated(F(v), laws={F: partial(cubic, factor=0.5)}), 1)
    copy = pickle.loads(pickle.dumps(expansion))
    function = pickle.loads(pickle.dumps(expansion.slow_flow.to_numpy()))
    assert copy.slow_flow.polar == expansion.slow_flow.polar
    assert function.laws
    same = expansion.slow_flow.to_numpy()
    assert np.array_equal(function(0.0, [0.3, 0.4], 0.1, 1.7), same(0.0, [0.3, 0.4], 0.1, 1.7))


def test_functions_without_laws_stand_alone():
    function = ms.expand(stated(sp.tanh(v)), 1).slow_flow.to_numpy()
    assert function.laws == ()
    assert "circle" in function.functions


def test_a_law_of_two_arguments():
    """A friction coefficient that grows with displacement; against the closed form of the same force."""
    found = polar(F(u, v), laws={F: lambda x, y: (1 + x**2) * y})
    a = np.array([0.3, 1.4])
    assert np.allclose(found(0.0, [a, 0 * a])[0], -0.1 * (a / 2 + a**3 / 8), rtol=1e-13)


def stribeck(x):
    return np.sign(x) * (0.6 + 0.4 * np.exp(-(np.abs(x) ** 1.0)))


def test_stribeck_friction_needs_its_kink():
    law = ms.ForceLaw(stribeck, kinks=(0.0,))
    declared = polar(F(v), laws={F: law})(0.0, [1.2, 0.0])[0]
    expression = sp.sign(v) * (sp.Rational(6, 10) + sp.Rational(4, 10) * sp.exp(-sp.Abs(v)))
    assert polar(expression)(0.0, [1.2, 0.0])[0] == pytest.approx(declared, rel=1e-12)
    with pytest.raises(ms.EvaluationError, match=r"F\(.*kink or a jump.*ForceLaw\(function, kinks="):
        polar(F(v), laws={F: stribeck})(0.0, [1.2, 0.0])


STATED = {
    "root of a changing sign": (sp.sqrt(u), r"sqrt\(u\(t\)\).*complex.*sign\(x\)\*Abs\(x\)"),
    "power 3/2": (u ** sp.Rational(3, 2), r"complex.*Abs\(x\)\*\*p"),
    "logarithm": (sp.log(u), r"log\(u\(t\)\).*singular.*Shift u\(t\)"),
    "pole at rest": (1 / u, r"1/u\(t\).*singular"),
    "pole at rest in the velocity": (u / v, "singular"),
    "exponent of unknown sign": (sp.Abs(v) ** sp.Symbol("p", real=True) * v, "Declare the exponent p as nonneg"),
    "undefined function": (F(u), r"nothing says what the function F.*laws=\{F: function or table\}"),
    "unknown function": (sp.erf(u), r"erf.*laws"),
    "small inside": (sp.Abs(v - eps), r"epsilon stands inside.*Expand it"),
    "drive inside": (sp.sign(v - sp.cos(3 * t)), r"contains t.*multiply such a force"),
}


@pytest.mark.parametrize("name", STATED)
def test_refused_when_stated(name):
    force, message = STATED[name]
    with pytest.raises(ms.UnsupportedTermError, match=f"(?s){message}"):
        stated(force)


CALLED = {
    "pole reached": (1 / (1 - u), {}, 1.3, "singularity.*range of motion"),
    "root of a negative number": (sp.sqrt(1 - u), {}, 1.3, "not finite or not real.*range of motion"),
    "beyond the table": (F(u), {"laws": {F: ([-1, 0, 1], [-1, 0, 2])}}, 1.3, "measured from -1 to 1"),
}


@pytest.mark.parametrize("name", CALLED)
def test_refused_when_called(name):
    force, options, amplitude, message = CALLED[name]
    flow = polar(force, **options)
    assert np.isfinite(flow(0.0, [0.5, 0.0])).all()
    with pytest.raises(ms.EvaluationError, match=f"(?s){message}"):
        flow(0.0, [amplitude, 0.0])


def test_the_jacobian_asks_for_the_derivative():
    flow = ms.expand(stated(F(v), laws={F: np.tanh}), 1).slow_flow
    with pytest.raises(ms.EvaluationError, match=r"derivative of the force law F: pass ForceLaw\(function"):
        flow.to_numpy(wrt="state")


@pytest.mark.parametrize(
    ("laws", "message"),
    [
        ({"F": np.tanh}, "expected an undefined function"),
        ({F: 3.0}, "expected a function of numbers, a table"),
        ({F: ([0, 1], [0, 1, 2])}, "two 1-D arrays of one length"),
        ({F: ([0, 0], [0, 1])}, "increasing arguments"),
        ({F: ([0, np.nan], [0, 1])}, "finite"),
    ],
)
def test_malformed_laws(laws, message):
    with pytest.raises(ms.ProblemError, match=message):
        stated(F(u), laws=laws)


@pytest.mark.parametrize("harmonics", [0, -1, 2.5, True])
def test_malformed_harmonics(harmonics):
    with pytest.raises(ms.ProblemError, match="expected an integer ≥ 1"):
        stated(sp.sign(v), harmonics=harmonics)
