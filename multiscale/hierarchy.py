"""One level of the hierarchy from the levels below.

    R_n = [εⁿ](L u − f)   with U_n and D_nA left out, sorted by rate;
    at the rate of a mode the solvability condition gives D_nA, at every other rate U_n = −L_0(ir)^{-1} R_n|_r.

Picking the monomials of one rate is the Fourier projection (ω/2π)∫ R e^{−iωT_0} dT_0, done exactly. Fields are real, so
only one rate of each pair (r, −r) is worked on and the other follows by conjugation.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, replace
from typing import Any

from multiscale.algebra.derivation import Derivation
from multiscale.algebra.reciprocals import missing
from multiscale.algebra.ring import Exponents, Ring
from multiscale.forces import Force
from multiscale.linear_part import LinearPart, Rate
from multiscale.tower import Field, Tower

__all__ = ["Hierarchy", "RateTable", "next_level", "start"]


class RateTable(dict[Exponents, "Rate | None"]):
    """Rate of a monomial from its exponents in the paired generators; None for the half that conjugation supplies."""

    def __init__(self, rates: Sequence[Rate]) -> None:
        super().__init__()
        self._rates = tuple(rates)
        self._own = frozenset(self._rates)

    def rate(self, exponents: Exponents) -> Rate:
        """Σ (e_k − ē_k) rate_k."""
        counts = [int(exponents[2 * k] - exponents[2 * k + 1]) for k in range(len(self._rates))]
        return tuple(
            sum(n * r[b] for n, r in zip(counts, self._rates, strict=True)) for b in range(len(self._rates[0]))
        )

    def __missing__(self, exponents: Exponents) -> Rate | None:
        rate = self.rate(exponents)
        mirrored = tuple(-r for r in rate)
        kept = rate in self._own or (mirrored not in self._own and rate >= mirrored)
        self[exponents] = rate if kept else None
        return self[exponents]


@dataclass(frozen=True)
class Hierarchy:
    """What a level is computed from, and the levels so far. Nothing in it is changed by `next_level`."""

    linear_part: LinearPart
    force: Force
    rates: RateTable
    tower: Tower

    def in_ring(self, ring: Ring) -> Hierarchy:
        return replace(
            self,
            linear_part=self.linear_part.in_ring(ring),
            force=self.force.in_ring(ring),
            tower=self.tower.lifted(ring),
        )


def start(ring: Ring, linear_part: LinearPart, force: Force, fast: Derivation) -> Hierarchy:
    """Level 0: U_0 = Σ φ_a z_a + conjugate, D_0 z_a = iω_a z_a."""
    first = 1 + len(ring.spec.roots)
    displacement = []
    for k in range(len(linear_part.modes[0].shape)):
        u = ring.zero
        for a, mode in enumerate(linear_part.modes):
            if mode.shape[k]:
                u = u + ring.constant(mode.shape[k]) * ring.generators[first + 2 * a]
        displacement.append(u + ring.conjugate(u))
    rates = RateTable([mode.rate for mode in linear_part.modes])
    return Hierarchy(linear_part, force, rates, Tower.start(ring, fast, tuple(displacement)))


def _sorted_by_rate(ring: Ring, residual: Field, rates: RateTable) -> dict[Rate, dict[int, Any]]:
    first = 1 + len(ring.spec.roots)
    indices = tuple(range(first, first + 2 * len(ring.spec.pairs)))
    parts: dict[Rate, dict[int, Any]] = {}
    for k, x in enumerate(residual):
        for rate, part in ring.split(x, indices, rates).items():
            parts.setdefault(rate, {})[k] = part
    return parts


def next_level(hierarchy: Hierarchy) -> Hierarchy:
    """The hierarchy with one more level."""
    tower = hierarchy.tower
    pending = tower.pending()
    forcing = hierarchy.force.at_level(tower.height, tower)
    residual = [tower.ring.normal(x - f) for x, f in zip(hierarchy.linear_part.apply(pending), forcing, strict=True)]
    parts = _sorted_by_rate(tower.ring, tuple(residual), hierarchy.rates)
    needed = missing(
        tower.ring, hierarchy.linear_part.divisors((k, rate) for rate, part in parts.items() for k in part)
    )
    if needed:
        ring = tower.ring.extended(needed)
        hierarchy = hierarchy.in_ring(ring)
        tower = hierarchy.tower
        pending = tuple(tuple(ring.lift(x) for x in field) for field in pending)  # type: ignore[assignment]
        parts = {rate: {k: ring.lift(x) for k, x in part.items()} for rate, part in parts.items()}
    displacement, slow = _solved(tower.ring, hierarchy.linear_part, parts)
    return replace(hierarchy, tower=tower.completed(pending, displacement, slow))


def _solved(ring: Ring, linear_part: LinearPart, parts: dict[Rate, dict[int, Any]]) -> tuple[Field, Derivation]:
    """(U_n, D_n) from the residual sorted by rate."""
    size = len(linear_part.modes[0].shape)
    upper, constant = [ring.zero] * size, [ring.zero] * size
    first = 1 + len(ring.spec.roots)
    images: dict[int, Any] = {}
    for rate, part in parts.items():
        for a, change in linear_part.project(part, rate).items():
            images[first + 2 * a] = change
        target = upper if any(rate) else constant
        for k, x in linear_part.solve(part, rate).items():
            target[k] = target[k] + x
    displacement = []
    for u, steady in zip(upper, constant, strict=True):
        u = ring.normal(u)
        displacement.append(u + ring.conjugate(u) + ring.normal(steady))
    return tuple(displacement), Derivation(images)
