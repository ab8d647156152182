"""One half of a wave as a FLINT polynomial: integers over a common denominator, or balls (python-flint, optional).

A part is (polynomial, denominator), of balls (polynomial, None); zero is None. What the two kinds offer alike:

    product(x, y, count)   the first coefficients of x·y
    total(terms)           Σ scalar · part, over one denominator and reduced
    cut(x, first, count)   coefficients first … first + count − 1
    rebuilt(x, change)     the part whose numerators `change` makes of those of x
    numerators(terms)      the coefficients of every scalar · part, and the denominator common to all
    times(c, x)            c x, not reduced
    divided(x, line)       the coefficients divided by those of a line of integers, 0 meaning: left out
    joined(line, below)    the part with these coefficients over a denominator
    with_half_mean(…)      the same with the first coefficient halved
"""

from __future__ import annotations

import math
from collections.abc import Callable, Sequence
from fractions import Fraction
from typing import Any, TypeAlias

try:
    from flint import arb, arb_poly, fmpq, fmpz, fmpz_poly
except ImportError as error:  # pragma: no cover - exercised by the bare-environment check
    raise ImportError("this representation needs python-flint: pip install 'multiscale-expansions[fast]'") from error

__all__ = ["BallParts", "ExactParts", "Parts", "low", "shifted"]

NATIVE = hasattr(fmpz_poly, "mul_low")
"""Whether python-flint shifts and cuts polynomials itself; older versions do not."""


def shifted(polynomial: Any, count: int) -> Any:
    """polynomial · y^count; for negative `count` without the coefficients that would stand below index 0."""
    if not count:
        return polynomial
    if NATIVE:
        return polynomial.left_shift(count) if count >= 0 else polynomial.right_shift(-count)
    line = polynomial.coeffs()
    return type(polynomial)([0] * count + line if count >= 0 else line[-count:])


def low(polynomial: Any, count: int) -> Any:
    """The first coefficients."""
    if count >= polynomial.length():
        return polynomial
    return polynomial.truncate(count) if NATIVE else type(polynomial)(polynomial.coeffs()[: max(0, count)])


class ExactParts:
    """Integer polynomials over common denominators."""

    @staticmethod
    def scalar(value: Any) -> Any:
        return fmpq(value.numerator, value.denominator) if isinstance(value, int | Fraction) else value

    @staticmethod
    def vanishes(x: Any) -> bool:
        return bool(x == 0)

    @staticmethod
    def polynomial(coefficients: Sequence[Any]) -> tuple[Any, Any] | None:
        """From rational coefficients."""
        if not any(coefficients):
            return None
        common = fmpz(1)
        for c in coefficients:
            common = common.lcm(c.q)
        return fmpz_poly([c.p * (common // c.q) for c in coefficients]), common

    @staticmethod
    def coefficients(part: Any, count: int) -> list[Any]:
        polynomial, below = part
        found = [fmpq(c, below) for c in polynomial.coeffs()[:count]]
        return found + [fmpq(0)] * (count - len(found))

    @staticmethod
    def cut(part: Any, first: int, count: int) -> Any:
        return low(shifted(part[0], -first), count), part[1]

    @staticmethod
    def product(x: Any, y: Any, count: int) -> tuple[Any, Any]:
        if not NATIVE:
            return low(x[0] * y[0], count), x[1] * y[1]
        return x[0].mul_low(y[0], count), x[1] * y[1]

    @staticmethod
    def total(terms: Sequence[tuple[Any, Any]]) -> Any:
        """Σ scalar · part, reduced; None for zero."""
        scaled, common = ExactParts._scaled(terms)
        above = fmpz_poly([0])
        for polynomial in scaled:
            above = above + polynomial
        if not above:
            return None
        shared = above.content().gcd(common)
        return (above, common) if shared == 1 else (above // shared, common // shared)

    @staticmethod
    def _scaled(terms: Sequence[tuple[Any, Any]]) -> tuple[list[Any], Any]:
        """The numerators over one denominator."""
        common = fmpz(1)
        denominators = [below * c.q for c, (_, below) in terms]
        for d in denominators:
            # The denominator of a level is mostly a multiple of those below it: a division is cheaper than a gcd.
            if common % d:
                common = common.lcm(d)
        scaled = []
        for (c, (polynomial, _)), d in zip(terms, denominators, strict=True):
            factor = c.p * (common // d)
            scaled.append(polynomial if factor == 1 else polynomial * factor)
        return scaled, common

    @staticmethod
    def rebuilt(part: Any, change: Callable[[list[Any]], list[Any]]) -> Any:
        polynomial, below = part
        return fmpz_poly(change(polynomial.coeffs())), below

    @staticmethod
    def numerators(terms: Sequence[tuple[Any, Any]]) -> tuple[list[list[Any]], Any]:
        scaled, common = ExactParts._scaled(terms)
        return [polynomial.coeffs() for polynomial in scaled], common

    @staticmethod
    def times(c: Any, part: Any) -> Any:
        polynomial, below = part
        # The sign goes with the denominator.
        return (polynomial, below * c.q * c.p) if abs(c.p) == 1 else (polynomial * c.p, below * c.q)

    @staticmethod
    def divided(part: Any, by: list[int]) -> Any:
        common = fmpz(math.lcm(*filter(None, by)))
        factors = [common // d if d else 0 for d in by]
        line = [c * f for c, f in zip(part[0].coeffs(), factors, strict=False)]
        return ExactParts.total([(fmpq(1), (fmpz_poly(line), part[1] * common))])

    @staticmethod
    def joined(line: list[Any], below: Any) -> Any:
        return fmpz_poly(line), below

    @staticmethod
    def with_half_mean(line: list[Any], below: Any) -> Any:
        return fmpz_poly(line[:1] + [c + c for c in line[1:]]), 2 * below


class BallParts:
    """Polynomials of balls at the working precision of FLINT's context."""

    @staticmethod
    def scalar(value: Any) -> Any:
        return arb(fmpq(value.numerator, value.denominator)) if isinstance(value, int | Fraction) else value

    @staticmethod
    def vanishes(x: Any) -> bool:
        return bool(x.contains(0))

    @staticmethod
    def polynomial(coefficients: Sequence[Any]) -> Any:
        # A ball that contains zero is not zero.
        return None if all(c == 0 for c in coefficients) else (arb_poly(list(coefficients)), None)

    @staticmethod
    def coefficients(part: Any, count: int) -> list[Any]:
        found: list[Any] = part[0].coeffs()[:count]
        return found + [arb(0)] * (count - len(found))

    @staticmethod
    def cut(part: Any, first: int, count: int) -> Any:
        return low(shifted(part[0], -first), count), None

    @staticmethod
    def product(x: Any, y: Any, count: int) -> tuple[Any, Any]:
        return low(low(x[0], count) * low(y[0], count), count), None

    @staticmethod
    def total(terms: Sequence[tuple[Any, Any]]) -> Any:
        above = arb_poly([0])
        for c, (polynomial, _) in terms:
            above = above + (polynomial if c == 1 else polynomial * c)
        return (above, None) if above.length() else None

    @staticmethod
    def rebuilt(part: Any, change: Callable[[list[Any]], list[Any]]) -> Any:
        return arb_poly(change(part[0].coeffs())), None

    @staticmethod
    def numerators(terms: Sequence[tuple[Any, Any]]) -> tuple[list[list[Any]], Any]:
        return [(polynomial if c == 1 else polynomial * c).coeffs() for c, (polynomial, _) in terms], None

    @staticmethod
    def times(c: Any, part: Any) -> Any:
        return (part[0] if c == 1 else part[0] * c), None

    @staticmethod
    def divided(part: Any, by: list[int]) -> Any:
        line = [c / d if d else 0 for c, d in zip(part[0].coeffs(), by, strict=False)]
        return BallParts.total([(1, (arb_poly(line), None))])

    @staticmethod
    def joined(line: list[Any], below: Any) -> Any:
        return arb_poly(line), None

    @staticmethod
    def with_half_mean(line: list[Any], below: Any) -> Any:
        return arb_poly([c / 2 for c in line[:1]] + line[1:]), None


Parts: TypeAlias = type[ExactParts] | type[BallParts]
