"""The contract of a ring of polynomials over Q[i]; `choice` picks its representation.

A ring has the generators i (named ``@i``), square roots, complex-conjugate pairs, real generators and reciprocals, in
that order. Its elements support ``+ - *`` and truth (non-zero). Laws, tested for every representation:

    normal(x):      i**2 -> -1, g**2 -> its value for every root g, s*(1/s) -> 1 for every s with a reciprocal,
                    e*ē -> 1 for the partners of a unit pair, z*z̄ -> r**2 for a pair with a modulus r;
                    a ring homomorphism onto reduced elements: normal(x*y) = normal(normal(x)*normal(y))
    conjugate(x):   exchanges the partners of every pair and i with -i; an involution
    diff(x, g):     the partial derivative, every generator being independent of the others
    split(x, ...):  the parts add up to x, but for what the key sends to None
    quotient(x, d): y with y*d = x in the free polynomial ring, or None
    lift(x):        the same polynomial, x from a ring whose generators all exist here, under the same names
    rational(x):    the value of a constant, None for anything else
    write(read(p)) = p for every polynomial p by name

A reciprocal of a polynomial with several terms is *not* reduced against that polynomial during the work: finished
coefficients are brought to their reduced form in `multiscale.algebra.quotient`.
"""

from __future__ import annotations

from collections.abc import Hashable, Mapping, Sequence
from dataclasses import dataclass, replace
from fractions import Fraction
from functools import cached_property
from typing import Any, Protocol, TypeVar

from multiscale.algebra.polynomial import Frozen, Polynomial

__all__ = ["IMAGINARY", "Exponents", "Ring", "RingSpec"]

IMAGINARY = "@i"
Exponents = tuple[int, ...]
Key = TypeVar("Key", bound=Hashable)


@dataclass(frozen=True)
class RingSpec:
    """The generators of a ring, by name.

    `roots` are pairs (g, p) with g**2 = p, p free of g and of the roots before it; `pairs` are complex-conjugate
    partners, of which those whose first name is in `units` lie on the unit circle (partner = reciprocal): phases.
    `reciprocals` are pairs (h, p) with h = 1/p, the p primitive (see `polynomial.primitive`), irreducible and pairwise
    coprime.
    `moduli` are pairs (z, r): the real generator r is the modulus |z| of the pair that z belongs to.
    """

    pairs: tuple[tuple[str, str], ...]
    units: frozenset[str] = frozenset()
    reals: tuple[str, ...] = ()
    roots: tuple[tuple[str, Frozen], ...] = ()
    reciprocals: tuple[tuple[str, Frozen], ...] = ()
    moduli: tuple[tuple[str, str], ...] = ()

    @cached_property
    def names(self) -> tuple[str, ...]:
        flat = tuple(name for pair in self.pairs for name in pair)
        return (IMAGINARY, *(g for g, _ in self.roots), *flat, *self.reals, *(h for h, _ in self.reciprocals))

    @cached_property
    def index(self) -> dict[str, int]:
        return {name: k for k, name in enumerate(self.names)}

    @cached_property
    def partner(self) -> tuple[int, ...]:
        """The permutation of generators that conjugation makes (i itself also changes sign)."""
        swap = dict(self.pairs) | {b: a for a, b in self.pairs}
        return tuple(self.index[swap.get(name, name)] for name in self.names)

    @cached_property
    def inverses(self) -> tuple[tuple[int, int], ...]:
        """Index pairs (g, h) with g*h = 1: the reciprocals of single generators, and the unit pairs."""
        single = [(h, p[0][0][0][0]) for h, p in self.reciprocals if len(p) == 1]
        phases = [(e_bar, e) for e, e_bar in self.pairs if e in self.units]
        return tuple((self.index[g], self.index[h]) for h, g in (*phases, *single))

    @cached_property
    def squared_moduli(self) -> tuple[tuple[int, int, int], ...]:
        """Index triples (z, z̄, r) with z*z̄ = r**2."""
        other = dict(self.pairs)
        return tuple((self.index[z], self.index[other[z]], self.index[r]) for z, r in self.moduli)

    @property
    def first_pair(self) -> int:
        """The index of the first paired generator; partners stand side by side from there on."""
        return 1 + len(self.roots)

    @property
    def pair_indices(self) -> tuple[int, ...]:
        return tuple(range(self.first_pair, self.first_pair + 2 * len(self.pairs)))

    @cached_property
    def reciprocal_of(self) -> dict[Frozen, str]:
        return {p: h for h, p in self.reciprocals}

    def with_reciprocals(self, more: Sequence[tuple[str, Frozen]]) -> RingSpec:
        return replace(self, reciprocals=self.reciprocals + tuple(more))


class Ring(Protocol):
    """What a representation offers; the laws stand at the head of this module."""

    representation: str
    spec: RingSpec
    zero: Any
    one: Any
    generators: tuple[Any, ...]

    def constant(self, value: Fraction | int) -> Any: ...
    def rational(self, x: Any) -> Fraction | None: ...
    def read(self, polynomial: Polynomial) -> Any: ...
    def write(self, x: Any) -> dict[tuple[tuple[str, int], ...], Fraction]: ...
    def terms(self, x: Any) -> list[tuple[Exponents, Fraction]]: ...
    def from_terms(self, terms: Mapping[Exponents, Fraction]) -> Any: ...
    def normal(self, x: Any) -> Any: ...
    def conjugate(self, x: Any) -> Any: ...
    def diff(self, x: Any, generator: int) -> Any: ...
    def split(self, x: Any, indices: tuple[int, ...], key: Mapping[Exponents, Key | None]) -> dict[Key, Any]: ...
    def quotient(self, x: Any, divisor: Any) -> Any | None: ...
    def factor(self, x: Any) -> tuple[Fraction, list[tuple[Any, int]]]: ...
    def extended(self, reciprocals: Sequence[tuple[str, Frozen]]) -> Ring: ...
    def lift(self, x: Any) -> Any: ...


class NamedTerms:
    """Reading and writing polynomials by name, from `terms` and `from_terms`: shared by the representations."""

    spec: RingSpec

    def terms(self, x: Any) -> list[tuple[Exponents, Fraction]]:
        raise NotImplementedError

    def from_terms(self, terms: Mapping[Exponents, Fraction]) -> Any:
        raise NotImplementedError

    def read(self, polynomial: Polynomial) -> Any:
        index, size = self.spec.index, len(self.spec.names)
        terms = {}
        for monomial, coefficient in polynomial.items():
            exponents = [0] * size
            for name, e in monomial:
                exponents[index[name]] = e
            terms[tuple(exponents)] = coefficient
        return self.from_terms(terms)

    def write(self, x: Any) -> dict[tuple[tuple[str, int], ...], Fraction]:
        names = self.spec.names
        return {tuple(sorted((names[k], e) for k, e in enumerate(m) if e)): c for m, c in self.terms(x)}
