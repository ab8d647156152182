"""Limit cycles of a mode with forces that are not polynomial, at first order: numbers instead of series.

    da/dt = ε a r(a),   dβ/dt = ε ν(a):      r(a_0) = 0,   frequency ω_0 + εν(a_0),   λ = ε a_0 r'(a_0)

The amplitude does not depend on ε at this order, so that a search at ε = 1 gives the coefficients.
"""

from __future__ import annotations

from collections.abc import Mapping

import numpy as np
import sympy as sp

from multiscale.errors import UnsupportedTermError
from multiscale.expansion import Expansion
from multiscale.response.steady.equilibria import equilibria

__all__ = ["numeric_cycles"]


def numeric_cycles(
    expansion: Expansion, values: Mapping[sp.Symbol, sp.Expr]
) -> tuple[tuple[sp.Expr, sp.Expr, bool, sp.Expr], ...]:
    """(amplitude, frequency, stable, exponent) of each cycle that a scan over the amplitude finds."""
    problem = expansion.problem
    missing = [str(s) for s in problem.parameters if s not in values]
    if missing or expansion.order > 1:
        what = f"give `parameters` values for {', '.join(missing)}" if missing else "expand to order 1"
        raise UnsupportedTermError(
            "the problem has a force that is not polynomial: its limit cycles are found as numbers, at first order: "
            f"{what}"
        )
    small, natural = problem.small, sp.S(problem.natural_frequencies[0]).subs(values)
    found = []
    for state in equilibria(expansion, {**{s: float(x) for s, x in values.items()}, small: 1.0}):
        if state.amplitudes[0] > 0:
            exponent = float(np.max(state.eigenvalues.real))
            frequency = natural + small * sp.Float(state.rates[0])
            found.append((sp.Float(state.amplitudes[0]), frequency, state.stable, sp.Float(exponent) * small))
    return tuple(found)
