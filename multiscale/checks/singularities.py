"""How far the Taylor series of a force can reach: the distance from rest to its nearest singularity, where simple.

    1/p(u), log p(u), p(u)**a:  p = 0        tan, sec:  p = π/2 + nπ       tanh, sech:  p = i(π/2 + nπ)
    asin, acos, atanh:  p = ±1               atan, asinh:  p = ±i          sin, cos, exp, sinh, cosh:  none

p is a polynomial of one unknown with numeric coefficients; where something else stands inside, the distance is unknown.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from typing import Any

import numpy as np
import sympy as sp

__all__ = ["singular_places"]

ENTIRE = (sp.sin, sp.cos, sp.exp, sp.sinh, sp.cosh, sp.erf, sp.erfc)
PERIODS = 3
"""Neighbours of the nearest pole of a periodic function that are looked at on either side."""


def singular_places(x: sp.Expr, u: sp.Symbol) -> np.ndarray[Any, Any] | None:
    """The complex u nearest to which x is singular, as candidates; None where that is not decided."""
    found: list[complex] = []
    for node in x.atoms(sp.Function, sp.Pow):
        if u not in node.free_symbols or isinstance(node, ENTIRE):
            if isinstance(node, ENTIRE) and not _is_decided(node.args[0], u):
                return None
            continue
        if isinstance(node, sp.Pow) and node.exp.is_Integer and node.exp > 0:
            continue
        argument = node.base if isinstance(node, sp.Pow) else node.args[0]
        values = _singular_values(node, argument, u)
        if values is None or not argument.is_polynomial(u):
            return None
        coefficients = [complex(c) for c in sp.Poly(argument, u).all_coeffs()]
        for value in values:
            found += np.roots([*coefficients[:-1], coefficients[-1] - value]).tolist()
    # What is singular at rest itself has cancelled, or the problem would have been refused.
    return np.array([z for z in found if abs(z) > 1e-12], dtype=np.complex128)


def _is_decided(argument: sp.Expr, u: sp.Symbol) -> bool:
    """An entire function of something that has its own singularities, which are looked at by themselves."""
    return u not in argument.free_symbols or argument.is_polynomial(u) or bool(argument.atoms(sp.Function, sp.Pow))


def _singular_values(node: sp.Expr, argument: sp.Expr, u: sp.Symbol) -> Sequence[complex] | None:
    """The values of the argument at which the outer function is singular; those of periodic ones nearest to rest."""
    if isinstance(node, sp.Pow):
        return [0.0] if u not in node.exp.free_symbols else None
    if isinstance(node, sp.log):
        return [0.0]
    if isinstance(node, sp.asin | sp.acos | sp.atanh):
        return [1.0, -1.0]
    if isinstance(node, sp.atan | sp.asinh):
        return [1j, -1j]
    if isinstance(node, sp.acosh):
        return [1.0, -1.0]
    lattice = {sp.tan: (1, 0.5), sp.sec: (1, 0.5), sp.cot: (1, 0), sp.csc: (1, 0)}
    lattice |= {sp.tanh: (1j, 0.5), sp.sech: (1j, 0.5), sp.coth: (1j, 0), sp.csch: (1j, 0)}
    if type(node) not in lattice:
        return None
    turn, offset = lattice[type(node)]
    at_rest = complex(argument.subs(u, 0))
    nearest = round((at_rest / turn).real / math.pi - offset)
    return [turn * math.pi * (nearest + k + offset) for k in range(-PERIODS, PERIODS + 1)]
