"""The part of the time derivative that is known beforehand: fast rates, detuned drives, slow parameters.

D_0 z_a = iω_a z_a,    D_0 e = iΩ_0 e,    D_n e = iΩ_n e,     Ω = Ω_0 + εΩ_1 + ε²Ω_2 + …
D_n |z| = (z̄ D_nz + z D_nz̄)/(2|z|),   D_n |z|^s = s |z|^s D_n|z| / |z|   for the moduli of amplitudes
D_1 F = F' for a function F of εt,        D_1 (1/p) = −(1/p)² D_1 p for a reciprocal of slow quantities
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from fractions import Fraction
from typing import Any

from multiscale.algebra.derivation import Derivation
from multiscale.algebra.polynomial import Frozen
from multiscale.algebra.ring import Ring
from multiscale.linear_part import Rate

__all__ = ["Clock", "Modulus"]


@dataclass(frozen=True)
class Modulus:
    """The generators `name` = |z| and `inverse` = 1/|z| for the amplitude `variable`, and powers (name, exponent)."""

    name: str
    inverse: str
    variable: str
    powers: tuple[tuple[str, Frozen], ...] = ()


class Clock:
    """The clock of one problem.

    `fast_frequencies[g]` is the frequency (by name) of a paired generator at leading order, `detunings[g]` are Ω_1,
    Ω_2, … of a phasor, `slow[g]` is D_1 of a real generator; `rates` are the rates of the phasors, in their order.
    `moduli` are the moduli of amplitudes that stand in the ring, with the powers of them that do.
    """

    def __init__(
        self,
        ring: Ring,
        fast_frequencies: Mapping[str, Frozen],
        rates: Sequence[Rate],
        detunings: Mapping[str, Sequence[Frozen]],
        slow: Mapping[str, Frozen],
        moduli: Sequence[Modulus] = (),
    ) -> None:
        self._ring, self.rates, self._moduli = ring, tuple(rates), tuple(moduli)
        self._fast, self._detunings, self._slow = dict(fast_frequencies), dict(detunings), dict(slow)

    def in_ring(self, ring: Ring) -> Clock:
        return Clock(ring, self._fast, self.rates, self._detunings, self._slow, self._moduli)

    def _turning(self, generator: str, frequency: Frozen) -> Any:
        ring = self._ring
        own = ring.generators[ring.spec.index[generator]]
        return ring.normal(ring.generators[0] * ring.read(dict(frequency)) * own)

    def fast(self) -> Derivation:
        """D_0."""
        return Derivation({g: self._turning(g, w) for g, w in self._fast.items()})

    def at_level(self, n: int) -> Derivation:
        """The known part of D_n, n ≥ 1."""
        detuned = {g: series[n - 1] for g, series in self._detunings.items() if n <= len(series) and series[n - 1]}
        images = {g: self._turning(g, w) for g, w in detuned.items()}
        return Derivation(images, self._slow_images() if n == 1 and self._slow else {})

    def followed(self, slow: Derivation) -> Derivation:
        """The D_nA with what they do to the moduli of amplitudes."""
        if not self._moduli:
            return slow
        ring, images = self._ring, dict(slow.real_images)
        own = ring.generators
        for modulus in self._moduli:
            change = slow.images.get(modulus.variable)
            if not change:
                continue
            names = ring.spec.index
            inverse = own[names[modulus.inverse]]
            half = ring.normal(ring.conjugate(own[names[modulus.variable]]) * change * ring.constant(Fraction(1, 2)))
            relative = ring.normal((half + ring.conjugate(half)) * inverse * inverse)
            images[modulus.name] = ring.normal(relative * own[names[modulus.name]])
            images[modulus.inverse] = ring.normal(-(relative * inverse))
            for name, exponent in modulus.powers:
                images[name] = ring.normal(relative * own[names[name]] * ring.read(dict(exponent)))
        return Derivation(slow.images, images)

    def _slow_images(self) -> dict[str, Any]:
        ring = self._ring
        plain = Derivation({}, {g: ring.read(dict(x)) for g, x in self._slow.items()})
        images = dict(plain.real_images)
        for h, p in ring.spec.reciprocals:
            change = plain(ring, ring.read(dict(p)))
            if change:
                own = ring.generators[ring.spec.index[h]]
                images[h] = ring.normal(-(own * own * change))
        return images
