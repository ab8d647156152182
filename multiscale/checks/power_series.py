"""A truncated power series Σ c_n xⁿ + O(x^{N+1}) as exact data, and the roots of exact polynomials.

Coefficients are elements of one field: the rationals, algebraic numbers, rational functions of symbols. Floats enter as
the binary fractions they are, so that the algebra itself loses nothing; `digits` remembers how many they carry.
"""

from __future__ import annotations

from collections.abc import Iterable, Sequence
from dataclasses import dataclass
from math import gcd
from typing import Any

import mpmath
import sympy as sp
from sympy.polys.constructor import construct_domain

from multiscale.errors import EvaluationError
from multiscale.problem.reading import given_expression

__all__ = ["Series", "ascending", "exactly", "power", "read_series", "roots_of"]


@dataclass(frozen=True)
class Series:
    """c_0 … c_N in `field`; `digits` is None for exact coefficients."""

    variable: sp.Symbol
    coefficients: tuple[Any, ...]
    field: Any
    digits: int | None

    @property
    def order(self) -> int:
        """N, the highest power that is known."""
        return len(self.coefficients) - 1

    @property
    def stride(self) -> int:
        """The largest s for which the series is one in x^s."""
        return gcd(*(n for n, c in enumerate(self.coefficients) if c)) or 1

    def thinned(self, stride: int) -> Series:
        """The series in x^stride."""
        return Series(self.variable, self.coefficients[::stride], self.field, self.digits)

    def polynomial(self, order: int) -> sp.Poly:
        """Through x^order."""
        return self.poly(self.coefficients[: order + 1])

    def poly(self, coefficients: Sequence[Any]) -> sp.Poly:
        """A polynomial from coefficients by rising powers."""
        return sp.Poly.from_list(
            [self.field.convert(c) for c in reversed(coefficients)], self.variable, domain=self.field
        )

    def written(self, polynomial: sp.Poly) -> sp.Expr:
        """As an expression, in floats where the coefficients were."""
        x = polynomial.as_expr()
        return x if self.digits is None else sp.N(x, self.digits)


def read_series(series: Any, variable: Any) -> Series:
    """From a polynomial or series in SymPy, or from coefficients by rising powers."""
    if not isinstance(variable, sp.Symbol):
        raise EvaluationError(f"variable is {variable!r}: expected the SymPy symbol of the series")
    given = _coefficients(series, variable)
    if not given:
        raise EvaluationError("the series has no coefficients: give at least the first")
    if wrong := next((c for c in given if variable in c.free_symbols or c.has(sp.nan, sp.oo, sp.zoo)), None):
        raise EvaluationError(f"coefficient {wrong}: expected finite and free of {variable}")
    floats = [f for c in given for f in c.atoms(sp.Float)]
    digits = min((sp.Float(f)._prec for f in floats), default=None)
    exact = [exactly(c) for c in given]
    domain, elements = construct_domain(exact, field=True, extension=True)
    if not domain.is_Exact or domain.is_EX:
        names = ", ".join(sorted(map(str, set().union(*(c.free_symbols for c in exact))))) or "numbers"
        raise EvaluationError(
            f"the coefficients are no rational functions of independent quantities ({names}): replace the roots and "
            "functions in them by symbols"
        )
    return Series(variable, tuple(elements), domain, None if digits is None else int(digits * 0.30103))


def exactly(x: sp.Expr) -> sp.Expr:
    """x with every float as the binary fraction it is."""
    return x.xreplace({f: sp.Rational(f) for f in x.atoms(sp.Float)})


def _coefficients(series: Any, variable: sp.Symbol) -> list[sp.Expr]:
    if isinstance(series, sp.Expr):
        known = series.getn() if series.has(sp.Order) else None
        polynomial = _polynomial(series.removeO(), variable)
        found = list(reversed(polynomial.all_coeffs()))
        if known is None:
            return found
        if known.free_symbols or known < 1 or not known.is_Integer:
            raise EvaluationError(f"the series is known to O({variable}**{known}): expected a positive integer power")
        return (found + [sp.Integer(0)] * int(known))[: int(known)]
    if isinstance(series, str | bytes) or not isinstance(series, Iterable):
        raise EvaluationError(
            f"series is {series!r}: expected a polynomial or series in SymPy, or a sequence of coefficients"
        )
    return [_number(c) for c in series]


def _number(c: Any) -> sp.Expr:
    value = given_expression(c)
    if value is None and isinstance(c, mpmath.mpf):
        value = sp.Float(c, mpmath.mp.dps)
    if value is None:
        raise EvaluationError(f"coefficient {c!r}: expected a number or a SymPy expression")
    return value


def _polynomial(x: sp.Expr, variable: sp.Symbol) -> sp.Poly:
    try:
        polynomial = sp.Poly(x, variable)
    except sp.PolynomialError:
        polynomial = None
    if polynomial is None or any(variable in c.free_symbols for c in polynomial.all_coeffs()):
        raise EvaluationError(
            f"{x} is no polynomial in {variable}: give the series in non-negative integer powers, such as "
            f"x.series({variable}, 0, 8), or its coefficients"
        )
    return polynomial


def power(polynomial: sp.Poly, stride: int) -> sp.Poly:
    """p(x^stride)."""
    x = polynomial.gen
    return sp.Poly({(stride * m[0],): c for m, c in polynomial.terms()}, x, domain=polynomial.domain)


def ascending(polynomial: sp.Poly) -> list[Any]:
    """Coefficients by rising powers, in the field."""
    return list(reversed(polynomial.rep.to_list()))


def roots_of(polynomial: sp.Poly) -> tuple[complex, ...]:
    """All complex roots, each as often as it is one, nearest to the origin first. Coefficients are numbers."""
    found: list[complex] = []
    for factor, multiplicity in polynomial.sqf_list()[1]:
        found += [complex(z) for z in _simple_roots(factor)] * multiplicity
    return tuple(sorted(found, key=lambda z: (round(abs(z), 12), -z.real, z.imag)))


def _simple_roots(polynomial: sp.Poly) -> list[Any]:
    lowest = min(m[0] for m in polynomial.monoms())
    if lowest:
        return [mpmath.mpc(0), *_simple_roots(sp.Poly(polynomial.as_expr() / polynomial.gen, polynomial.gen))]
    stride = gcd(*(m[0] for m in polynomial.monoms())) or 1
    coefficients = polynomial.all_coeffs()[::stride]
    if len(coefficients) == 1:
        return []
    digits = 30 + 2 * len(coefficients)
    while True:
        with mpmath.workdps(digits):
            numbers = [sp.N(c, digits)._to_mpmath(mpmath.mp.prec) for c in coefficients]
            try:
                roots = mpmath.polyroots(numbers, maxsteps=100 + 10 * len(numbers), extraprec=mpmath.mp.prec)
            except mpmath.libmp.libhyper.NoConvergence:
                digits *= 2
                continue
            turned = [mpmath.root(z, stride, k) for z in roots for k in range(stride)]
            return [_real_if_so(z) for z in turned]


def _real_if_so(z: Any) -> Any:
    return z.real if abs(z.imag) < mpmath.mpf(10) ** -20 * abs(z) else z
