"""The computation behind a large model: the ordinary hierarchy over a ring of vectors.

What an `Expansion` asks of a computation is asked of the reference coordinates: field k is that of the degree of
freedom in which mode k is measured.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, replace
from functools import cache, cached_property
from typing import Any

import numpy as np
import numpy.typing as npt
import sympy as sp

from multiscale.algebra.polynomial import freeze
from multiscale.algebra.quotient import finish
from multiscale.algebra.vector_ring import VectorRing
from multiscale.clock import Clock
from multiscale.computed import Computation, Finished, Snapshot
from multiscale.errors import MultiscaleError, ResonanceError
from multiscale.forces.multilinear import Load, Matrix, MultilinearForce, Shape, WeakTerm
from multiscale.hierarchy import next_level, sorted_by_rate, start
from multiscale.large.eigenmodes import LargeMode, is_symmetric
from multiscale.large.statement import PLACES, ModelStatement, drive_place
from multiscale.linear_part.bordered import Bordered
from multiscale.linear_part.sparse import Sparse
from multiscale.problem.canonical import Canonical

__all__ = ["LargeComputation", "begin_large"]

Array = npt.NDArray[Any]


@dataclass(frozen=True)
class LargeComputation(Computation):
    """A `Computation` whose fields are vectors; `references` are the degrees of freedom shown as unknowns."""

    references: tuple[int, ...] = ()

    @property
    def unknowns(self) -> int:
        return len(self.references)

    def further(self) -> LargeComputation:
        hierarchy = next_level(self.hierarchy)
        met = {(a, rate) for _, rate in hierarchy.met for a in range(len(hierarchy.linear_part.modes))}
        return replace(self, hierarchy=replace(hierarchy, met=frozenset(met)))

    def vectors(self, level: int, derivative: int = 0) -> Mapping[Any, Array]:
        """{exponents in all generators: vector} of a field or its time derivative."""
        return self.hierarchy.tower.jets[derivative][level][0].terms  # type: ignore[no-any-return]

    @cached_property
    def _finish(self) -> Any:
        ring, tower = self.hierarchy.tower.ring, self.hierarchy.tower

        @cache
        def finished(kind: str, level: int, index: int) -> Finished:
            if kind == "change":
                return finish(ring, tower.time[level].images.get(self._amplitude(index), ring.zero))
            if kind == "flow":
                return finish(ring, self._in_frame(level, index))
            field: Any = tower.jets[int(kind)][level][0]
            return finish(ring, ring.entry(field, self.references[index]))  # type: ignore[attr-defined]

        return finished

    def forcing(self, level: int, unknown: int) -> tuple[Finished, Finished]:
        """As everywhere, the equation being that of the reference."""
        ring: Any = self.hierarchy.tower.ring
        moved, secular = (ring.entry(x[0], self.references[unknown]) for x in self._acted(level))
        return finish(ring, ring.normal(moved + secular)), finish(ring, secular)

    def snapshot(self) -> Snapshot:
        raise MultiscaleError(
            "an expansion of a large model has vectors in its fields and is not stored: reduce it again"
        )


def begin_large(
    statement: ModelStatement,
    order: int,
    matrices: Mapping[str, Any],
    modes: Sequence[LargeMode],
    shapes: Mapping[str, Sequence[Shape]],
    loads: Sequence[Array],
    tolerance: float,
    hard: bool,
) -> LargeComputation:
    """Level 0; `shapes` are the maps of each kind of term, `matrices` M, G, K. `hard` loads stand at leading order."""
    canonical = statement.canonical(order)
    ring = _ring(canonical)
    bordered = _bordered(canonical, ring, matrices, modes)
    bases, drives = canonical.bases, canonical.drives
    values = [dict(b) for b in bases.values]
    names = [f"omega_{a + 1}" for a in range(len(modes))] + [_called(d.frequency) for d in drives]
    linear = Sparse(bordered, bases.rates, values, bases.unit, names, tolerance, ring)
    force = MultilinearForce(_weak_terms(canonical, bordered, shapes, loads, hard), ring)
    turning = [*bases.rates, *(d.rate for d in drives)]
    frequencies = {
        pair[0]: freeze(ring.write(linear.value(rate)))
        for pair, rate in zip(canonical.spec.pairs, turning, strict=True)
    }
    detunings = {d.generator: d.detunings for d in drives}
    clock = Clock(ring, frequencies, [d.rate for d in drives], detunings, dict(canonical.slow), canonical.moduli)
    hierarchy = start(ring, linear, force, clock)
    _refuse_resonant_loads(hierarchy, linear)
    return LargeComputation(canonical, hierarchy, references=tuple(m.reference for m in modes))


def _called(frequency: sp.Expr) -> str:
    """The frequency of a drive in messages; "" for a constant phase."""
    if frequency == 0:
        return ""
    return f"{float(frequency):.8g}" if frequency.is_number else str(frequency)


def _ring(canonical: Canonical) -> VectorRing:
    values = {name: float(x) for name, x in canonical.meanings if x.is_number}
    for name, polynomial in canonical.spec.reciprocals:
        below = sum(float(c) * np.prod([values[g] ** e for g, e in m]) for m, c in polynomial)
        values[name] = float(1 / below)
    return VectorRing(canonical.spec, values)


def _bordered(
    canonical: Canonical, ring: VectorRing, matrices: Mapping[str, Any], modes: Sequence[LargeMode]
) -> Bordered:
    mass, gyroscopic, stiffness = matrices["M"], matrices["G"], matrices["K"]
    symmetric = gyroscopic is None and is_symmetric(mass) and is_symmetric(stiffness)
    own = tuple(m.frequency for m in modes)
    leading = tuple(float(w) for w in canonical.frequencies)
    leading = tuple(w if abs(w - w0) <= 1e-14 * w else w0 for w, w0 in zip(own, leading, strict=True))
    if not symmetric and own != leading:
        raise ResonanceError(
            "a relation moves the frequency of a carried mode, which is done for symmetric M and K without G only: "
            "the library splits K along the mode there"
        )
    shapes = np.stack([m.shape for m in modes], axis=1)
    references = tuple(m.reference for m in modes)
    return Bordered(mass.tocsr(), gyroscopic, stiffness.tocsr(), shapes, references, own, leading, symmetric)


def _weak_terms(
    canonical: Canonical,
    bordered: Bordered,
    shapes: Mapping[str, Sequence[Shape]],
    loads: Sequence[Array],
    hard: bool,
) -> list[WeakTerm]:
    """The terms of the statement with the maps whose places they hold, and the detunings of carried modes."""
    places = {PLACES[name]: maps for name, maps in shapes.items()}
    places |= {drive_place(d): [Load(b)] for d, b in enumerate(loads)}
    terms = []
    for j, equation in enumerate(canonical.force):
        for term in equation:
            if term.factors == ((j, 0),):
                maps: Sequence[Shape] = [Matrix(bordered.along(j), 0)]
            else:
                maps = places[term.factors]
            # A load's place is held one power of ε higher where it acts at leading order itself.
            power = term.power - (hard and isinstance(maps[0], Load))
            terms += [WeakTerm(power, term.coefficient, shape) for shape in maps]
    return terms


def _refuse_resonant_loads(hierarchy: Any, linear: Sparse) -> None:
    """A load at leading order with the frequency of a mode has no bounded response."""
    tower = hierarchy.tower
    found = sorted_by_rate(tower.ring, hierarchy.force.at_level(0, tower), hierarchy.rates)
    for rate in found:
        if linear.modes_at(rate):
            raise ResonanceError(
                f"a drive at leading order meets the natural frequency {linear.turning(rate):.10g} of a carried mode: "
                'its response is unbounded; make it small, orders={"drive": 1} or more'
            )
