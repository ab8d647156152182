"""Shapes of modes: what a kernel is, and how it is found in floating point where frequencies have no closed form.

The kernel of L_0(iω) is read off a singular value decomposition; the references are the first unknowns on which its
block is well conditioned. Both are asked of R L_0 S with diagonal R and S that make the entries of one size, so that
unknowns may be in different units: kernel of L_0 = S · kernel of R L_0 S.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from fractions import Fraction
from itertools import combinations
from typing import Any

import numpy as np
import sympy as sp

from multiscale.algebra.polynomial import Frozen
from multiscale.errors import ProblemError
from multiscale.linear_part.general import FrozenMatrix, Operator
from multiscale.problem.reading import Reader

__all__ = ["Kernel", "defective", "numeric_kernel"]

WELL_CONDITIONED = 1e-4
"""Smallest share of a mode in its reference, relative to its largest component (common practice)."""
SINGULAR = 1e-8


@dataclass(frozen=True)
class Kernel:
    """The modes at one rate: bordered rows, the unknown that each is measured in, and their shapes."""

    rows: tuple[int, ...]
    references: tuple[int, ...]
    shapes: tuple[tuple[Frozen, ...], ...]

    def arranged(self, number: int, wanted: Mapping[int, int]) -> Kernel:
        """The modes `number`, `number` + 1, … in the order that gives each its reference in `wanted`."""
        free = [u for u in self.references if u not in wanted.values()]
        order = [wanted[a] if a in wanted else free.pop(0) for a in range(number, number + len(self.references))]
        if sorted(order) != sorted(self.references):
            raise ProblemError(
                f"an unknown chosen in `references` for the modes {sorted(wanted)} does not move in them, or moves in "
                "proportion to another one chosen: choose an unknown that takes part in the mode"
            )
        places = [self.references.index(u) for u in order]
        return Kernel(self.rows, tuple(order), tuple(self.shapes[k] for k in places))


def defective(frequency: sp.Expr, multiplicity: int) -> ProblemError:
    return ProblemError(
        f"the frequency {frequency} is a root of multiplicity {multiplicity} of det L_0(s) with fewer independent "
        "shapes (a defective root, as at the onset of flutter): motions grow like t at leading order, and their "
        "amplitudes scale with fractional powers of the small parameter, which this library does not expand in. "
        "State a point beside the coalescence"
    )


def numeric_kernel(
    operator: Operator, reader: Reader, frequency: sp.Expr, multiplicity: int, preferred: Sequence[int]
) -> Kernel:
    """Shapes with 1 in their references, the first unknowns in the order `preferred` that make a well-posed choice."""
    mass, damping, stiffness = (_numbers(x, reader) for x in (operator.mass, operator.damping, operator.stiffness))
    s = 1j * float(frequency)
    rows, columns = _scales(abs(s * s * mass) + abs(s * damping) + abs(stiffness))
    slope = rows[:, None] * (2 * s * mass + damping) * columns
    left, values, right = np.linalg.svd(rows[:, None] * (s * s * mass + s * damping + stiffness) * columns)
    size, scale = len(mass), values[0] if values[0] else 1.0
    shapes, covectors = right[size - multiplicity :].conj().T, left[:, size - multiplicity :]
    if values[size - multiplicity] > SINGULAR * scale:
        raise defective(frequency, multiplicity)
    if np.linalg.svd(covectors.conj().T @ slope @ shapes)[1][-1] < SINGULAR * np.linalg.norm(slope):
        raise defective(frequency, multiplicity)
    largest = np.max(np.abs(shapes))
    for references in combinations(preferred, multiplicity):
        block = shapes[list(references)]
        if np.linalg.svd(block)[1][-1] > WELL_CONDITIONED * largest:
            scaled = (columns[:, None] * shapes) @ np.linalg.inv(columns[list(references), None] * block)
            return Kernel((), references, tuple(tuple(map(_frozen, column)) for column in scaled.T))
    raise defective(frequency, multiplicity)


def _scales(sizes: Any) -> tuple[Any, Any]:
    """Powers of two for rows and columns after which the largest entry of each is about 1."""
    rows, columns = np.ones(len(sizes)), np.ones(len(sizes))
    for _ in range(4):
        for scales, axis in ((rows, 1), (columns, 0)):
            largest = (rows[:, None] * sizes * columns).max(axis=axis)
            scales *= np.exp2(-np.round(np.log2(np.where(largest > 0, largest, 1.0)) / 2))
    return rows, columns


def _numbers(matrix: FrozenMatrix, reader: Reader) -> Any:
    entries = [[reader.expression(x).xreplace(reader.numbers) if x else sp.S.Zero for x in row] for row in matrix]
    symbols = set().union(*(x.free_symbols for row in entries for x in row))
    if symbols:
        raise ProblemError(
            "the frequencies have no closed form, and the linear part has the symbols "
            f"{', '.join(sorted(map(str, symbols)))}: give numbers for them"
        )
    return np.array([[complex(x) for x in row] for row in entries])


def _frozen(x: complex) -> Frozen:
    parts = [((), round_off(x.real, abs(x))), ((("@i", 1),), round_off(x.imag, abs(x)))]
    return tuple((m, c) for m, c in parts if c)


def round_off(part: float, size: float) -> Any:
    """A part of a complex number without what rounding left of nothing."""
    return float(part) if abs(part) > 1e-13 * max(size, 1e-3) else Fraction(0)
