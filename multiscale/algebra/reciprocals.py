"""Division by an element: which reciprocals a ring must have for it, and the inverse itself.

    1/x = numerator(x) · Π h_p,     h_p = 1/p the reciprocal generators,
                                    p primitive, irreducible, free of roots and of i

Roots are removed from a denominator by multiplying with its conjugates (g -> -g), a rational divisor needs no
generator, and what remains is split into irreducible factors, so that the p of one ring are pairwise coprime.
"""

from __future__ import annotations

from collections.abc import Iterable
from fractions import Fraction
from typing import Any

from multiscale.algebra.polynomial import Frozen, describe, freeze, primitive
from multiscale.algebra.ring import Ring

__all__ = ["inverse", "missing", "reciprocal_name"]


def reciprocal_name(p: Frozen) -> str:
    return f"1/({describe(dict(p))})"


def _without_root(ring: Ring, x: Any, k: int) -> Any:
    """x with the generator k replaced by its negative."""
    return ring.from_terms({m: -c if m[k] & 1 else c for m, c in ring.terms(x)})


def _rationalised(ring: Ring, x: Any) -> tuple[Any, Any]:
    """(n, d) with 1/x = n/d and d free of roots and reciprocals."""
    numerator = ring.one
    # A root may have roots after it in its square, so the first goes first; i comes last.
    for k in (*range(1, len(ring.spec.roots) + 1), 0):
        if any(m[k] for m, _ in ring.terms(x)):
            mirrored = _without_root(ring, x, k)
            numerator, x = ring.normal(numerator * mirrored), ring.normal(x * mirrored)
    index = ring.spec.index
    used = {k for m, _ in ring.terms(x) for k, e in enumerate(m) if e}
    for h, p in ring.spec.reciprocals:
        if index[h] not in used:
            continue
        power = max((m[index[h]] for m, _ in ring.terms(x)), default=0)
        for _ in range(power):
            numerator, x = ring.normal(numerator * ring.read(dict(p))), _cleared(ring, x, index[h], p)
    return numerator, x


def _cleared(ring: Ring, x: Any, k: int, p: Frozen) -> Any:
    """x·p where one power of the reciprocal k cancels exactly."""
    lowered, rest = {}, {}
    for m, c in ring.terms(x):
        if m[k]:
            lowered[(*m[:k], m[k] - 1, *m[k + 1 :])] = c
        else:
            rest[m] = c
    return ring.from_terms(lowered) + ring.normal(ring.from_terms(rest) * ring.read(dict(p)))


def _factors(ring: Ring, x: Any) -> tuple[Fraction, list[tuple[Frozen, int]]]:
    content, factors = ring.factor(x)
    result = []
    for p, power in factors:
        scale, canonical = primitive(ring.write(p))
        content *= scale**power
        result.append((freeze(canonical), power))
    return content, result


def missing(ring: Ring, divisors: Iterable[Any]) -> list[tuple[str, Frozen]]:
    """The reciprocals that `ring` lacks for dividing by all of `divisors`, named, in order of first need."""
    found: dict[Frozen, str] = {}
    for x in divisors:
        if ring.rational(x) is not None:
            continue
        for p, _ in _factors(ring, _rationalised(ring, x)[1])[1]:
            if p not in ring.spec.reciprocal_of:
                found.setdefault(p, reciprocal_name(p))
    return [(h, p) for p, h in found.items()]


def inverse(ring: Ring, x: Any) -> Any:
    """1/x, every reciprocal it needs being a generator of `ring`. Raises ZeroDivisionError for x = 0."""
    if not x:
        raise ZeroDivisionError("division by a zero divisor")
    if (value := ring.rational(x)) is not None:
        return ring.constant(1 / value)
    numerator, denominator = _rationalised(ring, x)
    content, factors = _factors(ring, denominator)
    result = numerator * ring.constant(1 / content)
    for p, power in factors:
        h = ring.generators[ring.spec.index[ring.spec.reciprocal_of[p]]]
        for _ in range(power):
            result = result * h
    return ring.normal(result)
