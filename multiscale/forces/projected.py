"""Forces that are not polynomial, by their Fourier coefficients along the leading motion.

    [ε^p]     (ε^p c g)(u, u') = c g(U_0, V_0)
    [ε^{p+1}] (ε^p c g)(u, u') = c (g_u(U_0, V_0) U_1 + g_v(U_0, V_0) V_1)
    g(U_0, V_0) = Σ_m (z^m (F_m^c + i F_m^s) + conjugate),     and so g_u and g_v

The coefficients F_m are real generators, functions of |z| whose meaning this room does not know. The level ε^{p+1} is
there for terms that know their derivatives, higher ones are not.
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

__all__ = ["ProjectedForce", "ProjectedTerm", "Sum", "Wave", "WaveSlopes"]


@dataclass(frozen=True)
class Wave:
    """z^number (real + i imag) Π factors, by the names of the generators, "" for a zero part."""

    variable: str
    number: int
    real: str
    imag: str
    factors: tuple[str, ...] = ()


@dataclass(frozen=True)
class WaveSlopes:
    """g_u and g_v of a force that depends on one unknown."""

    unknown: int
    by_displacement: tuple[Wave, ...]
    by_velocity: tuple[Wave, ...]


@dataclass(frozen=True)
class ProjectedTerm:
    """ε^power · coefficient · Σ waves and their conjugates."""

    power: int
    coefficient: Frozen
    waves: tuple[Wave, ...]
    slopes: WaveSlopes | None = None


class ProjectedForce:
    """A `Force`; `terms[k]` belong to the k-th equation."""

    def __init__(self, terms: Sequence[Sequence[ProjectedTerm]], ring: Ring) -> None:
        self._terms, self._ring = tuple(tuple(equation) for equation in terms), ring

    def in_ring(self, ring: Ring) -> ProjectedForce:
        return ProjectedForce(self._terms, ring)

    def at_level(self, level: int, tower: Tower) -> Field:
        return tuple(self._equation(terms, level, tower) for terms in self._terms)

    def _equation(self, terms: Sequence[ProjectedTerm], level: int, tower: Tower) -> Any:
        ring, total = self._ring, self._ring.zero
        for term in terms:
            coefficient = ring.read(dict(term.coefficient))
            if term.power == level:
                total = total + coefficient * self._field(term.waves)
            elif term.power == level - 1 and term.slopes:
                k, slopes = term.slopes.unknown, term.slopes
                change = self._field(slopes.by_displacement) * tower.jets[0][1][k]
                change = ring.normal(change) + ring.normal(self._field(slopes.by_velocity) * tower.jets[1][1][k])
                total = total + coefficient * change
        return ring.normal(total)

    def _field(self, waves: Sequence[Wave]) -> Any:
        total = self._ring.zero
        for wave in waves:
            total = total + self._real(wave)
        return self._ring.normal(total)

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
        for name in wave.factors:
            factor = factor * generators[names[name]]
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
