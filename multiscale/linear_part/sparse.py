"""L_0 = M s² + G s + K of a large model: one equation whose coefficients are vectors, inverted by sparse solves.

`size` is 1 here: the one unknown is the whole vector of displacements, and the coefficients of its monomials are arrays
over the degrees of freedom (`algebra.vector_ring`). The modes are the few that are carried. `bordered` holds the
matrices and does the solves; this room puts monomials into columns, and looks at what a rate comes close to.

Law:  act(solve(part, r), r) + bracket(project(part, r)) + part = 0, to rounding.
"""

from __future__ import annotations

from collections.abc import Iterable, Mapping, Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
import numpy.typing as npt

from multiscale.algebra.polynomial import Polynomial
from multiscale.algebra.vector_ring import VectorElement, VectorRing, columns_of, mapped
from multiscale.errors import ResonanceError
from multiscale.linear_part import Mode, Rate
from multiscale.linear_part.bordered import RIGID, Bordered, combination, singular
from multiscale.tower import Field

__all__ = ["Near", "Sparse"]

Array = npt.NDArray[Any]
REFINED = 12
"""Steps of inverse iteration once something is near."""


@dataclass(frozen=True)
class Near:
    """A combination of frequencies close to a natural one: its name and value, the frequency, and which mode has it
    (None: one that is not carried)."""

    name: str
    value: float
    frequency: float
    mode: int | None


class Sparse:
    """A `LinearPart` over a `VectorRing`. `names` call the frequencies of the paired generators in messages.

    `near` collects what comes within `tolerance`, relative, of a rate that was solved for.
    """

    size = 1

    def __init__(
        self,
        bordered: Bordered,
        rates: Sequence[Rate],
        bases: Sequence[Polynomial],
        unit: int,
        names: Sequence[str],
        tolerance: float,
        ring: VectorRing,
    ) -> None:
        self.bordered, self._rates, self._bases, self._unit, self._ring = bordered, tuple(rates), bases, unit, ring
        self.names, self.tolerance = tuple(names), tolerance
        self.modes = tuple(Mode(rate, ((((), shape),),)) for rate, shape in zip(rates, bordered.shapes.T, strict=True))
        self._values = [float(ring.rational(ring.read(dict(base))).real) / unit for base in bases]
        self._last: tuple[Any, VectorElement, VectorElement, dict[int, VectorElement]] | None = None
        self.near: dict[tuple[Rate, int | None], Near] = {}
        self._examined: set[Rate] = set()

    def in_ring(self, ring: Any) -> Sparse:
        same = Sparse(self.bordered, self._rates, self._bases, self._unit, self.names, self.tolerance, ring)
        same.near, same._examined = self.near, self._examined
        return same

    def turning(self, rate: Rate) -> float:
        return float(sum(count * value for count, value in zip(rate, self._values, strict=True)))

    def value(self, rate: Rate) -> Any:
        return self._ring.constant(self.turning(rate))

    def modes_at(self, rate: Rate) -> tuple[int, ...]:
        return tuple(a for a, own in enumerate(self._rates) if own == rate)

    def divisors(self, pairs: Iterable[tuple[int, Rate]]) -> list[Any]:
        """None: numbers are divided by as they come."""
        return []

    def apply(self, pending: tuple[Field, Field]) -> Field:
        inertial = mapped(lambda x: self.bordered.mass @ x, pending[1][0])
        if self.bordered.gyroscopic is None:
            return (inertial,)
        return (inertial + mapped(lambda x: self.bordered.gyroscopic @ x, pending[0][0]),)

    def act(self, part: Mapping[int, Any], rate: Rate) -> dict[int, Any]:
        return {k: mapped(lambda x: self.bordered.act(self.turning(rate), x), element) for k, element in part.items()}

    def bracket(self, changes: Mapping[int, Any]) -> dict[int, Any]:
        total = self._ring.zero
        for a, change in changes.items():
            column = self.bordered.slope(self.turning(self._rates[a]), self.bordered.shapes[:, a])
            total = total + self._ring.constant(column) * change
        return {0: self._ring.normal(total)} if changes else {}

    def project(self, part: Mapping[int, Any], rate: Rate) -> dict[int, Any]:
        return self._solved(part[0], rate)[1] if self.modes_at(rate) else {}

    def solve(self, part: Mapping[int, Any], rate: Rate) -> dict[int, Any]:
        return {0: self._solved(part[0], rate)[0]}

    def _solved(self, element: VectorElement, rate: Rate) -> tuple[VectorElement, dict[int, VectorElement]]:
        """(U_n, D_nA) at one rate, from one factorisation; `project` and `solve` of one part share the work."""
        if self._last is not None and self._last[0] == rate and self._last[1] is element:
            return self._last[2], self._last[3]
        columns, part = columns_of(element)
        modes = self.modes_at(rate)
        self._look_at_carried(rate, modes, columns, part)
        try:
            found, changes = self.bordered.solve(self.turning(rate), modes, part)
            self._examine(rate, modes, columns, part)
        except RuntimeError as error:  # SuperLU met a pivot that is exactly zero.
            raise self._resonance(columns, self.turning(rate), abs(self.turning(rate))) from error
        solution = VectorElement(dict(zip(columns, np.ascontiguousarray(found.T), strict=True)))
        slow = {a: VectorElement({m: changes[j, k] for k, m in enumerate(columns)}) for j, a in enumerate(modes)}
        slow = {a: self._ring.normal(x) for a, x in slow.items()}
        self._last = (rate, element, solution, slow)
        return solution, slow

    def _examine(self, rate: Rate, modes: tuple[int, ...], columns: list[Any], part: Array) -> None:
        """What this rate is close to that is not carried, if the forcing reaches it."""
        turning = self.turning(rate)
        if rate in self._examined:
            return
        self._examined.add(rate)
        nearest = self.bordered.nearest(turning, modes, 3)
        if turning == 0 and nearest is not None and nearest.frequency**2 <= RIGID * self.bordered.scale:
            raise self._resonance(columns, 0.0, 0.0)
        if nearest is None or not self._close(turning, nearest.frequency, 4.0):
            return
        nearest = self.bordered.nearest(turning, modes, REFINED)
        if nearest is None or not self._close(turning, nearest.frequency) or not _reached(nearest.shape, part):
            return
        if singular(abs(abs(turning) - nearest.frequency), nearest.frequency):
            raise self._resonance(columns, turning, nearest.frequency)
        self.near[rate, None] = Near(self._name(columns, turning), abs(turning), nearest.frequency, None)

    def _look_at_carried(self, rate: Rate, modes: tuple[int, ...], columns: list[Any], part: Array) -> None:
        """What this rate is close to among the carried modes, or meets undeclared, if the forcing reaches it."""
        turning = self.turning(rate)
        for a, own in enumerate(self.bordered.leading):
            if a in modes or not _reached(self.bordered.shapes[:, a], part):
                continue
            if singular(abs(abs(turning) - own), own):
                name = self._name(columns, turning)
                raise ResonanceError(
                    f"the combination {name} = {abs(turning):.10g} meets omega_{a + 1}, the frequency of a carried "
                    f"mode: declare it, as in resonances={{omega_{a + 1}: {name} + epsilon*sigma}}"
                )
            if self._close(turning, own):
                self.near[rate, a] = Near(self._name(columns, turning), abs(turning), own, a)

    def _close(self, turning: float, frequency: float, factor: float = 1.0) -> bool:
        return abs(abs(turning) - frequency) < factor * self.tolerance * frequency

    def _name(self, columns: list[Any], turning: float) -> str:
        """The simplest of these monomials in words, its frequency counted positive."""
        simplest = min(columns, key=lambda m: (sum(m), m))
        return combination(simplest[self._ring.spec.first_pair :], self.names, 1 if turning >= 0 else -1)

    def _resonance(self, columns: list[Any], turning: float, frequency: float) -> ResonanceError:
        if turning == 0:
            return ResonanceError(
                "K is singular, so the response to the constant part of the forcing is not determined: hold the "
                "structure, or leave its rigid motions out"
            )
        name = self._name(columns, turning)
        number = len(self._rates) + 1
        return ResonanceError(
            f"the combination {name} = {abs(turning):.10g} meets the frequency {frequency:.10g} of a mode that is not "
            f"carried, whose response is unbounded: carry it, by adding {frequency:.10g} to `modes`, with "
            f"resonances={{omega_{number}: {name} + epsilon*sigma}}"
        )


def _reached(shape: Array, part: Array) -> bool:
    """Whether forcing has a share along a motion, beyond rounding."""
    sizes = np.linalg.norm(part, axis=0) * np.linalg.norm(shape)
    return bool(np.any(np.abs(shape.conj() @ part) > 1e-9 * sizes))
