"""One level of the hierarchy from the levels below.

    R_n = [εⁿ](L u − f)   with U_n and D_nA left out (D_n of drives and slow parameters kept), sorted by rate;
    at the rate of a mode the solvability condition gives D_nA, at every other rate U_n = −L_0(ir)^{-1} R_n|_r.

Picking the monomials of one rate is the Fourier projection (ω/2π)∫ R e^{−iωT_0} dT_0, done exactly. Fields are real, so
only one rate of each pair (r, −r) is worked on and the other follows by conjugation.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, replace
from operator import mul, sub
from typing import Any, TypeAlias

from multiscale.algebra.derivation import Derivation
from multiscale.algebra.reciprocals import missing
from multiscale.algebra.ring import Exponents, Ring
from multiscale.clock import Clock
from multiscale.forces import Force
from multiscale.linear_part import LinearPart, Rate
from multiscale.tower import Field, Tower

__all__ = ["Hierarchy", "RateTable", "next_level", "sorted_by_rate", "start"]


Parts: TypeAlias = dict[Rate, dict[int, Any]]


class RateTable(dict[Exponents, "Rate | None"]):
    """Rate of a monomial from its exponents in the paired generators; None for the half that conjugation supplies."""

    def __init__(self, modes: Sequence[Rate], drives: Sequence[Rate]) -> None:
        super().__init__()
        self._columns = tuple(zip(*modes, *drives, strict=True))
        self._own = frozenset(modes)

    def rate(self, exponents: Exponents) -> Rate:
        """Σ (e_k − ē_k) rate_k."""
        plain = list(map(int, exponents))
        counts = list(map(sub, plain[::2], plain[1::2]))
        return tuple(sum(map(mul, counts, column)) for column in self._columns)

    def __missing__(self, exponents: Exponents) -> Rate | None:
        rate = self.rate(exponents)
        mirrored = tuple(-r for r in rate)
        kept = rate in self._own or (mirrored not in self._own and rate >= mirrored)
        self[exponents] = rate if kept else None
        return self[exponents]


@dataclass(frozen=True)
class Hierarchy:
    """What a level is computed from, and the levels so far. Nothing in it is changed by `next_level`.

    `met` are the (equation, rate) pairs that some level solved for: what its divisors come from.
    """

    linear_part: LinearPart
    force: Force
    clock: Clock
    rates: RateTable
    tower: Tower
    met: frozenset[tuple[int, Rate]] = frozenset()

    def in_ring(self, ring: Ring) -> Hierarchy:
        clock, tower = self.clock.in_ring(ring), self.tower.lifted(ring)
        # New reciprocals of slow quantities vary too, which the derivations of lower levels could not know.
        time = (tower.time[0], *(d.merged(clock.at_level(n)) for n, d in enumerate(tower.time[1:], start=1)))
        return replace(
            self,
            linear_part=self.linear_part.in_ring(ring),
            force=self.force.in_ring(ring),
            clock=clock,
            tower=replace(tower, time=time),
        )


def start(ring: Ring, linear_part: LinearPart, force: Force, clock: Clock) -> Hierarchy:
    """Level 0: U_0 = Σ φ_a z_a + conjugate, and the linear response to drives of order ε⁰; D_0 z_a = iω_a z_a."""
    motion = []
    for k in range(linear_part.size):
        u = ring.zero
        for a, mode in enumerate(linear_part.modes):
            if mode.shape[k]:
                u = u + ring.read(dict(mode.shape[k])) * ring.generators[ring.spec.first_pair + 2 * a]
        motion.append(u + ring.conjugate(u))
    rates = RateTable([mode.rate for mode in linear_part.modes], clock.rates)
    nothing = Tower.start(ring, clock.fast(), tuple(ring.zero for _ in motion))
    forcing = force.at_level(0, nothing)
    parts = sorted_by_rate(ring, tuple(-f for f in forcing), rates)
    ring, hierarchy, parts = _with_divisors(Hierarchy(linear_part, force, clock, rates, nothing), parts)
    response, _ = _solved(ring, hierarchy.linear_part, parts)
    displacement = tuple(ring.lift(u) + r for u, r in zip(motion, response, strict=True))
    return replace(hierarchy, tower=Tower.start(ring, hierarchy.clock.fast(), displacement))


def sorted_by_rate(ring: Ring, residual: Field, rates: RateTable) -> Parts:
    """{rate: {component: its part}}, one of each pair of opposite rates."""
    parts: Parts = {}
    for k, x in enumerate(residual):
        for rate, part in ring.split(x, ring.spec.pair_indices, rates).items():
            parts.setdefault(rate, {})[k] = part
    return parts


def _with_divisors(hierarchy: Hierarchy, parts: Parts) -> tuple[Ring, Hierarchy, Parts]:
    """Everything lifted to a ring that has the reciprocals which these parts need."""
    pairs = [(k, rate) for rate, part in parts.items() for k in part]
    hierarchy = replace(hierarchy, met=hierarchy.met.union(pairs))
    needed = missing(hierarchy.tower.ring, hierarchy.linear_part.divisors(pairs))
    if not needed:
        return hierarchy.tower.ring, hierarchy, parts
    ring = hierarchy.tower.ring.extended(needed)
    return ring, hierarchy.in_ring(ring), {r: {k: ring.lift(x) for k, x in part.items()} for r, part in parts.items()}


def next_level(hierarchy: Hierarchy) -> Hierarchy:
    """The hierarchy with one more level."""
    tower = hierarchy.tower
    known = hierarchy.clock.at_level(tower.height)
    pending = tower.pending(known)
    forcing = hierarchy.force.at_level(tower.height, tower)
    applied = hierarchy.linear_part.apply(pending)
    residual = tuple(tower.ring.normal(x - f) for x, f in zip(applied, forcing, strict=True))
    ring, hierarchy, parts = _with_divisors(hierarchy, sorted_by_rate(tower.ring, residual, hierarchy.rates))
    if ring is not tower.ring:
        pending = tuple(ring.lift(x) for x in pending[0]), tuple(ring.lift(x) for x in pending[1])
        known = hierarchy.clock.at_level(tower.height)
    displacement, slow = _solved(ring, hierarchy.linear_part, parts)
    slow = hierarchy.clock.followed(slow)
    return replace(hierarchy, tower=hierarchy.tower.completed(pending, known, displacement, slow))


def _solved(ring: Ring, linear_part: LinearPart, parts: Parts) -> tuple[Field, Derivation]:
    """(U_n, the D_nA) from the residual sorted by rate."""
    size = linear_part.size
    upper, constant = [ring.zero] * size, [ring.zero] * size
    images: dict[str, Any] = {}
    for rate, part in parts.items():
        for a, change in linear_part.project(part, rate).items():
            images[ring.spec.pairs[a][0]] = change
        target = upper if any(rate) else constant
        for k, x in linear_part.solve(part, rate).items():
            target[k] = target[k] + x
    displacement = []
    for u, steady in zip(upper, constant, strict=True):
        u = ring.normal(u)
        displacement.append(u + ring.conjugate(u) + ring.normal(steady))
    return tuple(displacement), Derivation(images)
