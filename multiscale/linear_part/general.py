"""L_0 = M s² + C s + K with any real matrices: coupled, gyroscopic, circulatory, of first order, with decaying modes.

    U|_r = −adj(L_0(ir)) part / det(L_0(ir))                              at every rate r that is no root
    D_nA = −B^{-1} ψ^H part,   B_ba = ψ_b^H L_0'(iω) φ_a                  at the rate ω of modes φ_a

and what is left at a rate ω is solved in the block L_11 of `kernel`, with no amount in the references of its modes:
|2A_a| is the amplitude of the fundamental in the reference coordinate of mode a, to all orders. Decaying roots need no
code of their own: they are factors of det(L_0(ir)), complex ones, whose reciprocals are made real by their conjugates.
"""

from __future__ import annotations

from collections.abc import Iterable, Mapping, Sequence
from dataclasses import dataclass, fields
from fractions import Fraction
from typing import Any

from multiscale.algebra.matrices import adjugate, applied
from multiscale.algebra.polynomial import Frozen, Polynomial, describe
from multiscale.algebra.quotient import vanishes
from multiscale.algebra.reciprocals import inverse
from multiscale.algebra.ring import Ring
from multiscale.errors import ResonanceError
from multiscale.linear_part import Mode, Rate
from multiscale.linear_part.kernel import Block, Covectors, covectors, split_at
from multiscale.tower import Field

__all__ = ["General", "Operator", "Root"]

FrozenMatrix = tuple[tuple[Frozen, ...], ...]


@dataclass(frozen=True)
class Root:
    """A semi-simple root iω of det L_0: its rate, the block of its kernel and the shapes of its modes by component.

    `first` is the number of its first mode, None where its modes are not carried; `name` is for messages.
    """

    rate: Rate
    rows: tuple[int, ...]
    references: tuple[int, ...]
    shapes: tuple[tuple[Frozen, ...], ...]
    first: int | None
    name: str


@dataclass(frozen=True)
class Operator:
    """The matrices of L_0 and its purely imaginary roots, as data; `numeric` where these have no closed form.

    `others` counts the roots off the imaginary axis; `given` says that the user gave the roots, and that nothing is
    known of the `others`.
    """

    mass: FrozenMatrix
    damping: FrozenMatrix
    stiffness: FrozenMatrix
    roots: tuple[Root, ...]
    numeric: bool = False
    others: int = 0
    given: bool = False

    @property
    def polynomials(self) -> list[Frozen]:
        """Everything that is read into a ring."""
        matrices = [x for matrix in (self.mass, self.damping, self.stiffness) for row in matrix for x in row]
        return matrices + [x for root in self.roots for shape in root.shapes for x in shape]

    @property
    def carried(self) -> list[tuple[Root, int]]:
        """(root, number among its modes) of every mode, in order."""
        own = sorted((r for r in self.roots if r.first is not None), key=lambda r: r.first or 0)
        return [(root, k) for root in own for k in range(len(root.shapes))]


@dataclass
class _Plain:
    """A rate that is no root."""

    adjugate: list[list[Any]]
    determinant: Any
    reciprocal: Any = None


@dataclass
class _Singular:
    """The rate of a root: its block, its covectors, and the inverse bracket as adjugate and determinant."""

    block: Block
    slope: list[list[Any]]
    covectors: Covectors
    bracket_adjugate: list[list[Any]]
    bracket_determinant: Any
    reciprocal: Any = None
    block_reciprocal: Any = None


def _lifted(ring: Ring, x: Any) -> Any:
    if isinstance(x, list):
        return [_lifted(ring, y) for y in x]
    if isinstance(x, _Plain | _Singular | Block | Covectors):
        return type(x)(**{f.name: _lifted(ring, getattr(x, f.name)) for f in fields(x)})
    return x if x is None or isinstance(x, tuple) else ring.lift(x)


class General:
    """A `LinearPart`. Rates count in units of the base frequencies (polynomials by name) divided by `unit`."""

    def __init__(self, operator: Operator, bases: Sequence[Polynomial], unit: int, ring: Ring) -> None:
        self.operator, self._bases, self._unit, self._ring = operator, tuple(bases), unit, ring
        self.modes = tuple(Mode(root.rate, root.shapes[k]) for root, k in operator.carried)
        self.size = len(operator.mass)
        self._values = [ring.read({m: c * Fraction(1, unit) for m, c in base.items()}) for base in self._bases]
        self._mass, self._damping, self._stiffness = (
            [[ring.normal(ring.read(dict(x))) for x in row] for row in matrix]
            for matrix in (operator.mass, operator.damping, operator.stiffness)
        )
        self._roots = {root.rate: root for root in operator.roots}
        self._plans: dict[Rate, _Plain | _Singular] = {}

    def in_ring(self, ring: Ring) -> General:
        lifted = General(self.operator, self._bases, self._unit, ring)
        lifted._plans.update((rate, _lifted(ring, plan)) for rate, plan in self._plans.items())
        return lifted

    def value(self, rate: Rate) -> Any:
        """The frequency that a rate stands for, as a ring element."""
        total = self._ring.zero
        for count, value in zip(rate, self._values, strict=True):
            if count:
                total = total + self._ring.constant(count) * value
        return total

    def apply(self, pending: tuple[Field, Field]) -> Field:
        velocity = applied(self._ring, self._damping, pending[0])
        acceleration = applied(self._ring, self._mass, pending[1])
        return tuple(v + a for v, a in zip(velocity, acceleration, strict=True))

    def modes_at(self, rate: Rate) -> tuple[int, ...]:
        root = self._roots.get(rate)
        if root is None or root.first is None:
            return ()
        return tuple(range(root.first, root.first + len(root.shapes)))

    def matrix(self, rate: Rate) -> list[list[Any]]:
        """L_0(ir)."""
        ring, r = self._ring, self.value(rate)
        square, turn = ring.normal(r * r), ring.normal(ring.generators[0] * r)
        entries = zip(self._mass, self._damping, self._stiffness, strict=True)
        return [[ring.normal(k + turn * c - square * m) for m, c, k in zip(*rows, strict=True)] for rows in entries]

    def slope(self, rate: Rate) -> list[list[Any]]:
        """L_0'(ir) = 2ir M + C."""
        ring = self._ring
        turn = ring.normal(ring.constant(2) * ring.generators[0] * self.value(rate))
        entries = zip(self._mass, self._damping, strict=True)
        return [[ring.normal(c + turn * m) for m, c in zip(*rows, strict=True)] for rows in entries]

    def _plan(self, rate: Rate) -> _Plain | _Singular:
        if rate not in self._plans:
            # Of two opposite rates either may be asked for where the root is not carried.
            root = self._roots.get(rate) or self._roots.get(tuple(-r for r in rate))
            self._plans[rate] = self._plain(rate) if root is None else self._singular(rate, root)
        return self._plans[rate]

    def _plain(self, rate: Rate) -> _Plain:
        determinant, adjoint = adjugate(self._ring, self.matrix(rate))
        if self.operator.given and vanishes(self._ring, determinant):
            raise ResonanceError(
                f"a combination of the modes given and the drives has the frequency "
                f"{describe(self._ring.write(self.value(rate)))}, at which det L_0 vanishes: another mode has exactly "
                "this frequency (or, where it is zero, the stiffness is singular), and its response is unbounded. Give "
                "that mode in `shapes` too"
            )
        return _Plain(adjoint, determinant)

    def _singular(self, rate: Rate, root: Root) -> _Singular:
        if root.first is None:
            raise ResonanceError(
                f"a combination of the modes carried and the drives has exactly the frequency {root.name} of a mode "
                "that is not carried, whose response is unbounded: add that mode to `modes`"
            )
        ring, matrix, slope = self._ring, self.matrix(rate), self.slope(rate)
        block = split_at(ring, matrix, root.rows, root.references)
        left = covectors(ring, matrix, slope, block)
        determinant, adjoint = adjugate(ring, left.bracket)
        return _Singular(block, slope, left, adjoint, determinant)

    def divisors(self, pairs: Iterable[tuple[int, Rate]]) -> list[Any]:
        found = []
        for rate in dict.fromkeys(rate for _, rate in pairs):
            plan = self._plan(rate)
            if plan.reciprocal is None:
                found.append(plan.determinant if isinstance(plan, _Plain) else plan.bracket_determinant)
                if isinstance(plan, _Singular):
                    found.append(plan.block.determinant)
        return found

    def _solvable(self, rate: Rate) -> _Singular | None:
        """The plan at the rate of a root, its reciprocals ready; None elsewhere."""
        plan = self._plan(rate)
        if not isinstance(plan, _Singular):
            return None
        if plan.reciprocal is None:
            plan.reciprocal = inverse(self._ring, plan.bracket_determinant)
            plan.block_reciprocal = inverse(self._ring, plan.block.determinant)
        return plan

    def _column(self, part: Mapping[int, Any]) -> list[Any]:
        return [part.get(k, self._ring.zero) for k in range(self.size)]

    def project(self, part: Mapping[int, Any], rate: Rate) -> dict[int, Any]:
        plan = self._solvable(rate)
        if plan is None:
            return {}
        ring = self._ring
        sides = applied(ring, plan.covectors.rows, self._column(part))
        changes = applied(ring, plan.bracket_adjugate, sides)
        minus = -plan.reciprocal
        return {a: ring.normal(minus * x) for a, x in zip(self.modes_at(rate), changes, strict=True) if x}

    def solve(self, part: Mapping[int, Any], rate: Rate) -> dict[int, Any]:
        ring, column = self._ring, self._column(part)
        plan = self._solvable(rate)
        if plan is None:
            return self._inverted(column, rate)
        secular = self.bracket(self.project(part, rate))
        column = [ring.normal(x + secular[k]) if k in secular else x for k, x in enumerate(column)]
        inner = [x for k, x in enumerate(column) if k not in plan.block.rows]
        minus = -plan.block_reciprocal
        solved = applied(ring, plan.block.adjugate, [ring.normal(minus * x) if x else x for x in inner])
        others = [k for k in range(self.size) if k not in plan.block.references]
        return {k: x for k, x in zip(others, solved, strict=True) if x}

    def _inverted(self, column: Sequence[Any], rate: Rate) -> dict[int, Any]:
        ring, plan = self._ring, self._plan(rate)
        assert isinstance(plan, _Plain)
        if plan.reciprocal is None:
            plan.reciprocal = inverse(ring, plan.determinant)
        scaled = [ring.normal(-(plan.reciprocal * x)) if x else x for x in column]
        return {k: x for k, x in enumerate(applied(ring, plan.adjugate, scaled)) if x}

    def act(self, part: Mapping[int, Any], rate: Rate) -> dict[int, Any]:
        moved = applied(self._ring, self.matrix(rate), self._column(part))
        return {k: x for k, x in enumerate(moved) if x}

    def bracket(self, changes: Mapping[int, Any]) -> dict[int, Any]:
        ring = self._ring
        total: dict[int, Any] = {}
        for a, change in changes.items():
            shape = [ring.read(dict(x)) for x in self.modes[a].shape]
            for k, x in enumerate(applied(ring, self.slope(self.modes[a].rate), shape)):
                if x:
                    total[k] = total.get(k, ring.zero) + x * change
        return {k: ring.normal(x) for k, x in total.items()}
