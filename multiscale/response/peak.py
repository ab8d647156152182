"""The peak of a response: a_j largest, where  p_j dp_j/dλ + q_j dq_j/dλ = 0  along the branch."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
import numpy.typing as npt

from multiscale.errors import EvaluationError
from multiscale.response.branches import Branch
from multiscale.response.newton import polished
from multiscale.response.sweep import Sweep

__all__ = ["Peak", "peak_of"]

Array = npt.NDArray[Any]


@dataclass(frozen=True, eq=False)
class Peak:
    """The largest amplitude of a mode: where, which state, and whether it lies inside the sweep, not at an end."""

    parameter: float
    amplitude: float
    state: Array
    interior: bool


def peak_of(sweep: Sweep, branches: Sequence[Branch], mode: int) -> Peak:
    best: tuple[float, Branch, int] | None = None
    for branch in branches:
        amplitude = branch.amplitude if branch.amplitude.ndim == 1 else branch.amplitude[mode]
        allowed = np.where(branch.spurious, -np.inf, amplitude)
        k = int(np.argmax(allowed))
        if np.isfinite(allowed[k]) and (best is None or amplitude[k] > best[0]):
            best = (float(amplitude[k]), branch, k)
    if best is None:
        raise EvaluationError("there is no branch in this sweep, so no peak: widen the sweep")
    amplitude, branch, k = best
    at, y = float(branch.parameter[k]), branch.state[:, k]
    if not branch.closed and k in (0, len(branch.parameter) - 1):
        return Peak(at, amplitude, y, False)
    near = [abs(float(branch.parameter[j]) - at) for j in (k - 1, (k + 1) % len(branch.parameter))]
    refined = _refined(sweep, y, at, mode, 2 * max(near))
    if refined is None or refined[1] < amplitude * (1 - 1e-12):
        return Peak(at, amplitude, y, True)
    return Peak(*refined, True)


def _refined(sweep: Sweep, y: Array, at: float, mode: int, reach: float) -> tuple[float, float, Array] | None:
    """(parameter, amplitude, state) by bisection on the slope of the amplitude, None where it has one sign."""
    scale = float(np.linalg.norm(y))

    def slope(x: float) -> tuple[float, Array]:
        state, _, done = polished(sweep.flow, y + sweep.slope(y, np.asarray(at)) * (x - at), sweep.values(x), scale)
        if not done:
            return np.nan, state
        change = sweep.slope(state, np.asarray(x))
        return float(state[2 * mode : 2 * mode + 2] @ change[2 * mode : 2 * mode + 2]), state

    low, high = max(at - reach, float(sweep.grid[0])), min(at + reach, float(sweep.grid[-1]))
    left, right = slope(low)[0], slope(high)[0]
    while not (left > 0 > right):
        low, high = (low + at) / 2, (high + at) / 2
        if high - low < 1e-3 * reach:
            return None
        left, right = slope(low)[0], slope(high)[0]
    for _ in range(200):
        middle = (low + high) / 2
        if middle in (low, high):
            break
        if slope(middle)[0] > 0:
            low = middle
        else:
            high = middle
    middle = (low + high) / 2
    state = slope(middle)[1]
    return middle, float(np.hypot(*state[2 * mode : 2 * mode + 2])), state
