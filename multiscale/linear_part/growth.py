"""Growth rates of the leading order, in floating point: the real parts of the roots of det(M s² + C s + K).

With σ = 1/s the roots are those of K σ² + C σ + M, K regular, whose companion matrix needs no inverse of M: roots at
infinity (equations of first order, or algebraic ones) become σ = 0.
"""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

import numpy as np

from multiscale.linear_part.general import FrozenMatrix, Operator

__all__ = ["leading_growth"]

INFINITE = 1e-12
"""|σ| below which a root counts as infinite, relative to the largest."""

SINGULAR = 1e14
"""Condition number beyond which a root is taken to be zero."""


def leading_growth(operator: Operator, meanings: Mapping[str, Any]) -> list[float] | None:
    """Re s for every finite root; None where the matrices contain symbols. `meanings` gives generators by name."""
    matrices = [_numbers(x, meanings) for x in (operator.mass, operator.damping, operator.stiffness)]
    if any(x is None for x in matrices):
        return None
    mass, damping, stiffness = matrices
    size = len(operator.mass)
    if np.linalg.cond(stiffness) > SINGULAR:
        return None
    inverse = np.linalg.inv(stiffness)
    companion = np.block([[-inverse @ damping, -inverse @ mass], [np.eye(size), np.zeros((size, size))]])
    roots = np.linalg.eigvals(companion)
    finite = roots[np.abs(roots) > INFINITE * np.abs(roots).max()]
    return [float(x) for x in (1 / finite).real]


def _numbers(matrix: FrozenMatrix, meanings: Mapping[str, Any]) -> Any:
    rows = []
    for row in matrix:
        numbers = []
        for polynomial in row:
            total = 0.0
            for monomial, c in polynomial:
                term = float(c)
                for name, e in monomial:
                    value = meanings.get(name)
                    if value is None or value.free_symbols:
                        return None
                    term *= float(value) ** e
                total += term
            numbers.append(total)
        rows.append(numbers)
    return np.array(rows)
