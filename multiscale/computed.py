"""The computed levels behind an expansion, and their finished (representation-free) form, made when asked for.

`Computation` joins a canonical problem to a hierarchy: it builds the ring and the rooms that the hierarchy asks, takes
levels further, and hands out finished coefficients: polynomials in the amplitudes z_a, z̄_a and the phasors e_l,
ē_l (exponents pairwise, modes first) with reduced coefficients, the same for every representation.
"""

from __future__ import annotations

from collections.abc import Iterable, Mapping
from dataclasses import dataclass, replace
from functools import cache, cached_property
from typing import Any, TypeAlias

import sympy as sp

from multiscale.algebra.choice import make_ring
from multiscale.algebra.complex_ring import ComplexRing, MpmathRing
from multiscale.algebra.derivation import Derivation
from multiscale.algebra.polynomial import Frozen, freeze
from multiscale.algebra.quotient import Coefficient, finish
from multiscale.algebra.ring import Exponents, Ring, RingSpec
from multiscale.clock import Clock
from multiscale.errors import ProblemError
from multiscale.forces import Force
from multiscale.forces.polynomial import PolynomialForce
from multiscale.forces.projected import ProjectedForce, ProjectedTerm, Sum, Wave, WaveSlopes
from multiscale.frame import Frame, frame_of
from multiscale.hierarchy import Hierarchy, next_level, sorted_by_rate, start
from multiscale.linear_part import LinearPart, Rate
from multiscale.linear_part.dense import Dense
from multiscale.linear_part.general import General
from multiscale.linear_part.oscillators import Oscillators
from multiscale.problem.averaged.laws import LAW
from multiscale.problem.canonical import Canonical, in_double
from multiscale.tower import Tower

__all__ = ["Computation", "Finished", "Snapshot", "begin", "restore"]

Finished: TypeAlias = Mapping[Exponents, Coefficient]


@dataclass(frozen=True)
class Snapshot:
    """A computation as plain data: the reciprocals in use, and per level the fields and the D_nA by name.

    `representation` is "auto" where the coefficients are exact: any exact arithmetic goes on from them.
    """

    reciprocals: tuple[tuple[str, Frozen], ...]
    fields: tuple[tuple[Frozen, ...], ...]
    changes: tuple[tuple[Frozen, ...], ...]
    representation: str = "auto"


@dataclass(frozen=True)
class Computation:
    """A canonical problem and the levels computed so far."""

    canonical: Canonical
    hierarchy: Hierarchy

    @property
    def order(self) -> int:
        return self.hierarchy.tower.height - 1

    @property
    def representation(self) -> str:
        return self.hierarchy.tower.ring.representation

    @property
    def modes(self) -> int:
        return len(self.hierarchy.linear_part.modes)

    @property
    def unknowns(self) -> int:
        return self.hierarchy.linear_part.size

    @property
    def frequencies(self) -> tuple[sp.Expr, ...]:
        """The natural frequencies of the modes, to the digits of this representation."""
        exact = self.canonical.frequencies
        return exact if self.representation == "mpmath" else tuple(map(in_double, exact))

    def size(self, level: int) -> tuple[int, int]:
        """Terms of the fields of a level in all unknowns, and of its D_nA in all modes, as they stand in the ring."""
        tower = self.hierarchy.tower
        images = tower.time[level].images if level else {}
        changes = (images.get(self._amplitude(a)) for a in range(self.modes))
        return sum(map(len, tower.jets[0][level])), sum(len(x) for x in changes if x is not None)

    def further(self) -> Computation:
        """One more level."""
        return replace(self, hierarchy=next_level(self.hierarchy))

    def rate(self, exponents: Exponents) -> Rate:
        return self.hierarchy.rates.rate(exponents)

    def _amplitude(self, mode: int) -> str:
        return self.canonical.spec.pairs[mode][0]

    def base_value(self, base: Frozen, given: Mapping[Any, float] | None = None) -> float | None:
        """A base frequency as a number, with `given` values of symbols; None where it contains others."""
        meanings = {name: meaning.subs(given or {}) for name, meaning in self.canonical.meanings}
        value = 0.0
        for monomial, c in base:
            factor = float(c)
            for name, e in monomial:
                meaning = meanings.get(name)
                if meaning is None or meaning.free_symbols:
                    return None
                factor *= float(meaning) ** e
            value += factor
        return value

    @cached_property
    def frame(self) -> Frame:
        """The rotating frame for the combinations of phases that the D_nA contain."""
        drives = len(self.canonical.drives)
        bare = Frame(self.modes, (), (), ())
        levels = range(1, self.order + 1)
        found = {bare.relative(m, a) for n in levels for a in range(self.modes) for m in self.change(n, a)}
        found.update(row for mean in self.canonical.torus for row in mean.combinations)
        return frame_of(found, self.modes, drives)

    @cached_property
    def autonomous(self) -> bool:
        """Whether the flow in the frame has no explicit time: no slow parameters, no beats between drives."""
        levels = range(1, self.order + 1)
        left = (
            self.frame.fast(self.frame.relative(m, a))
            for n in levels
            for a in range(self.modes)
            for m in self.change(n, a)
        )
        moving = [k for k, d in enumerate(self.canonical.drives) if d.frequency != 0]
        return not self.canonical.slow and not any(row[self.modes + k] for row in left for k in moving)

    @cached_property
    def _finish(self) -> Any:
        ring, tower = self.hierarchy.tower.ring, self.hierarchy.tower

        @cache
        def finished(kind: str, level: int, index: int) -> Finished:
            if kind == "change":
                return finish(ring, tower.time[level].images.get(self._amplitude(index), ring.zero))
            if kind == "flow":
                return finish(ring, self._in_frame(level, index))
            return finish(ring, tower.jets[int(kind)][level][index])

        return finished

    def change(self, level: int, mode: int) -> Finished:
        """D_level A_mode, written for z = A e^{iωT_0}."""
        return self._finish("change", level, mode)  # type: ignore[no-any-return]

    def flow(self, level: int, mode: int) -> Finished:
        """D_n A in the rotating frame, D_nA − i Φ_n A, with Φ_0 + εΦ_1 + … the rate of the fast angle; n = `level`."""
        return self._finish("flow", level, mode)  # type: ignore[no-any-return]

    def _in_frame(self, level: int, mode: int) -> Any:
        ring, tower = self.hierarchy.tower.ring, self.hierarchy.tower
        own = ring.generators[ring.spec.index[self._amplitude(mode)]]
        turning = ring.zero
        for share, drive in zip(self.frame.angles[mode][self.modes :], self.canonical.drives, strict=True):
            if share and level <= len(drive.detunings):
                turning = turning + ring.constant(share) * ring.read(dict(drive.detunings[level - 1]))
        change = tower.time[level].images.get(self._amplitude(mode), ring.zero)
        return ring.normal(change - ring.generators[0] * turning * own)

    def field(self, level: int, unknown: int, derivative: int = 0) -> Finished:
        """[ε^level] of an unknown or of its time derivative."""
        return self._finish(str(derivative), level, unknown)  # type: ignore[no-any-return]

    def forcing(self, level: int, unknown: int) -> tuple[Finished, Finished]:
        """(forcing, its secular part) of L_0 U_level = forcing, from U_level and D_levelA.

        The solvability conditions of the levels below are inserted; the term in D_levelA itself is left out.
        """
        ring = self.hierarchy.tower.ring
        moved, secular = self._acted(level)
        return finish(ring, ring.normal(moved[unknown] + secular[unknown])), finish(ring, secular[unknown])

    @cached_property
    def _acted(self) -> Any:
        """(L_0 U_level, what the D_levelA contribute), equation by equation."""
        linear, tower = self.hierarchy.linear_part, self.hierarchy.tower
        ring = tower.ring

        @cache
        def acted(level: int) -> tuple[list[Any], list[Any]]:
            moved, secular = [ring.zero] * linear.size, [ring.zero] * linear.size
            parts = sorted_by_rate(ring, tower.jets[0][level], self.hierarchy.rates)
            for rate, part in parts.items():
                for k, x in linear.act(part, rate).items():
                    moved[k] = moved[k] + (x + ring.conjugate(x) if any(rate) else x)
            images = tower.time[level].images
            changes = {a: x for a in range(self.modes if level else 0) if (x := images.get(self._amplitude(a)))}
            for k, x in linear.bracket(changes).items():
                secular[k] = x + ring.conjugate(x)
            return moved, secular

        return acted

    def snapshot(self) -> Snapshot:
        tower = self.hierarchy.tower
        ring = tower.ring
        fields = tuple(tuple(freeze(ring.write(x)) for x in level) for level in tower.jets[0])
        changes = tuple(
            tuple(freeze(ring.write(d.images.get(self._amplitude(a), ring.zero))) for a in range(self.modes))
            for d in tower.time[1:]
        )
        kept = ring.representation if isinstance(ring, ComplexRing) else "auto"
        return Snapshot(ring.spec.reciprocals, fields, changes, kept)


def _ring(canonical: Canonical, spec: RingSpec, representation: str) -> Ring:
    if canonical.operator is None or not canonical.operator.numeric:
        return make_ring(spec, representation)
    if representation not in ("auto", "complex", "mpmath"):
        raise ProblemError(
            f"representation is {representation!r}, but the natural frequencies have no closed form: the coefficients "
            "can only be floating-point numbers here, representation='complex' (or 'auto') or 'mpmath'"
        )
    values = {name: x for name, x in canonical.meanings if x.is_number}
    return MpmathRing(spec, values) if representation == "mpmath" else ComplexRing(spec, values)


def _linear_part(canonical: Canonical, ring: Ring) -> LinearPart:
    bases = canonical.bases
    values = [dict(b) for b in bases.values]
    if canonical.operator is None:
        return Oscillators(bases.rates, values, bases.unit, ring)
    if isinstance(ring, ComplexRing):
        return Dense(canonical.operator, values, bases.unit, ring)
    return General(canonical.operator, values, bases.unit, ring)


def begin(canonical: Canonical, representation: str, reciprocals: Iterable[tuple[str, Frozen]] = ()) -> Computation:
    """Level 0 in a ring of the given representation."""
    more = [r for r in reciprocals if r not in canonical.spec.reciprocals]
    ring = _ring(canonical, canonical.spec.with_reciprocals(more), representation)
    bases, drives = canonical.bases, canonical.drives
    linear = _linear_part(canonical, ring)
    turning = [*bases.rates, *(d.rate for d in drives)]
    frequencies = {
        pair[0]: freeze(ring.write(linear.value(rate)))
        for pair, rate in zip(canonical.spec.pairs, turning, strict=True)
    }
    detunings = {d.generator: d.detunings for d in drives}
    clock = Clock(ring, frequencies, [d.rate for d in drives], detunings, dict(canonical.slow), canonical.moduli)
    return Computation(canonical, start(ring, linear, _force(canonical, ring), clock))


def _force(canonical: Canonical, ring: Ring) -> Force:
    """The polynomial terms, and the projected ones where there are any."""
    if not any(t.factors and t.factors[0][1] == LAW for terms in canonical.force for t in terms):
        return PolynomialForce(canonical.force, ring)
    plain, projected = [], []
    for terms in canonical.force:
        laws = [t for t in terms if t.factors and t.factors[0][1] == LAW]
        plain.append([t for t in terms if t not in laws])
        projected.append([_projected(t.power, t.coefficient, t.factors[0][0], len(plain) - 1, canonical) for t in laws])
    return Sum([PolynomialForce(plain, ring), ProjectedForce(projected, ring)])


def _projected(power: int, coefficient: Frozen, law: int, equation: int, canonical: Canonical) -> ProjectedTerm:
    waves: dict[int | None, list[Wave]] = {None: [], 0: [], 1: []}
    modes = [h.mode for h in canonical.harmonics if h.law == law]
    for h in canonical.harmonics:
        if h.law == law:
            variable = canonical.spec.pairs[h.mode][0]
            waves[h.slope].append(Wave(variable, h.number, h.real, h.imag, h.factors))
    for mean in canonical.torus:
        if (mean.law, mean.mode) == (law, equation):
            waves[None].append(Wave(canonical.spec.pairs[equation][0], 1, mean.real, mean.imag))
    slopes = WaveSlopes(modes[0], tuple(waves[0]), tuple(waves[1])) if waves[0] or waves[1] else None
    return ProjectedTerm(power, coefficient, tuple(waves[None]), slopes)


def restore(canonical: Canonical, snapshot: Snapshot, representation: str = "auto") -> Computation:
    """The computation of a snapshot; time derivatives are recomputed from the fields."""
    if representation == "auto":
        representation = snapshot.representation
    computation = begin(canonical, representation, snapshot.reciprocals)
    for field, changes in zip(snapshot.fields[1:], snapshot.changes, strict=True):
        hierarchy = computation.hierarchy
        tower: Tower = hierarchy.tower
        known = hierarchy.clock.at_level(tower.height)
        slow = {canonical.spec.pairs[a][0]: tower.ring.read(dict(x)) for a, x in enumerate(changes)}
        displacement = tuple(tower.ring.read(dict(x)) for x in field)
        followed = hierarchy.clock.followed(Derivation(slow))
        tower = tower.completed(tower.pending(known), known, displacement, followed)
        computation = replace(computation, hierarchy=replace(hierarchy, tower=tower))
    return computation
