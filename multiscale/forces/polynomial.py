"""Forces that are polynomial in the unknowns and their first and second derivatives.

    f_k = Σ ε^p · c · Π jets,      [εⁿ] f_k = Σ c · [ε^{n-p}] Π jets

Terms that share a product of jets share its convolution (`Tower.product`).
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any

from multiscale.algebra.polynomial import Frozen
from multiscale.algebra.ring import Ring
from multiscale.tower import Field, Jet, Tower

__all__ = ["PolynomialForce", "Term"]


@dataclass(frozen=True)
class Term:
    """ε^power · coefficient · Π factors; `factors` is sorted, a jet appears once for each power of it."""

    power: int
    factors: tuple[Jet, ...]
    coefficient: Frozen


class PolynomialForce:
    """A `Force`; `terms[k]` belong to the k-th equation."""

    def __init__(self, terms: Sequence[Sequence[Term]], ring: Ring) -> None:
        self._terms = tuple(tuple(equation) for equation in terms)
        self._ring = ring
        self._coefficients = [
            [ring.normal(ring.read(dict(term.coefficient))) for term in equation] for equation in self._terms
        ]

    def in_ring(self, ring: Ring) -> PolynomialForce:
        return PolynomialForce(self._terms, ring)

    def at_level(self, level: int, tower: Tower) -> Field:
        return tuple(self._equation(k, level, tower) for k in range(len(self._terms)))

    def _equation(self, k: int, level: int, tower: Tower) -> Any:
        total = self._ring.zero
        for term, coefficient in zip(self._terms[k], self._coefficients[k], strict=True):
            if term.power <= level:
                total = total + coefficient * tower.product(term.factors, level - term.power)
        return total
