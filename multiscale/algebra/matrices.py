"""Square matrices of ring elements: determinant and adjugate without division.

    A adj(A) = det(A) 1,      adj(A) = (−1)^{n−1} M_n,   det(A) = (−1)^n c_0        (Faddeev–LeVerrier)

    M_1 = 1,   c_{n−k} = −tr(A M_k)/k,   M_{k+1} = A M_k + c_{n−k} 1

Only integers are divided by, so that entries stay polynomials; zero entries cost nothing.
"""

from __future__ import annotations

from collections.abc import Sequence
from fractions import Fraction
from typing import Any, TypeAlias

from multiscale.algebra.ring import Ring

__all__ = ["Matrix", "adjugate", "applied", "minor", "product", "trace_of_product"]

Matrix: TypeAlias = Sequence[Sequence[Any]]


def _dot(ring: Ring, xs: Sequence[Any], ys: Sequence[Any]) -> Any:
    total = ring.zero
    for x, y in zip(xs, ys, strict=True):
        if x and y:
            total = total + x * y
    return ring.normal(total) if total else total


def product(ring: Ring, a: Matrix, b: Matrix) -> list[list[Any]]:
    columns = list(zip(*b, strict=True))
    return [[_dot(ring, row, column) for column in columns] for row in a]


def applied(ring: Ring, a: Matrix, x: Sequence[Any]) -> list[Any]:
    """a x for a column x."""
    return [_dot(ring, row, x) for row in a]


def trace_of_product(ring: Ring, a: Matrix, b: Matrix) -> Any:
    total = ring.zero
    for row, column in zip(a, zip(*b, strict=True), strict=True):
        total = total + _dot(ring, row, column)
    return ring.normal(total)


def minor(a: Matrix, rows: Sequence[int], columns: Sequence[int]) -> list[list[Any]]:
    """a without the given rows and columns."""
    return [[x for j, x in enumerate(row) if j not in columns] for i, row in enumerate(a) if i not in rows]


def adjugate(ring: Ring, a: Matrix) -> tuple[Any, list[list[Any]]]:
    """(det a, adj a)."""
    n = len(a)
    if not n:
        return ring.one, []
    current = [[ring.one if i == j else ring.zero for j in range(n)] for i in range(n)]
    for k in range(1, n + 1):
        moved = product(ring, a, current)
        trace = ring.zero
        for i in range(n):
            trace = trace + moved[i][i]
        coefficient = ring.normal(trace * ring.constant(Fraction(-1, k)))
        if k == n:
            break
        current = moved
        for i in range(n):
            current[i][i] = ring.normal(current[i][i] + coefficient)
    sign = ring.constant((-1) ** n)
    return coefficient * sign, [[-(sign * x) for x in row] for row in current]
