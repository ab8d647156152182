"""Integer lattices: Z-bases of the combinations of phases that occur."""

from __future__ import annotations

from collections.abc import Iterable, Sequence

from sympy.polys.domains import ZZ
from sympy.polys.matrices import DomainMatrix

__all__ = ["lattice_basis", "saturated_basis"]

Vector = tuple[int, ...]


def _integer_kernel(rows: list[Vector], size: int) -> list[Vector]:
    """A Z-basis of {x in Z^size : rows·x = 0}, by unimodular column operations."""
    basis = [[int(i == j) for j in range(size)] for i in range(size)]
    images = [[sum(r * x for r, x in zip(row, vector, strict=True)) for row in rows] for vector in basis]
    done = 0
    for equation in range(len(rows)):
        while True:
            active = sorted(
                (i for i in range(done, size) if images[i][equation]), key=lambda i: abs(images[i][equation])
            )
            if len(active) < 2:
                break
            pivot = active[0]
            for i in active[1:]:
                factor = images[i][equation] // images[pivot][equation]
                basis[i] = [x - factor * y for x, y in zip(basis[i], basis[pivot], strict=True)]
                images[i] = [x - factor * y for x, y in zip(images[i], images[pivot], strict=True)]
        if active:
            pivot = active[0]
            basis[done], basis[pivot] = basis[pivot], basis[done]
            images[done], images[pivot] = images[pivot], images[done]
            done += 1
    return [tuple(vector) for vector in basis[done:]]


def saturated_basis(found: Iterable[Vector], size: int) -> list[Vector]:
    """A short Z-basis of all integer vectors in the span of `found`, the last non-zero entry of each positive."""
    rows = sorted({k for k in found if any(k)})
    if not rows:
        return []
    lattice = _integer_kernel(_integer_kernel(rows, size), size)
    if len(lattice) > 1:
        matrix = DomainMatrix([list(map(ZZ, row)) for row in lattice], (len(lattice), size), ZZ)
        lattice = [tuple(int(x) for x in row) for row in matrix.lll().to_list()]
    oriented = []
    for row in sorted(lattice, key=lambda r: (sum(map(abs, r)), r)):
        last = next(x for x in reversed(row) if x)
        oriented.append(tuple(x if last > 0 else -x for x in row))
    return oriented


def lattice_basis(rows: Sequence[Vector]) -> tuple[list[Vector], list[Vector]]:
    """(basis, coordinates): a Z-basis of the lattice that `rows` span, and each row in it.

    By unimodular row operations to echelon form; a basis vector is oriented so that its first entry is positive.
    """
    basis = [list(row) for row in rows]
    done = 0
    for column in range(len(rows[0]) if rows else 0):
        while len(active := [r for r in basis[done:] if r[column]]) > 1:
            pivot = min(active, key=lambda r: abs(r[column]))
            for r in active:
                if r is not pivot:
                    factor = r[column] // pivot[column]
                    r[:] = [x - factor * y for x, y in zip(r, pivot, strict=True)]
        if active:
            place = basis.index(active[0], done)
            basis[done], basis[place] = basis[place], basis[done]
            if basis[done][column] < 0:
                basis[done] = [-x for x in basis[done]]
            done += 1
    found = [tuple(row) for row in basis[:done]]
    return found, [_coordinates(found, row) for row in rows]


def _coordinates(basis: Sequence[Vector], row: Vector) -> Vector:
    """The integers n with Σ n_i basis_i = row, for a basis in echelon form."""
    numbers, rest = [], list(row)
    for vector in basis:
        column = next(k for k, x in enumerate(vector) if x)
        n = rest[column] // vector[column]
        numbers.append(n)
        rest = [x - n * y for x, y in zip(rest, vector, strict=True)]
    return tuple(numbers)
