"""Forces that are not polynomial, by their Fourier coefficients along the leading motion.

    [ε^p] (ε^p c g)(u, u', u'') = c g(U_0, V_0, W_0) = c Σ_m (z^m (F_m^c + i F_m^s) + conjugate)

The coefficients F_m are real generators, functions of |z|² whose meaning this room does not know. Only the level ε^p
of a term is given: the next one needs derivatives of g.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from fractions import Fraction
from typing import Any

from multiscale.algebra.polynomial import Frozen
from multiscale.algebra.ring import Ring
from multiscale.forces import Force
from multiscale.tower import Field, Tower

__all__ = ["ProjectedForce", "ProjectedTerm", "Sum", "Wave"]


@dataclass(frozen=True)
class Wave:
    """z^number (real + i imag), by the names of the generators, "" for a zero part."""

    variable: str
    number: int
    real: str
    imag: str


@dataclass(frozen=True)
class ProjectedTerm:
    """ε^power · coefficient · Σ waves and their conjugates."""

    power: int
    coefficient: Frozen
    waves: tuple[Wave, ...]


class ProjectedForce:
    """A `Force`; `terms[k]` belong to the k-th equation."""

    def __init__(self, terms: Sequence[Sequence[ProjectedTerm]], ring: Ring) -> None:
        self._terms, self._ring = tuple(tuple(equation) for equation in terms), ring

    def in_ring(self, ring: Ring) -> ProjectedForce:
        return ProjectedForce(self._terms, ring)

    def at_level(self, level: int, tower: Tower) -> Field:
        return tuple(self._equation(terms, level) for terms in self._terms)

    def _equation(self, terms: Sequence[ProjectedTerm], level: int) -> Any:
        ring, total = self._ring, self._ring.zero
        for term in terms:
            if term.power == level:
                for wave in term.waves:
                    total = total + ring.read(dict(term.coefficient)) * self._real(wave)
        return ring.normal(total)

    def _real(self, wave: Wave) -> Any:
        """The wave and its conjugate; a mean value has no conjugate of its own."""
        ring = self._ring
        names, generators = ring.spec.index, ring.generators
        factor = ring.zero
        if wave.real:
            factor = factor + generators[names[wave.real]]
        if wave.imag:
            factor = factor + generators[0] * generators[names[wave.imag]]
        for _ in range(wave.number):
            factor = factor * generators[names[wave.variable]]
        if not wave.number:
            factor = factor * ring.constant(Fraction(1, 2))
        return factor + ring.conjugate(factor)


class Sum:
    """Several forces acting together."""

    def __init__(self, forces: Sequence[Force]) -> None:
        self._forces = tuple(forces)

    def in_ring(self, ring: Ring) -> Sum:
        return Sum([force.in_ring(ring) for force in self._forces])

    def at_level(self, level: int, tower: Tower) -> Field:
        fields = [force.at_level(level, tower) for force in self._forces]
        return tuple(_total(parts) for parts in zip(*fields, strict=True))


def _total(parts: Sequence[Any]) -> Any:
    total = parts[0]
    for part in parts[1:]:
        total = total + part
    return total
