"""Kernel of a singular matrix L = L_0(iω) by which its modes are normalised, and the bracket that says whether they are
semi-simple.

For a kernel of dimension d, d columns (the *references*) and d rows are set apart so that the block that is left,
L_11, is invertible. With the references last, L = [[L_11, L_12], [L_21, L_22]] and

    φ = [−L_11^{-1} L_12; 1],      ψ^H = [−L_21 L_11^{-1}, 1],      L_22 = L_21 L_11^{-1} L_12

so each mode has the amount 1 in its own reference and 0 in the others. The bracket ψ^H L_0'(iω) φ is regular if and
only if the root iω is semi-simple: a chain of generalised vectors makes it singular.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from itertools import combinations
from typing import Any

from multiscale.algebra.matrices import Matrix, adjugate, applied, minor, trace_of_product
from multiscale.algebra.quotient import vanishes
from multiscale.algebra.ring import Ring

__all__ = ["Block", "Covectors", "block_of", "covectors", "scaled_shapes", "split_at"]


SEARCHED = 6
"""Size of matrices up to which all rows are compared: each costs an adjugate."""


@dataclass(frozen=True)
class Block:
    """L_11 by the rows and columns it leaves out, its adjugate and its determinant."""

    rows: tuple[int, ...]
    references: tuple[int, ...]
    adjugate: list[list[Any]]
    determinant: Any


@dataclass(frozen=True)
class Covectors:
    """Multiples of the ψ^H, and their bracket with the φ times the same: what the solvability condition needs."""

    rows: list[list[Any]]
    bracket: list[list[Any]]


def split_at(ring: Ring, matrix: Matrix, rows: Sequence[int], references: Sequence[int]) -> Block:
    determinant, adjoint = adjugate(ring, minor(matrix, rows, references))
    return Block(tuple(rows), tuple(references), adjoint, determinant)


def block_of(ring: Ring, matrix: Matrix, dimension: int, preferred: Sequence[int]) -> Block | None:
    """The block for a kernel of this dimension, None where the kernel is smaller (or larger).

    References are the first possible ones in the order `preferred`; among the rows those count first that make the
    determinant shortest, or in large matrices the references' own and then the first that serve.
    """
    size = len(matrix)
    for references in combinations(preferred, dimension):
        found: list[Block] = []
        for rows in sorted(combinations(range(size), dimension), key=lambda rows: rows != tuple(sorted(references))):
            if found and size > SEARCHED:
                break
            block = split_at(ring, matrix, rows, references)
            if not vanishes(ring, block.determinant):
                found.append(block)
        if found:
            best = min(found, key=lambda b: len(ring.terms(b.determinant)))
            return best if _is_kernel(ring, matrix, best) else None
    return None


def _others(size: int, left_out: Sequence[int]) -> list[int]:
    return [k for k in range(size) if k not in left_out]


def _is_kernel(ring: Ring, matrix: Matrix, block: Block) -> bool:
    """det(L_11) L_22 = L_21 adj(L_11) L_12."""
    return all(vanishes(ring, x) for shape in scaled_shapes(ring, matrix, block) for x in applied(ring, matrix, shape))


def scaled_shapes(ring: Ring, matrix: Matrix, block: Block) -> list[list[Any]]:
    """det(L_11) φ for each reference."""
    size = len(matrix)
    rows, columns = _others(size, block.rows), _others(size, block.references)
    shapes = []
    for reference in block.references:
        inner = applied(ring, block.adjugate, [matrix[i][reference] for i in rows])
        shape = [ring.zero] * size
        shape[reference] = block.determinant
        for j, x in zip(columns, inner, strict=True):
            shape[j] = -x
        shapes.append(shape)
    return shapes


def covectors(ring: Ring, matrix: Matrix, slope: Matrix, block: Block) -> Covectors:
    """Covectors in the left kernel and their bracket with the modes, L_0'(iω) = `slope`.

    A single mode takes a row of adj(L), whose bracket is det' = tr(adj(L) L_0'): no factor of L_11 enters. Several take
    det(L_11)² times the bracket and det(L_11)² ψ^H.
    """
    left = _scaled_covectors(ring, matrix, block)
    if len(block.references) == 1:
        # adj(L) = α φ ψ^H with α = adj(L)_{reference, row}, which is det(L_11) up to its sign.
        sign = ring.constant((-1) ** (block.references[0] + block.rows[0]))
        _, adjoint = adjugate(ring, matrix)
        return Covectors([[sign * x for x in left[0]]], [[trace_of_product(ring, adjoint, slope)]])
    shapes = scaled_shapes(ring, matrix, block)
    bracket = []
    for covector in left:
        moved = [applied(ring, slope, shape) for shape in shapes]
        bracket.append([applied(ring, [covector], x)[0] for x in moved])
    scaled = [[ring.normal(block.determinant * x) for x in covector] for covector in left]
    return Covectors(scaled, bracket)


def _scaled_covectors(ring: Ring, matrix: Matrix, block: Block) -> list[list[Any]]:
    """det(L_11) ψ^H for each row left out."""
    size = len(matrix)
    rows, columns = _others(size, block.rows), _others(size, block.references)
    transposed = list(zip(*block.adjugate, strict=True))
    found = []
    for row in block.rows:
        inner = applied(ring, transposed, [matrix[row][j] for j in columns])
        covector = [ring.zero] * size
        covector[row] = block.determinant
        for i, x in zip(rows, inner, strict=True):
            covector[i] = -x
        found.append(covector)
    return found
