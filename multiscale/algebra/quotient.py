"""Finished coefficients: one numerator over one factored denominator, in the one form that equal values share.

    Quotient = numerator / Π p**e,     p the denominators of the ring's reciprocals, none of which divides the numerator

During the work a coefficient is a polynomial in reciprocals, which is no normal form: 1/(w l) + 1/(w m) = 2/(l m) when
l + m = 2w. Here it goes over the common denominator and its numerator is trial-divided by every p; the p are pairwise
coprime primes, so the result is the reduced fraction.
"""

from __future__ import annotations

from dataclasses import dataclass
from fractions import Fraction
from typing import Any

from multiscale.algebra.polynomial import Frozen, freeze
from multiscale.algebra.ring import Exponents, Ring

__all__ = ["Coefficient", "Quotient", "finish", "reduced", "vanishes"]


@dataclass(frozen=True)
class Quotient:
    """numerator (a polynomial by name, terms in fixed order) over a product of powers of primitive polynomials."""

    numerator: Frozen
    denominator: tuple[tuple[Frozen, int], ...] = ()

    def __bool__(self) -> bool:
        return bool(self.numerator)

    def scaled(self, factor: Fraction) -> Quotient:
        return Quotient(tuple((m, c * factor) for m, c in self.numerator), self.denominator) if factor else ZERO


ZERO = Quotient(())


@dataclass(frozen=True)
class Coefficient:
    """A complex coefficient, real and imaginary part apart."""

    real: Quotient = ZERO
    imag: Quotient = ZERO

    def __bool__(self) -> bool:
        return bool(self.real) or bool(self.imag)

    def scaled(self, factor: Fraction) -> Coefficient:
        return Coefficient(self.real.scaled(factor), self.imag.scaled(factor))


def reduced(ring: Ring, x: Any) -> Quotient:
    """The reduced form of an element without i and without paired generators."""
    first = len(ring.spec.names) - len(ring.spec.reciprocals)
    by_denominator: dict[Exponents, dict[Exponents, Fraction]] = {}
    empty = (0,) * len(ring.spec.reciprocals)
    for m, c in ring.terms(x):
        by_denominator.setdefault(m[first:], {})[m[:first] + empty] = c
    powers = [max((d[k] for d in by_denominator), default=0) for k in range(len(empty))]
    polynomials = [ring.read(dict(p)) if e else None for (_, p), e in zip(ring.spec.reciprocals, powers, strict=True)]
    numerator = ring.zero
    for d, terms in by_denominator.items():
        part = ring.from_terms(terms)
        for p, most, here in zip(polynomials, powers, d, strict=True):
            for _ in range(most - here):
                part = part * p
        numerator = numerator + ring.normal(part)
    if not numerator:
        return ZERO
    for k, p in enumerate(polynomials):
        while powers[k] and (smaller := ring.quotient(numerator, p)) is not None:
            numerator, powers[k] = smaller, powers[k] - 1
    denominator = sorted((p, e) for (_, p), e in zip(ring.spec.reciprocals, powers, strict=True) if e)
    return Quotient(freeze(ring.write(numerator)), tuple(denominator))


def finish(ring: Ring, x: Any) -> dict[Exponents, Coefficient]:
    """x as a polynomial in the paired generators, its coefficients reduced.

    The exponents run over ``ring.spec.pairs`` in order, two for each pair; the entries are sorted.
    """
    begin = ring.spec.first_pair
    end = begin + 2 * len(ring.spec.pairs)
    groups: dict[Exponents, tuple[dict[Exponents, Fraction], dict[Exponents, Fraction]]] = {}
    for m, c in ring.terms(ring.normal(x)):
        part = groups.setdefault(m[begin:end], ({}, {}))[m[0]]
        part[(0, *m[1:begin], *(0,) * (end - begin), *m[end:])] = c
    finished = {}
    for m in sorted(groups):
        real, imag = (reduced(ring, ring.from_terms(part)) if part else ZERO for part in groups[m])
        if coefficient := Coefficient(real, imag):
            finished[m] = coefficient
    return finished


def vanishes(ring: Ring, x: Any) -> bool:
    """Whether a reduced element is zero; reciprocals of several terms are no normal form, so that they are cleared."""
    return not x or (any(len(p) > 1 for _, p in ring.spec.reciprocals) and not finish(ring, x))
