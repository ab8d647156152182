"""Forces of a large model: linear, quadratic and cubic maps of the whole vector of displacements.

    f = Σ ε^p · coefficient · S(u, …, u),      S one `Shape`: multilinear, symmetric where it is called with vectors

`Products` is a sum of products of linear forms, f = out · Π_k (B_k u): springs (B u the elongations, out = B^T) and
tensors given by indices and values (B_k picks coordinates). Its series in ε is a product of series of elongations,
entry by entry, formed once for each level. `Called` is a function of vectors, for every combination of monomials.
`Matrix` is a linear force and `Load` a fixed shape.

Fields are real, so one of each pair of conjugate monomials is worked out.
"""

from __future__ import annotations

from collections import Counter
from collections.abc import Callable, Iterator, Sequence
from dataclasses import dataclass, field
from math import factorial
from operator import add, itemgetter
from typing import Any, Protocol

import numpy as np
import numpy.typing as npt

from multiscale.algebra.polynomial import Frozen
from multiscale.algebra.ring import Ring
from multiscale.algebra.vector_ring import VectorElement, VectorRing, mapped
from multiscale.tower import Field, Tower

__all__ = ["Called", "Load", "Matrix", "MultilinearForce", "Products", "Shape", "WeakTerm"]

Array = npt.NDArray[Any]


class Shape(Protocol):
    """A multilinear map of displacements (or velocities)."""

    def at_level(self, level: int, tower: Tower) -> VectorElement:
        """[ε^level] of its value."""

    def value(self, displacement: Array, velocity: Array) -> Array:
        """Its value at a real state."""


@dataclass(frozen=True, eq=False)
class Matrix:
    """A linear force, of the displacements or of a time derivative; `act` maps columns."""

    act: Callable[[Array], Array]
    derivative: int

    def at_level(self, level: int, tower: Tower) -> VectorElement:
        return mapped(self.act, tower.jets[self.derivative][level][0])

    def value(self, displacement: Array, velocity: Array) -> Array:
        return self.act((displacement, velocity)[self.derivative])


@dataclass(frozen=True, eq=False)
class Load:
    """A fixed distribution, which the coefficient lets vary in time."""

    shape: Array

    def at_level(self, level: int, tower: Tower) -> VectorElement:
        return tower.ring.constant(self.shape) if level == 0 else tower.ring.zero  # type: ignore[arg-type, no-any-return]

    def value(self, displacement: Array, velocity: Array) -> Array:
        return self.shape


@dataclass(frozen=True, eq=False)
class Products:
    """out · Π_k (inputs_k u), the inputs sparse matrices (m, n); equal ones are one object, their powers are shared.

    The memo holds series that follow from the fields of one tower and those that grow from it.
    """

    out: Any
    inputs: tuple[Any, ...]
    _elongations: dict[tuple[int, int], VectorElement] = field(default_factory=dict, repr=False)
    _products: dict[tuple[int, int], VectorElement] = field(default_factory=dict, repr=False)

    def _input(self, k: int, level: int, tower: Tower) -> VectorElement:
        k = next(j for j, x in enumerate(self.inputs) if x is self.inputs[k])
        if (k, level) not in self._elongations:
            self._elongations[k, level] = mapped(lambda x: self.inputs[k] @ x, tower.jets[0][level][0])
        return self._elongations[k, level]

    def _partial(self, count: int, level: int, tower: Tower) -> VectorElement:
        """[ε^level] of the product of the first `count` inputs."""
        if count == 1:
            return self._input(0, level, tower)
        if (count, level) not in self._products:
            ring: Any = tower.ring
            symmetric = count == 2 and self.inputs[0] is self.inputs[1]
            total = ring.zero
            for k in range(level + 1):
                if symmetric and 2 * k > level:
                    break
                product = ring.real_product(
                    self._partial(count - 1, k, tower), self._input(count - 1, level - k, tower)
                )
                total = total + (product + product if symmetric and 2 * k < level else product)
            self._products[count, level] = total
        return self._products[count, level]

    def at_level(self, level: int, tower: Tower) -> VectorElement:
        return mapped(lambda x: self.out @ x, self._partial(len(self.inputs), level, tower))

    def value(self, displacement: Array, velocity: Array) -> Array:
        product = np.ones(self.out.shape[1])
        for matrix in self.inputs:
            product = product * (matrix @ displacement)
        return np.asarray(self.out @ product)


@dataclass(frozen=True, eq=False)
class Called:
    """A symmetric multilinear function of `degree` vectors, complex ones too, of shape (n,)."""

    function: Callable[..., Array]
    degree: int

    def at_level(self, level: int, tower: Tower) -> VectorElement:
        ring: Any = tower.ring
        pick = itemgetter(*ring.spec.partner)
        half: dict[Any, Any] = {}
        for entries, count in _multisets(self.degree, level, tower):
            exponents = entries[0][0]
            for m, _ in entries[1:]:
                exponents = tuple(map(add, exponents, m))
            if exponents < pick(exponents):
                continue
            value = count * np.asarray(self.function(*(c for _, c in entries)))
            half[exponents] = half[exponents] + value if exponents in half else value
        return ring.normal(ring.completed(half))  # type: ignore[no-any-return]

    def value(self, displacement: Array, velocity: Array) -> Array:
        return np.asarray(self.function(*[displacement] * self.degree))


def _multisets(degree: int, level: int, tower: Tower) -> Iterator[tuple[list[Any], int]]:
    """Every choice of `degree` monomials whose levels add up, with the number of its orderings."""
    entries = [(n, m, c) for n in range(level + 1) for m, c in tower.jets[0][n][0].terms.items()]

    def chosen(first: int, places: int, left: int) -> Iterator[list[int]]:
        if places == 0:
            if left == 0:
                yield []
            return
        for k in range(first, len(entries)):
            if entries[k][0] > left:
                break
            for rest in chosen(k, places - 1, left - entries[k][0]):
                yield [k, *rest]

    for numbers in chosen(0, degree, level):
        count = factorial(degree)
        for repeats in Counter(numbers).values():
            count //= factorial(repeats)
        yield [entries[k][1:] for k in numbers], count


@dataclass(frozen=True, eq=False)
class WeakTerm:
    """ε^power · coefficient · shape on the right-hand side."""

    power: int
    coefficient: Frozen
    shape: Shape


class MultilinearForce:
    """A `Force` with one component, whose coefficients are vectors."""

    def __init__(self, terms: Sequence[WeakTerm], ring: VectorRing) -> None:
        self.terms, self._ring = tuple(terms), ring

    def in_ring(self, ring: Ring) -> MultilinearForce:
        return MultilinearForce(self.terms, ring)  # type: ignore[arg-type]

    def at_level(self, level: int, tower: Tower) -> Field:
        ring, total = self._ring, self._ring.zero
        for term in self.terms:
            if level >= term.power:
                coefficient = ring.read(dict(term.coefficient))
                total = total + coefficient * term.shape.at_level(level - term.power, tower)
        return (ring.normal(total),)
