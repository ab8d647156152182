"""Equations from matrices and coefficient tensors.

    M u'' + (ε^p C + G) u' + K u + ε^q Σ Q_ijk u_j u_k + ε^r Σ T_ijkl u_j u_k u_l = ε^s f(t)

M, G and K stand at leading order; the powers p, q, r, s are `orders`. The default is the ordering of small amplitudes,
u = εU with damping of the size of the cubic terms: p = 2, q = 1, r = 2, s = 2. Without M the equations are of first
order, C u' + K u + … = 0, and C stands at leading order.
"""

from __future__ import annotations

from collections.abc import Iterator, Mapping, Sequence
from numbers import Integral
from typing import Any

import numpy as np
import sympy as sp

from multiscale.errors import ProblemError
from multiscale.problem.reading import given_expression

__all__ = ["ORDERS", "equations_of", "size_of"]

ORDERS = {"C": 2, "quadratic": 1, "cubic": 2, "drive": 2}


def equations_of(
    matrices: Mapping[str, Any],
    tensors: Mapping[str, Any],
    drive: Any,
    unknowns: Sequence[sp.Expr],
    time: sp.Symbol,
    small: sp.Symbol,
    orders: Mapping[str, int] | None,
) -> list[sp.Expr]:
    """The left-hand sides; `matrices` by the names M, C, G, K, `tensors` by quadratic and cubic, None where absent."""
    size = len(unknowns)
    powers = _powers(orders, matrices["M"] is None)
    found = {name: _matrix(name, x, size) for name, x in matrices.items() if x is not None}
    result = [sp.Integer(0)] * size
    for name, derivative in (("M", 2), ("C", 1), ("G", 1), ("K", 0)):
        if name in found:
            moving = sp.Matrix([u.diff(time, derivative) if derivative else u for u in unknowns])
            scaled = found[name] * moving * small ** powers.get(name, 0)
            result = [x + y for x, y in zip(result, scaled, strict=True)]
    for name, degree in (("quadratic", 2), ("cubic", 3)):
        for (row, *factors), c in _entries(name, tensors.get(name), size, degree + 1):
            result[row] += small ** powers[name] * c * sp.Mul(*(unknowns[k] for k in factors))
    if drive is not None:
        column = list(drive)
        if len(column) != size:
            raise ProblemError(f"drive has {len(column)} components, but the matrices have {size} rows")
        result = [x - small ** powers["drive"] * _value("drive", f) for x, f in zip(result, column, strict=True)]
    return result


def size_of(matrices: Mapping[str, Any]) -> int:
    """The number of unknowns, from whichever matrix is given."""
    given = next((x for x in matrices.values() if x is not None), None)
    if given is None:
        raise ProblemError("no matrices were given: pass at least K, with M or C")
    return len(given.tolist() if hasattr(given, "tolist") else list(given))


def _powers(orders: Mapping[str, int] | None, first_order: bool) -> dict[str, int]:
    powers = ORDERS | ({"C": 0} if first_order else {})
    for name, power in (orders or {}).items():
        if name not in ORDERS or not isinstance(power, Integral) or power < 0:
            raise ProblemError(
                f"orders has the entry {name!r}: {power!r}: expected integers ≥ 0 for {', '.join(map(repr, ORDERS))}; "
                "M, G and K stand at leading order"
            )
        powers[name] = int(power)
    return powers


def _matrix(name: str, given: Any, size: int) -> sp.Matrix:
    rows = given.tolist() if hasattr(given, "tolist") else [list(row) for row in given]
    if len(rows) != size or any(len(row) != size for row in rows):
        shape = f"{len(rows)} × {len(rows[0]) if rows else 0}"
        raise ProblemError(f"{name} is {shape}, but there are {size} unknowns: expected {size} × {size}")
    return sp.Matrix([[_value(name, x) for x in row] for row in rows])


def _value(name: str, x: Any) -> sp.Expr:
    value = given_expression(x)
    if value is None:
        raise ProblemError(f"{name} has the entry {x!r} of type {type(x).__name__}: expected a number or an expression")
    return value


def _entries(name: str, given: Any, size: int, rank: int) -> Iterator[tuple[tuple[int, ...], sp.Expr]]:
    """(indices, coefficient) of a mapping {(i, j, …): c} or of an array."""
    if given is None:
        return
    if isinstance(given, Mapping):
        items = list(given.items())
    else:
        array = np.asarray(given, dtype=object)
        if array.shape != (size,) * rank:
            raise ProblemError(
                f"{name} has the shape {array.shape}: expected {(size,) * rank}, or a mapping of entries"
            )
        items = [(place, x) for place, x in np.ndenumerate(array) if x != 0]
    for place, x in items:
        indices = tuple(place) if isinstance(place, tuple) else ()
        if len(indices) != rank or not all(isinstance(k, Integral) and int(k) in range(size) for k in indices):
            raise ProblemError(
                f"{name} has the entry {place!r}: expected {rank} indices from 0 to {size - 1}, equation first"
            )
        yield tuple(int(k) for k in indices), _value(name, x)
