"""Truncated series of analytic expressions: against repeated differentiation, and what has no series."""

from __future__ import annotations

import pytest
import sympy as sp

from multiscale.problem.small.series import EpsilonSeries
from multiscale.problem.small.series_arithmetic import NotAnalyticError, NotSmallError

e, t = sp.symbols("epsilon t")
u, v = sp.symbols("u v", real=True)
k, g, s, W = sp.symbols("k g s Omega", positive=True)
F = sp.Function("F")(e * t)
VALUES = map(sp.Rational, ("3/7", "-5/11", "4/3", "7/4", "2/9", "8/5", "1/13"))
PLACE = dict(zip((u, v, k, g, s, W, t), VALUES, strict=True))
ORDER = 5


def coefficients(x: sp.Expr, order: int = ORDER) -> list[sp.Expr]:
    return EpsilonSeries(e, t, {u, v}).coefficients(x, order)


ANALYTIC = {
    "sine": sp.sin(k * e * u),
    "cosine about an angle": sp.cos(s + e * u - e * v),
    "tangent about an angle": sp.tan(s + e * u),
    "reciprocal square": k / (g - s - e * u) ** 2,
    "quotient": (1 + e * u) / (1 + e * v + e**2 * u * v),
    "root": sp.sqrt(g - e * u + e**2 * v),
    "fractional power": (1 + e * u) ** sp.Rational(5, 3),
    "symbolic power": (1 + e * u) ** k,
    "unknown in the exponent": 2 ** (e * u),
    "exponential": sp.exp(e * u) - 1,
    "logarithm": sp.log(1 + k * e * u),
    "hyperbolic": sp.tanh(e * u) * sp.sinh(s + e * u) + sp.cosh(e * v),
    "hyperbolic tangent about a place": sp.tanh(s + e * u),
    "composition": sp.sin(sp.exp(e * u) - sp.cos(e * v)),
    "arcs": sp.asin(e * u) + sp.atan(k * e * u / g) + sp.acos(e * v) + sp.asinh(e * v) + sp.atanh(e * u),
    "two arguments": sp.atan2(e * u, 1 + e * v),
    "error function": sp.erf(e * u),
    "Bessel function": sp.besselj(0, e * u),
    "gamma function": sp.gamma(1 + e * u),
    "reciprocal functions": sp.sec(e * u) + sp.cot(s + e * u) + sp.sech(e * u) + sp.csch(s + e * u),
    "absolute value away from its kink": sp.Abs(e * u - g),
    "travelling wave": sp.sin(e * u - W * t),
    "parametric drive": sp.cos(W * t) * sp.sin(e * u),
}


@pytest.mark.parametrize("name", ANALYTIC)
def test_coefficients_are_derivatives(name):
    x = ANALYTIC[name]
    derivative = x.xreplace({sp.Abs(e * u - g): g - e * u})
    for n, c in enumerate(coefficients(x)):
        # Values at one place to 30 digits: the functions of the place are transcendental there.
        expected = (derivative.subs(e, 0) / sp.factorial(n)).subs(PLACE).n(40)
        assert abs(sp.sympify(c).subs(PLACE).n(40) - expected) < sp.Float(10) ** -30, n
        derivative = sp.diff(derivative, e)


CANCELLING = {
    "sine over its angle": (sp.sin(k * e * u) / (k * e * u), [1, 0, -(k**2) * u**2 / 6, 0]),
    "angle times cotangent": (e * u * sp.cot(k * e * u), [1 / k, 0, -k * u**2 / 3, 0]),
    "angle over a difference": (e * u / (1 - sp.exp(-e * u)), [1, u / 2, u**2 / 12, 0]),
    "double zero": ((1 - sp.cos(e * u)) / (e * u) ** 2, [sp.Rational(1, 2), 0, -(u**2) / 24, 0]),
    "sinc": (sp.sinc(e * u), [1, 0, -(u**2) / 6, 0]),
    "power of epsilon below": (sp.sin(e * u) / e, [u, 0, -(u**3) / 6, 0]),
}


@pytest.mark.parametrize("name", CANCELLING)
def test_removable_singularities(name):
    x, expected = CANCELLING[name]
    assert [sp.expand(c - d) for c, d in zip(coefficients(x, 3), expected, strict=True)] == [0] * 4


SLOW = {
    "slow function": (sp.log(1 + e * u * F), [0, u * F, -(u**2) * F**2 / 2]),
    "slow ramp": (1 / (g + e * t - e**2 * u), [1 / (g + e * t), 0, u / (g + e * t) ** 2]),
    "detuned wave": (sp.sin(e * u) * sp.cos(W * t + e * s * t), [0, u * sp.cos(W * t + e * s * t), 0]),
    "detuned wave in an angle": (
        sp.sin(e * u + W * t + e * s * t),
        [sp.sin(W * t + e * s * t), u * sp.cos(W * t + e * s * t), -(u**2) * sp.sin(W * t + e * s * t) / 2],
    ),
}


@pytest.mark.parametrize("name", SLOW)
def test_slow_time_and_drives_are_left_whole(name):
    """A series at fixed εt: an expansion of cos(εst) in ε would be secular."""
    x, expected = SLOW[name]
    found = coefficients(x, 2)
    assert [sp.simplify(c - d) for c, d in zip(found, expected, strict=True)] == [0] * 3


NOT_ANALYTIC = {
    "pole": (1 / (e * u), "vanishes at rest"),
    "pole in a difference": (1 / (e * u - e * v), "vanishes at rest"),
    "pole that does not cancel": (sp.cos(e * u) / (e * u), "vanishes at rest"),
    "square root": (sp.sqrt(e * u), "branch point"),
    "square root of a product": (sp.sqrt(e * u + e * v), "branch point"),
    "logarithm": (sp.log(e * u), "branch point"),
    "negative root": (sp.sqrt(e * u - 1), "negative number -1"),
    "negative logarithm": (sp.log(e * u - 2), "complex at rest"),
    "arcsine beyond one": (sp.asin(2 + e * u), "complex at rest"),
    "arcsine at one": (sp.asin(1 + e * u), "branch point"),
    "kink": (sp.Abs(e * u - e * v), "kink"),
    "jump": (sp.Heaviside(e * u - e * v), "jumps"),
    "larger of two": (sp.Max(e * u, 0), "kink"),
    "undefined function": (sp.Function("f")(e * u), "undefined"),
}


@pytest.mark.parametrize("name", NOT_ANALYTIC)
def test_no_series(name):
    x, reason = NOT_ANALYTIC[name]
    with pytest.raises(NotAnalyticError, match=reason):
        coefficients(x)


def test_a_finite_argument_has_no_series():
    with pytest.raises(NotSmallError):
        coefficients(sp.sin(u + e * v))
