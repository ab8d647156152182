"""Polynomials by name as rows of integers: [numerator, denominator, name, exponent, name, exponent, …].

Names are referred to by their place in one table for the whole text. A coefficient that is a float, from equations
whose modes are known in floating-point numbers only, is ["hexadecimal float", 0, …], or with more digits
[[sign, mantissa, exponent, precision], 0, …].
"""

from __future__ import annotations

from fractions import Fraction
from typing import Any

import sympy as sp

from multiscale.algebra.polynomial import Frozen
from multiscale.storage.limits import (
    NODES,
    hexadecimal,
    integer,
    read_float,
    refuse,
    sequence,
    shown,
    spelled,
    spelled_float,
)

__all__ = ["PolynomialReader", "PolynomialWriter"]


class PolynomialWriter:
    """Writes polynomials and collects the names they use."""

    def __init__(self) -> None:
        self.names: list[str] = []
        self._index: dict[str, int] = {}

    def rows(self, polynomial: Frozen) -> list[list[Any]]:
        return [[*_spelled(c), *(part for g, e in m for part in (self._place(g), e))] for m, c in polynomial]

    def _place(self, name: str) -> int:
        if name not in self._index:
            self._index[name] = len(self.names)
            self.names.append(name)
        return self._index[name]


def _spelled(c: Any) -> list[Any]:
    if isinstance(c, float):
        return [c.hex(), 0]
    return [spelled_float(c), 0] if isinstance(c, sp.Float) else [spelled(c.numerator), spelled(c.denominator)]


class PolynomialReader:
    """The polynomials of rows."""

    def __init__(self, names: Any) -> None:
        names = sequence(names, "the table of generators")
        if len(names) > NODES or not all(isinstance(x, str) for x in names) or len(set(names)) != len(names):
            raise refuse("the table of generators does not hold distinct names")
        self._names: list[str] = list(names)

    def polynomial(self, rows: Any) -> Frozen:
        terms = [self._term(sequence(row, "a term")) for row in sequence(rows, "a polynomial")]
        if len({m for m, _ in terms}) != len(terms):
            raise refuse("a polynomial has the same monomial twice")
        return tuple(terms)

    def _term(self, row: Any) -> tuple[tuple[tuple[str, int], ...], Any]:
        if len(row) < 2 or len(row) % 2:
            raise refuse(f"{shown(row)} where a term was expected")
        coefficient = _coefficient(row[0], row[1])
        factors = tuple(
            (self._names[integer(k, "a generator", 0, len(self._names) - 1)], integer(e, "an exponent", 1, 10_000))
            for k, e in zip(row[2::2], row[3::2], strict=True)
        )
        if not coefficient or len({g for g, _ in factors}) != len(factors):
            raise refuse(f"{shown(row)} is not a term in lowest form")
        return factors, coefficient


def _coefficient(numerator: Any, denominator: Any) -> Any:
    if denominator == 0 and isinstance(denominator, int):
        return read_float(numerator) if isinstance(numerator, list) else hexadecimal(numerator, "a coefficient")
    return Fraction(integer(numerator, "a numerator"), integer(denominator, "a denominator", 1))
