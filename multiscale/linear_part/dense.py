"""L_0 = M s² + C s + K in floating point, for modes that have no closed form.

At the rate ω of modes φ_a with references ℓ_a, U and the D_nA come from one bordered system,

    [ L_0(iω)   L_0'(iω) φ ] [ U    ]     [ part ]
    [ ℓ^T       0          ] [ D_nA ] = − [ 0    ]

which is regular if and only if the root is semi-simple; elsewhere U = −L_0(ir)^{-1} part.
"""

from __future__ import annotations

from collections.abc import Iterable, Mapping, Sequence
from typing import Any

from multiscale.algebra.complex_ring import ComplexRing
from multiscale.algebra.polynomial import Polynomial, freeze
from multiscale.errors import ResonanceError
from multiscale.linear_part import Mode, Rate
from multiscale.linear_part.general import FrozenMatrix, Operator
from multiscale.tower import Field

__all__ = ["Dense"]

Numbers = list[list[Any]]


class Dense:
    """A `LinearPart` over a ring whose constants are floating-point numbers."""

    def __init__(self, operator: Operator, bases: Sequence[Polynomial], unit: int, ring: ComplexRing) -> None:
        self.operator, self._bases, self._unit, self._ring = operator, tuple(bases), unit, ring
        self.size = len(operator.mass)
        self._values = [self._number(ring.read(dict(base))) / unit for base in self._bases]
        self._mass, self._damping, self._stiffness = (
            self._numbers(x) for x in (operator.mass, operator.damping, operator.stiffness)
        )
        self._roots = {root.rate: root for root in operator.roots}
        self._references = [root.references[k] for root, k in operator.carried]
        self._inverses: dict[Rate, Numbers] = {}
        self.modes: tuple[Mode, ...] = tuple(Mode(root.rate, root.shapes[k]) for root, k in operator.carried)
        if ring.representation == "mpmath":
            # The shapes came in double precision; the border they make is good enough to find them to all digits.
            refined = [Mode(mode.rate, self._refined(a)) for a, mode in enumerate(self.modes)]
            self.modes, self._inverses = tuple(refined), {}

    def _refined(self, a: int) -> tuple[Any, ...]:
        """φ_a from L_0 φ = 0 (up to the border), ℓ_b φ = δ_ab."""
        rate = self.modes[a].rate
        column = [row[self.size + self.modes_at(rate).index(a)] for row in self._inverse(rate)[: self.size]]
        return tuple(freeze(self._ring.write(self._ring.normal(self._ring.constant(x)))) for x in column)

    def _number(self, x: Any) -> Any:
        return self._ring.rational(x)

    def _numbers(self, matrix: FrozenMatrix) -> Numbers:
        return [[self._number(self._ring.read(dict(x))) for x in row] for row in matrix]

    def in_ring(self, ring: Any) -> Dense:
        return Dense(self.operator, self._bases, self._unit, ring)

    def _turning(self, rate: Rate) -> Any:
        return sum((count * value for count, value in zip(rate, self._values, strict=True)), self._ring.number(0))

    def value(self, rate: Rate) -> Any:
        return self._ring.constant(self._turning(rate))

    def _matrix(self, rate: Rate) -> Numbers:
        s = self._ring.number(1j) * self._turning(rate)
        entries = zip(self._mass, self._damping, self._stiffness, strict=True)
        return [[s * s * m + s * c + k for m, c, k in zip(*rows, strict=True)] for rows in entries]

    def _applied(self, matrix: Numbers, column: Sequence[Any]) -> list[Any]:
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

    def _pushed(self, mode: int) -> list[Any]:
        """L_0'(iω) φ of a mode."""
        rate = self.modes[mode].rate
        shape = [self._number(self._ring.read(dict(x))) for x in self.modes[mode].shape]
        turn = 2 * self._ring.number(1j) * self._turning(rate)
        entries = zip(self._mass, self._damping, strict=True)
        return [sum((c + turn * m) * x for m, c, x in zip(*rows, shape, strict=True)) for rows in entries]

    def _inverse(self, rate: Rate) -> Numbers:
        """The inverse of L_0(ir), bordered at the rate of modes."""
        if rate not in self._inverses:
            root = self._roots.get(rate) or self._roots.get(tuple(-r for r in rate))
            if root is not None and root.first is None:
                raise ResonanceError(
                    f"a combination of the modes carried and the drives has exactly the frequency {root.name} of a "
                    "mode that is not carried, whose response is unbounded: add that mode to `modes`"
                )
            matrix, modes, zero = self._matrix(rate), self.modes_at(rate), self._ring.number(0)
            borders = [self._pushed(a) for a in modes]
            rows = [[*row, *(border[k] for border in borders)] for k, row in enumerate(matrix)]
            for a in modes:
                own = [zero] * (self.size + len(modes))
                own[self._references[a]] = self._ring.number(1)
                rows.append(own)
            self._inverses[rate] = self._ring.inverted(rows)
        return self._inverses[rate]

    def _column(self, part: Mapping[int, Any]) -> list[Any]:
        return [part.get(k, self._ring.zero) for k in range(self.size)]

    def project(self, part: Mapping[int, Any], rate: Rate) -> dict[int, Any]:
        modes = self.modes_at(rate)
        if not modes:
            return {}
        rows = [[-x for x in row[: self.size]] for row in self._inverse(rate)[self.size :]]
        return {a: x for a, x in zip(modes, self._applied(rows, self._column(part)), strict=True) if x}

    def solve(self, part: Mapping[int, Any], rate: Rate) -> dict[int, Any]:
        fixed = {self._references[a] for a in self.modes_at(rate)}
        rows = [[-x for x in row[: self.size]] for row in self._inverse(rate)[: self.size]]
        return {k: x for k, x in enumerate(self._applied(rows, self._column(part))) if x and k not in fixed}

    def act(self, part: Mapping[int, Any], rate: Rate) -> dict[int, Any]:
        return {k: x for k, x in enumerate(self._applied(self._matrix(rate), self._column(part))) if x}

    def bracket(self, changes: Mapping[int, Any]) -> dict[int, Any]:
        ring = self._ring
        total: dict[int, Any] = {}
        for a, change in changes.items():
            for k, c in enumerate(self._pushed(a)):
                if c:
                    total[k] = total.get(k, ring.zero) + ring.constant(c) * change
        return {k: ring.normal(x) for k, x in total.items()}
