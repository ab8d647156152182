"""Polynomials written down by name: the neutral form in which the rooms hand polynomials to each other.

A `Monomial` is a tuple of (generator name, exponent) pairs sorted by name, a `Polynomial` maps monomials to non-zero
rationals. Nothing is computed at speed in this form: rings read it (`Ring.read`) and write it (`Ring.write`), so that a
result looks the same whichever representation computed it.

Invariant: exponents are positive integers, coefficients are non-zero `Fraction`s, and the empty monomial is 1.
"""

from __future__ import annotations

from collections.abc import Mapping
from fractions import Fraction
from math import gcd, lcm
from typing import TypeAlias

__all__ = ["Monomial", "Polynomial", "describe", "freeze", "primitive"]

Monomial: TypeAlias = tuple[tuple[str, int], ...]
Polynomial: TypeAlias = Mapping[Monomial, Fraction]
Frozen: TypeAlias = tuple[tuple[Monomial, Fraction], ...]


def freeze(polynomial: Polynomial) -> Frozen:
    """The terms in one fixed order (hashable): highest total degree first, then by name."""
    return tuple(sorted(polynomial.items(), key=lambda term: (-sum(e for _, e in term[0]), term[0])))


def primitive(polynomial: Polynomial) -> tuple[Fraction, dict[Monomial, Fraction]]:
    """(c, p) with polynomial = c·p, where p has coprime integer coefficients and a positive first coefficient."""
    terms = freeze(polynomial)
    content = Fraction(gcd(*(c.numerator for _, c in terms)), lcm(*(c.denominator for _, c in terms)))
    if terms[0][1] < 0:
        content = -content
    return content, {m: c / content for m, c in terms}


def _spell(monomial: Monomial, coefficient: Fraction) -> str:
    factors = [name if e == 1 else f"{name}**{e}" for name, e in monomial]
    if abs(coefficient) != 1 or not factors:
        factors.insert(0, str(abs(coefficient)))
    return "*".join(factors)


def describe(polynomial: Polynomial) -> str:
    """A plain-text spelling for messages and generator names, the same on every run."""
    text = ""
    for monomial, coefficient in freeze(polynomial):
        sign = "-" if coefficient < 0 else "+"
        text += (
            f" {sign} {_spell(monomial, coefficient)}"
            if text
            else (sign if sign == "-" else "") + _spell(monomial, coefficient)
        )
    return text or "0"
