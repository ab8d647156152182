"""L_0 = M s² + C s + K in floating point, for modes that have no closed form.

At the rate ω of modes φ_a with references ℓ_a, U and the D_nA come from one bordered system,

    [ L_0(iω)   L_0'(iω) φ ] [ U    ]     [ part ]
    [ ℓ^T       0          ] [ D_nA ] = − [ 0    ]

which is regular if and only if the root is semi-simple; elsewhere U = −L_0(ir)^{-1} part.
"""

from __future__ import annotations

from collections.abc import Iterable, Mapping, Sequence
from typing import Any

import numpy as np
import numpy.typing as npt

from multiscale.algebra.polynomial import Polynomial
from multiscale.algebra.ring import Ring
from multiscale.errors import ResonanceError
from multiscale.linear_part import Mode, Rate
from multiscale.linear_part.general import FrozenMatrix, Operator
from multiscale.tower import Field

__all__ = ["Dense"]

Complex = npt.NDArray[np.complex128]


class Dense:
    """A `LinearPart` over a ring whose constants are complex numbers."""

    def __init__(self, operator: Operator, bases: Sequence[Polynomial], unit: int, ring: Ring) -> None:
        self.operator, self._bases, self._unit, self._ring = operator, tuple(bases), unit, ring
        self.modes = tuple(Mode(root.rate, root.shapes[k]) for root, k in operator.carried)
        self.size = len(operator.mass)
        self._values = [self._number(ring.read(dict(base))).real / unit for base in self._bases]
        self._mass, self._damping, self._stiffness = (
            self._numbers(x) for x in (operator.mass, operator.damping, operator.stiffness)
        )
        self._roots = {root.rate: root for root in operator.roots}
        self._references = [root.references[k] for root, k in operator.carried]
        self._inverses: dict[Rate, Complex] = {}

    def _number(self, x: Any) -> complex:
        value: Any = self._ring.rational(x)
        return complex(value)

    def _numbers(self, matrix: FrozenMatrix) -> Complex:
        return np.array([[self._number(self._ring.read(dict(x))) for x in row] for row in matrix], dtype=complex)

    def in_ring(self, ring: Ring) -> Dense:
        return Dense(self.operator, self._bases, self._unit, ring)

    def _turning(self, rate: Rate) -> float:
        return float(sum(count * value for count, value in zip(rate, self._values, strict=True)))

    def value(self, rate: Rate) -> Any:
        return self._ring.constant(self._turning(rate))  # type: ignore[arg-type]

    def _matrix(self, rate: Rate) -> Complex:
        s = 1j * self._turning(rate)
        return np.asarray(s * s * self._mass + s * self._damping + self._stiffness)

    def _applied(self, matrix: Complex, column: Sequence[Any]) -> list[Any]:
        ring = self._ring
        result = []
        for row in matrix:
            total = ring.zero
            for c, x in zip(row, column, strict=True):
                if c and x:
                    total = total + ring.constant(c) * x
            result.append(ring.normal(total))
        return result

    def apply(self, pending: tuple[Field, Field]) -> Field:
        velocity = self._applied(self._damping, pending[0])
        acceleration = self._applied(self._mass, pending[1])
        return tuple(v + a for v, a in zip(velocity, acceleration, strict=True))

    def modes_at(self, rate: Rate) -> tuple[int, ...]:
        root = self._roots.get(rate)
        if root is None or root.first is None:
            return ()
        return tuple(range(root.first, root.first + len(root.shapes)))

    def divisors(self, pairs: Iterable[tuple[int, Rate]]) -> list[Any]:
        """None: numbers are divided by as they come."""
        return []

    def _shape(self, mode: int) -> Complex:
        return np.array([self._number(self._ring.read(dict(x))) for x in self.modes[mode].shape])

    def _slope(self, rate: Rate) -> Complex:
        return np.asarray(2j * self._turning(rate) * self._mass + self._damping)

    def _inverse(self, rate: Rate) -> Complex:
        """The inverse of L_0(ir), bordered at the rate of modes."""
        if rate not in self._inverses:
            mirrored = tuple(-r for r in rate)
            root = self._roots.get(rate) or self._roots.get(mirrored)
            if root is not None and root.first is None:
                raise ResonanceError(
                    f"a combination of the modes carried and the drives has exactly the frequency {root.name} of a "
                    "mode that is not carried, whose response is unbounded: add that mode to `modes`"
                )
            matrix, modes = self._matrix(rate), self.modes_at(rate)
            border = np.zeros((self.size, len(modes)), dtype=complex)
            rows = np.zeros((len(modes), self.size), dtype=complex)
            for k, a in enumerate(modes):
                border[:, k] = self._slope(rate) @ self._shape(a)
                rows[k, self._references[a]] = 1
            corner = np.zeros((len(modes), len(modes)))
            self._inverses[rate] = np.linalg.inv(np.block([[matrix, border], [rows, corner]]))
        return self._inverses[rate]

    def _column(self, part: Mapping[int, Any]) -> list[Any]:
        return [part.get(k, self._ring.zero) for k in range(self.size)]

    def project(self, part: Mapping[int, Any], rate: Rate) -> dict[int, Any]:
        modes = self.modes_at(rate)
        if not modes:
            return {}
        rows = -self._inverse(rate)[self.size :, : self.size]
        return {a: x for a, x in zip(modes, self._applied(rows, self._column(part)), strict=True) if x}

    def solve(self, part: Mapping[int, Any], rate: Rate) -> dict[int, Any]:
        rows = -self._inverse(rate)[: self.size, : self.size]
        for a in self.modes_at(rate):
            rows[self._references[a]] = 0
        return {k: x for k, x in enumerate(self._applied(rows, self._column(part))) if x}

    def act(self, part: Mapping[int, Any], rate: Rate) -> dict[int, Any]:
        return {k: x for k, x in enumerate(self._applied(self._matrix(rate), self._column(part))) if x}

    def bracket(self, changes: Mapping[int, Any]) -> dict[int, Any]:
        ring = self._ring
        total: dict[int, Any] = {}
        for a, change in changes.items():
            for k, c in enumerate(self._slope(self.modes[a].rate) @ self._shape(a)):
                if c:
                    total[k] = total.get(k, ring.zero) + ring.constant(c) * change
        return {k: ring.normal(x) for k, x in total.items()}
