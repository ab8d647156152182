"""The two roots of a reduced equation, as a quadratic in σ = (p − p_0)/ε, and its discriminant.

    |d|² − |o|² = U·(σ² + a_1σ + a_0),   σ = (−a_1 ± √Δ)/2,   Δ = a_1² − 4a_0 = ε^i(Δ_i + εΔ_{i+1} + …)

a_1 and a_0 are power series in ε with rational coefficients: only √Δ_i is a root. Boundaries that
separate at ε^m have i = 2(m − 1); an odd i means fractional powers.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from fractions import Fraction
from typing import Any

import sympy as sp

from multiscale.algebra.quotient import reduced
from multiscale.algebra.reciprocals import inverse
from multiscale.algebra.ring import Ring
from multiscale.errors import ProblemError, UnsupportedTermError
from multiscale.response.tongues.hill import Hill
from multiscale.response.tongues.preparation import prepared, product, square_root
from multiscale.response.tongues.reduction import carried, dividing, is_zero, reduced_equation

__all__ = ["Quadratic", "Spelling", "added", "half_root", "monic", "quadratic_factor"]


@dataclass(frozen=True)
class Spelling:
    """Ring elements as expressions in the user's symbols."""

    hill: Hill
    ring: Ring

    def expression(self, x: Any) -> sp.Expr:
        return self.hill.writer.quotient(reduced(self.ring, self.ring.normal(x)))

    def series(self, coefficients: Sequence[sp.Expr], first: int = 0) -> sp.Expr:
        return sp.Add(*(c * self.hill.small ** (first + k) for k, c in enumerate(coefficients)))


def added(x: list[list[Any]], y: list[list[Any]]) -> list[list[Any]]:
    return [[a + b for a, b in zip(u, v, strict=True)] for u, v in zip(x, y, strict=True)]


def monic(ring: Ring, series: list[list[Any]], degree: int) -> tuple[Ring, list[list[Any]]]:
    """The series divided by the constant coefficient of σ^degree at ε⁰."""
    larger = dividing(ring, [series[0][degree]])
    factor = inverse(larger, carried(ring, series[0][degree], larger))
    return larger, [[larger.normal(factor * carried(ring, x, larger)) for x in level] for level in series]


@dataclass(frozen=True)
class Quadratic:
    """a_1 and Δ = a_1² − 4a_0 by powers of ε; `driven` is the first power of ε at which o takes part in |d|² − |o|²."""

    ring: Ring
    writer: Spelling
    linear: list[Any]
    discriminant: list[Any]
    driven: int | None

    def leading(self) -> int | None:
        """The index of the leading term of Δ, None where there is none; refuses what has no power series."""
        first = next((k for k, x in enumerate(self.discriminant) if not is_zero(self.ring, x)), None)
        if first is None:
            return None
        small = self.writer.hill.small
        if self.driven is None or self.driven > first:
            raise UnsupportedTermError(
                f"term {self.writer.expression(self.discriminant[first])} of the discriminant: damping outweighs the "
                f"drive as {small} → 0, so that the tongue is closed there. Give the damping the power of {small} at "
                f"which the tongue opens without it ({small}**n for tongue n of a single harmonic of order {small}), "
                "or raise `order`"
            )
        if first % 2:
            raise UnsupportedTermError(
                f"term {self.writer.expression(self.discriminant[first])} of the discriminant: the boundaries separate "
                f"as {small}**({first}/2 + 1), a fractional power of it. Give drive and damping equal powers of {small}"
            )
        return first


def quadratic_factor(hill: Hill, tongue: int, weight: int) -> Quadratic:
    """The quadratic factor of |d|² − |o|², its coefficients to ε^(weight − 1)."""
    equation = reduced_equation(hill, tongue, weight)
    ring = equation.ring
    squares = []
    for part in (equation.diagonal, equation.coupling):
        conjugate = [[ring.conjugate(x) for x in level] for level in part]
        squares.append(product(ring, part, conjugate))
    difference = added(squares[0], [[-x for x in level] for level in squares[1]])
    ring, series = monic(ring, difference, 2)
    factor = prepared(ring, series, 2)
    constant, linear = ([level[k] for level in factor] for k in (0, 1))
    four = ring.constant(4)
    square = [sum((linear[i] * linear[j - i] for i in range(j + 1)), ring.zero) for j in range(weight)]
    discriminant = [ring.normal(x - four * y) for x, y in zip(square, constant, strict=True)]
    driven = next((k for k, level in enumerate(squares[1]) if any(level)), None)
    return Quadratic(ring, Spelling(hill, ring), linear, discriminant, driven)


def half_root(quadratic: Quadratic, leading: int, terms: int) -> list[sp.Expr]:
    """The coefficients of √Δ/2 from ε^{leading/2} on."""
    series = quadratic.discriminant[leading:][:terms]
    outside, inside = _square_free(quadratic.writer.expression(series[0]))
    radicand = sp.expand(sp.Mul(*inside))
    if radicand.is_negative:
        raise ProblemError(
            f"the discriminant {outside**2 * radicand} of the boundaries is negative: the excitation is below the "
            "threshold at which the tongue opens. Enlarge the drive, or lower the damping"
        )
    ring = dividing(quadratic.ring, [series[0]])
    lifted = [carried(quadratic.ring, x, ring) for x in series]
    factor = inverse(ring, lifted[0])
    relative = square_root(ring, [ring.normal(x * factor) for x in lifted], ring.constant(Fraction(1, 2)))
    writer = Spelling(quadratic.writer.hill, ring)
    return [_with_root(writer.expression(x) * outside / 2, inside, radicand) for x in relative]


def _with_root(x: sp.Expr, inside: Sequence[sp.Expr], radicand: sp.Expr) -> sp.Expr:
    """x·√radicand, powers of the radicand in the denominator of x being taken together with the root."""
    powers = dict(factor.as_base_exp() for factor in sp.Mul.make_args(x))
    below = max((-int(powers[base]) for base in inside if powers.get(base, sp.Integer(0)).is_negative), default=0)
    return (
        x
        * sp.Mul(*(base**below for base in inside if not base.is_Rational))
        * (sp.Mul(*(base**below for base in inside if base.is_Rational)) * radicand ** (sp.Rational(1, 2) - below))
    )


def _square_free(x: sp.Expr) -> tuple[sp.Expr, list[sp.Expr]]:
    """(a, factors) with x = a²·Π factors; the sign of a does not matter, as both signs of the root are wanted."""
    outside, inside = sp.Integer(1), []
    for factor in sp.Mul.make_args(x):
        base, power = factor.as_base_exp()
        if factor.is_Rational:
            rational, surd = sp.sqrt(abs(factor)).as_coeff_Mul()
            outside *= rational
            inside.append(surd**2 * sp.sign(factor))
        elif power.is_Integer:
            outside *= base ** (power // 2)
            inside.append(base ** (power % 2))
        else:
            inside.append(factor)
    return outside, [base for base in inside if base != 1]
