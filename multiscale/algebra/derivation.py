"""The time derivative as a derivation of the ring, order by order in the small parameter.

    d/dt = D_0 + ε D_1 + ε² D_2 + …,      D_n x = Σ_g (D_n g) ∂x/∂g

A derivation is the table of its images of the generators. Laws (tested for every representation):

    D(x y) = D(x) y + x D(y)        product rule
    D(conj x) = conj(D x)           so only the first partner of each pair needs an entry
    D_0 D_n = D_n D_0               because D_n g has the rate of g; D_1 and D_2 need not commute
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import Any

from multiscale.algebra.ring import Ring

__all__ = ["Derivation", "convolve"]


@dataclass(frozen=True)
class Derivation:
    """`images` maps the index of the first partner of a pair to its derivative; all else is constant."""

    images: Mapping[int, Any]

    def half(self, ring: Ring, x: Any) -> Any:
        """The part of D x that comes through the first partners; D x = half + conj(half) for x = conj(x)."""
        result = ring.zero
        for g, image in self.images.items():
            if image:
                result = result + image * ring.diff(x, g)
        return result

    def of_real(self, ring: Ring, x: Any) -> Any:
        """D x for an element that is its own conjugate, at half the products."""
        part = ring.normal(self.half(ring, x))
        return part + ring.conjugate(part)

    def __call__(self, ring: Ring, x: Any) -> Any:
        """D x for any element."""
        return ring.normal(self.half(ring, x) + ring.conjugate(self.half(ring, ring.conjugate(x))))

    def lifted(self, ring: Ring) -> Derivation:
        return Derivation({g: ring.lift(image) for g, image in self.images.items()})


def convolve(ring: Ring, derivations: Sequence[Derivation], series: Sequence[Any], level: int) -> Any:
    """Σ_{k=1}^{level-1} D_k x_{level-k} for real x_0, x_1, …, conjugated once at the end."""
    part = ring.zero
    for k in range(1, level):
        part = part + derivations[k].half(ring, series[level - k])
    part = ring.normal(part)
    return part + ring.conjugate(part)
