"""Power series with exact rational coefficients: lists x[0] + x[1] s + x[2] s² + …, cut after a fixed number of terms.

The coefficients come from integers, from SymPy polynomials, or from an analytic function by Cauchy's formula
c_n = (1/2πi) ∮ f(s) s^{−n−1} ds, evaluated by the trapezoidal rule (geometrically convergent on a circle) with so many
digits that the rational number behind each coefficient is beyond doubt.
"""

from __future__ import annotations

from collections.abc import Callable, Sequence
from fractions import Fraction
from typing import Any

import mpmath
import sympy as sp

Series = list[Fraction]
Terms = dict[tuple[int, int], Fraction]

DIGITS = 70
POINTS = 256


def product(x: Sequence[Fraction], y: Sequence[Fraction]) -> Series:
    return [sum((x[k] * y[n - k] for k in range(n + 1)), Fraction(0)) for n in range(min(len(x), len(y)))]


def power(x: Sequence[Fraction], exponent: int) -> Series:
    result = [Fraction(1)] + [Fraction(0)] * (len(x) - 1)
    for _ in range(exponent):
        result = product(result, x)
    return result


def reciprocal(x: Sequence[Fraction]) -> Series:
    result = [1 / Fraction(x[0])]
    for n in range(1, len(x)):
        result.append(-sum((x[k] * result[n - k] for k in range(1, n + 1)), Fraction(0)) / x[0])
    return result


def compose(outer: Sequence[Fraction], inner: Sequence[Fraction]) -> Series:
    """outer(inner(s)); the inner series starts at s¹."""
    assert inner[0] == 0
    count = min(len(outer), len(inner))
    result = [Fraction(0)] * count
    for c in reversed(outer[:count]):
        result = product(result, inner[:count])
        result[0] += c
    return result


def reverse(x: Sequence[Fraction]) -> Series:
    """The series y with x(y(s)) = s, coefficient by coefficient."""
    assert x[0] == 0
    assert x[1] != 0
    y = [Fraction(0)] * len(x)
    y[1] = 1 / Fraction(x[1])
    for n in range(2, len(x)):
        y[n] = -compose(x, y)[n] / x[1]
    return y


def in_terms_of(quantity: Sequence[Fraction], variable: Sequence[Fraction]) -> Series:
    """`quantity` as a series in `variable`, both given as series in a third quantity."""
    return compose(quantity, reverse(variable))


def taylor(function: Callable[[Any], Any], count: int, radius: str = "0.5") -> Series:
    """Rational Taylor coefficients at 0 of a function that is analytic well beyond `radius`."""
    with mpmath.workdps(DIGITS):
        r = mpmath.mpf(radius)
        circle = [r * mpmath.expjpi(mpmath.mpf(2 * k) / POINTS) for k in range(POINTS)]
        values = [function(s) for s in circle]
        result = []
        for n in range(count):
            c = mpmath.fsum(v / s**n for v, s in zip(values, circle, strict=True)) / POINTS
            result.append(_rational(c.real))
    return result


def _rational(x: Any) -> Fraction:
    exact = Fraction(int(mpmath.nint(x * 2**300)), 2**300)
    found = exact.limit_denominator(10**22)
    # A number that is no such rational misses its best approximation by about 1e-44.
    assert abs(found - exact) < Fraction(1, 10**58), f"{x} is not recognised as a rational"
    return found


def fractions(values: Sequence[sp.Expr]) -> Series:
    return [Fraction(int(v.p), int(v.q)) for v in map(sp.Rational, values)]


def terms(expression: sp.Expr, unknown: sp.Symbol, small: sp.Symbol) -> Terms:
    """{(power of the unknown, power of ε): coefficient} of a polynomial."""
    poly = sp.Poly(sp.expand(expression), unknown, small)
    return {m: Fraction(int(c.p), int(c.q)) for m, c in poly.terms()}


def along(polynomial: Terms, x: Series) -> Series:
    """The polynomial with its unknown replaced by a series in ε."""
    count = len(x)
    result = [Fraction(0)] * count
    powers = [power(x, 0)]
    for (i, n), c in sorted(polynomial.items()):
        while len(powers) <= i:
            powers.append(product(powers[-1], x))
        for k in range(count - n):
            result[n + k] += c * powers[i][k]
    return result


def root(polynomial: Terms, start: int, count: int) -> Series:
    """The simple root x(ε) of polynomial(x, ε) = 0 with x(0) = start, one coefficient at a time."""
    derivative = {(i - 1, n): i * c for (i, n), c in polynomial.items() if i}
    x = [Fraction(start)] + [Fraction(0)] * (count - 1)
    slope = along(derivative, x)[0]
    assert along(polynomial, x)[0] == 0
    assert slope != 0
    for n in range(1, count):
        x[n] = -along(polynomial, x)[n] / slope
    return x
