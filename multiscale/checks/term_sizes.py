"""How large the terms of each level are at given amplitudes.

    size of D_nA_j:   εⁿ Σ |c| Π (a_l/2)^{p_l + q_l},       level 0: ω_j a_j/2
    size of U_n:      εⁿ Σ |c| Π (a_l/2)^{p_l + q_l}

Absolute values are summed, so a level that happens to vanish at one amplitude (D_1 on a limit cycle) is not small.
"""

from __future__ import annotations

from collections.abc import Iterable
from typing import Any

import numpy as np
import numpy.typing as npt

from multiscale.checks.motion import Motion
from multiscale.codegen.functions import coefficient_function, field_coefficient_function

__all__ = ["FLOW", "term_ratios"]

Array = npt.NDArray[Any]
FLOW = "slow flow"


def term_ratios(motion: Motion, amplitudes: Array) -> dict[str, Array]:
    """{"slow flow" or unknown: ratios of successive non-vanishing levels, (levels − 1,) + S} at (modes,) + S."""
    expansion = motion.expansion
    modes = len(amplitudes)
    flow = np.zeros((expansion.order + 1, modes, *amplitudes.shape[1:]))
    flow[0] = (motion.frequencies[:, None] * amplitudes.reshape(modes, -1) / 2).reshape(amplitudes.shape)
    _add(flow, motion, coefficient_function(expansion.problem, expansion.computation), amplitudes)
    fields = np.zeros((expansion.order + 1, len(expansion.problem.unknowns), *amplitudes.shape[1:]))
    _add(fields, motion, field_coefficient_function(expansion.problem, expansion.computation), amplitudes)
    found = {FLOW: _ratios(flow.max(axis=1))}
    found |= {str(u): _ratios(fields[:, k]) for k, u in enumerate(expansion.problem.unknowns)}
    return found


def _add(sizes: Array, motion: Motion, coefficients: tuple[Iterable[Any], Any], amplitudes: Array) -> None:
    keys, function = coefficients
    table = function(0.0, np.zeros(0), *motion.values)
    for (n, k, powers), c in zip(keys, table, strict=True):
        factors = [(a / 2) ** (powers[2 * j] + powers[2 * j + 1]) for j, a in enumerate(amplitudes)]
        sizes[n, k] += motion.small**n * float(np.hypot(*c)) * np.prod(factors, axis=0)


def _ratios(sizes: Array) -> Array:
    """Of successive levels, those left out that vanish everywhere."""
    kept = sizes[[bool(np.any(x)) for x in sizes]]
    with np.errstate(divide="ignore", invalid="ignore"):
        return kept[1:] / kept[:-1]
