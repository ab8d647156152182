"""The time derivative as a derivation of the ring, order by order in the small parameter.

    d/dt = D_0 + ε D_1 + ε² D_2 + …,      D_n x = Σ_g (D_n g) ∂x/∂g

A derivation is the table of its images of the generators, by name; generators without an entry are constant. Laws
(tested for every representation):

    D(x y) = D(x) y + x D(y)        product rule
    D(conj x) = conj(D x)           so only the first partner of each pair needs an entry
    D_0 D_n = D_n D_0               because D_n g has the rate of g, as long as no frequency varies slowly;
                                    D_1 and D_2 need not commute
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field
from fractions import Fraction
from typing import Any

from multiscale.algebra.ring import Ring

__all__ = ["Derivation", "convolved_half", "doubled"]

HALF = Fraction(1, 2)


@dataclass(frozen=True)
class Derivation:
    """`images` maps the first partner of a pair to its derivative, `real_images` a real generator to its (real) one."""

    images: Mapping[str, Any]
    real_images: Mapping[str, Any] = field(default_factory=dict)

    def __bool__(self) -> bool:
        return bool(self.images) or bool(self.real_images)

    def half(self, ring: Ring, x: Any) -> Any:
        """Half of D x: the part through first partners and half the part through real generators.

        D x = half + conj(half) for an element that is its own conjugate.
        """
        index = ring.spec.index
        result = ring.zero
        for g, image in self.images.items():
            if image:
                result = result + image * ring.diff(x, index[g])
        for g, image in self.real_images.items():
            result = result + ring.constant(HALF) * image * ring.diff(x, index[g])
        return result

    def of_real(self, ring: Ring, x: Any) -> Any:
        """D x for an element that is its own conjugate, at half the products."""
        return doubled(ring, self.half(ring, x))

    def __call__(self, ring: Ring, x: Any) -> Any:
        """D x for any element."""
        return ring.normal(self.half(ring, x) + ring.conjugate(self.half(ring, ring.conjugate(x))))

    def lifted(self, ring: Ring) -> Derivation:
        return Derivation(
            {g: ring.lift(x) for g, x in self.images.items()}, {g: ring.lift(x) for g, x in self.real_images.items()}
        )

    def merged(self, other: Derivation) -> Derivation:
        """The derivation with the images of both; where both have one, the other's counts."""
        return Derivation({**self.images, **other.images}, {**self.real_images, **other.real_images})


def doubled(ring: Ring, half: Any) -> Any:
    """half + conj(half), reduced: a real element from its half, which is where sums of derivatives are made cheap."""
    half = ring.normal(half)
    return half + ring.conjugate(half)


def convolved_half(ring: Ring, derivations: Sequence[Derivation], series: Sequence[Any], level: int) -> Any:
    """Half of Σ_{k=1}^{level-1} D_k x_{level-k} for real x_0, x_1, …"""
    half = ring.zero
    for k in range(1, level):
        half = half + derivations[k].half(ring, series[level - k])
    return half
