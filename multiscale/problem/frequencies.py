"""Natural frequencies and the base frequencies in which rates are counted.

Every natural frequency is written as an expression, ω = √(ω²), and then as a rational combination of *base frequencies*
that are linearly independent over the rationals, so that equality of rates is equality of rational vectors:

    ω² = 2 and 8              one base, √2;  rates 1 and 2
    ω² = k/m and 4k/m         one base, w = √(k/m);  k is eliminated, k = m w²
    ω² = (ω_1 + ω_2)²         rate (1, 1) over ω_1, ω_2

Square roots of integers are split into roots of primes, whose products are independent; other algebraic numbers are
compared in a number field; distinct monomials in independent symbols are independent; for anything else independence
is assumed and listed.
"""

from __future__ import annotations

from collections.abc import Container
from dataclasses import dataclass
from fractions import Fraction
from math import lcm
from typing import Any

import sympy as sp

from multiscale.algebra.polynomial import Frozen, freeze
from multiscale.algebra.quotient import Quotient
from multiscale.errors import ProblemError
from multiscale.linear_part import Rate
from multiscale.problem.reading import Reader

__all__ = ["Bases", "Root", "bases_of", "denested", "number_field_bases", "square_root"]


@dataclass(frozen=True)
class Root:
    """√(ω²) = outside · √radicand, the radicand free of squares (1 when the root is exact)."""

    outside: sp.Expr
    radicand: sp.Expr


def square_root(reader: Reader, square: Quotient, written: Container[sp.Expr] = ()) -> Root:
    """Take every square factor out of √square; what stays below the root has exponents ±1.

    The sign of a factor is that of its assumptions, or the one in which it stands in `written`, the bases of squares in
    the equations: (Ω_2 − Ω_1)² has the root Ω_2 − Ω_1.
    """
    numerator = reader.ring.read(dict(square.numerator))
    content, factors = reader.ring.factor(numerator)
    powers = [(freeze(reader.ring.write(p)), e) for p, e in factors] + [(p, -e) for p, e in square.denominator]
    outside = sp.sqrt(sp.Rational(abs(content).numerator, abs(content).denominator))
    radicand = sp.Integer(1) if content > 0 else sp.Integer(-1)
    for p, e in powers:
        value = reader.expression(p)
        if value.is_negative or (-value in written and value not in written):
            value, radicand = -value, radicand * (-1) ** e
        whole = e // 2 if e > 0 else -((-e) // 2)
        outside *= value**whole
        radicand *= value ** (e - 2 * whole)
    return Root(outside, radicand)


def eliminated(radicand: sp.Expr, root: sp.Symbol, forbidden: frozenset[sp.Symbol]) -> tuple[sp.Symbol, sp.Expr] | None:
    """(s, value) with s the parameter to replace so that radicand becomes root**2, if one enters it linearly."""
    above, below = sp.fraction(sp.together(radicand))
    candidates = []
    for part, target in ((above, below * root**2), (below, above / root**2)):
        for s in sorted(part.free_symbols - forbidden, key=lambda symbol: str(symbol.name)):
            slope = sp.diff(part, s)
            rest = sp.expand(part - slope * s)
            if slope.is_Rational and s not in target.free_symbols:
                candidates.append((0, s, sp.expand((target - rest) / slope)))
            elif s not in slope.free_symbols and s not in target.free_symbols and rest == 0:
                candidates.append((1, s, target / slope))
    return min(candidates, key=lambda c: c[0])[1:] if candidates else None


@dataclass(frozen=True)
class Bases:
    """Base frequencies as polynomials by name; `rates[k]/unit` are the coordinates of the k-th natural frequency."""

    values: tuple[Frozen, ...]
    rates: tuple[Rate, ...]
    unit: int
    assumed: tuple[str, ...] = ()


def bases_of(reader: Reader, frequencies: list[sp.Expr]) -> Bases:
    """Each distinct monomial of the frequencies, rational factor apart, is a base frequency."""
    values: list[Frozen] = []
    vectors: list[dict[int, Fraction]] = []
    for frequency in frequencies:
        vector: dict[int, Fraction] = {}
        polynomial: dict[Any, Fraction] = reader.ring.write(reader.ring.normal(reader.read(frequency)))
        for monomial, coefficient in freeze(polynomial):
            base = ((monomial, Fraction(1)),)
            if base not in values:
                values.append(base)
            vector[values.index(base)] = coefficient
        vectors.append(vector)
    unit = lcm(*(c.denominator for v in vectors for c in v.values()))
    rates = tuple(tuple(int(v.get(b, 0) * unit) for b in range(len(values))) for v in vectors)
    return Bases(tuple(values), rates, unit, _assumed(reader, values))


def _assumed(reader: Reader, values: list[Frozen]) -> tuple[str, ...]:
    """The base frequencies whose independence is not decided: transcendental constants beside other numbers."""
    numeric = [v for v in values if not reader.expression(v).free_symbols]
    undecided = [v for v in numeric if not reader.expression(v).is_algebraic]
    return tuple(str(reader.expression(v)) for v in undecided) if len(numeric) > 1 else ()


def denested(frequencies: list[sp.Expr]) -> list[sp.Expr]:
    """Frequencies whose numeric factors hold nested roots, reduced to rational combinations of as few as possible.

    Factors are compared among the frequencies that share their symbolic part: 1, √2 and √(3 − 2√2) times ω.
    """
    groups: dict[sp.Expr, list[int]] = {}
    factors = []
    for k, frequency in enumerate(frequencies):
        factor, symbolic = frequency.as_independent(*frequency.free_symbols, as_Add=False)
        factors.append(factor)
        groups.setdefault(symbolic, []).append(k)
    result = list(frequencies)
    for symbolic, members in groups.items():
        numbers = [factors[k] for k in members]
        if any(x.is_algebraic and any(not p.base.is_Integer for p in x.atoms(sp.Pow)) for x in numbers):
            algebraic = [k for k in members if factors[k].is_algebraic]
            reduced = number_field_bases([factors[k] for k in algebraic])
            for k, x in zip(algebraic, reduced, strict=True):
                result[k] = sp.expand(x * symbolic)
    return result


def number_field_bases(frequencies: list[sp.Expr]) -> list[sp.Expr]:
    """Numeric algebraic frequencies as rational combinations of as few of themselves as possible.

    All are written in one number field; a frequency that depends on earlier ones is replaced by that combination. The
    others stay opaque: `sqrt(2 - sqrt(2))` is a leaf of its own.
    """
    from sympy.polys.numberfields.subfield import primitive_element, to_number_field

    minimal, _ = primitive_element(frequencies, polys=True)
    if minimal.degree() > 32:
        raise ProblemError(
            f"the frequencies {frequencies} generate a number field of degree {minimal.degree()}: use symbols for them"
        )
    generator = to_number_field(frequencies)
    degree = int(minimal.degree())
    columns: list[list[sp.Rational]] = []
    chosen: list[sp.Expr] = []
    result = []
    for frequency in frequencies:
        coefficients = [sp.Rational(c) for c in reversed(to_number_field(frequency, generator).coeffs())]
        vector = coefficients + [sp.Integer(0)] * (degree - len(coefficients))
        solution = _combination(columns, vector)
        if solution is None:
            columns.append(vector)
            chosen.append(frequency)
            result.append(frequency)
        else:
            result.append(sp.Add(*(c * base for c, base in zip(solution, chosen, strict=True))))
    return result


def _combination(columns: list[list[sp.Rational]], vector: list[sp.Rational]) -> list[sp.Rational] | None:
    """The rational coefficients with Σ c_j column_j = vector, or None."""
    if not columns:
        return None
    matrix = sp.Matrix(columns).T
    unknowns = sp.symbols(f"c:{len(columns)}")
    solution = sp.linsolve((matrix, sp.Matrix(vector)), *unknowns)
    return list(next(iter(solution))) if solution else None
