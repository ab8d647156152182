"""Where the slow flow carries a state within a horizon: a few states along the way, for many starts at once.

Modes that no resonant phase ties together are followed by their amplitudes alone, da/dt = Re Σ…, because their phases
turn without effect; otherwise y' = g(t, y) in the rotating frame. Classical Runge-Kutta steps of fourth order, short
against every rate of the slow flow.
"""

from __future__ import annotations

from collections.abc import Callable
from itertools import pairwise
from typing import Any

import numpy as np
import numpy.typing as npt

from multiscale.checks.motion import Motion

__all__ = ["NODES", "slow_path"]

Array = npt.NDArray[Any]
Rate = Callable[[Any, Array], Array]
NODES = 9
PER_RATE = 6
"""Steps in the time in which a deviation may grow or turn by e."""
MOST = 6000


def slow_path(motion: Motion, start: Array, horizon: float) -> tuple[Array, Array]:
    """(times (NODES,), states (n, NODES) + S) of starts (n,) + S; nan where a path cannot be followed that far."""
    times = np.linspace(0.0, horizon, NODES)
    rate, stiffness, x, back = _reduced(motion, start)
    with np.errstate(all="ignore"):
        if not np.any(rate(0.0, x)) and motion.expansion.slow_flow.autonomous:
            return times[:1], start[:, None]
        fast = stiffness(x)
        lost = ~(PER_RATE * fast * horizon < MOST)
        x = np.where(lost, np.nan, x)
        steps = NODES - 1
        if not lost.all():
            steps = max(steps, int(np.ceil(PER_RATE * float(np.max(fast[~lost])) * horizon)))
        # So many in each of the pieces between nodes.
        steps = -(-steps // (NODES - 1))
        nodes = [x]
        for a, b in pairwise(times):
            x = _steps(rate, a, b, x, steps)
            nodes.append(x)
        return times, back(np.stack(nodes, axis=1))


def _reduced(motion: Motion, start: Array) -> tuple[Rate, Callable[[Array], Array], Array, Callable[[Array], Array]]:
    """(rate, the largest rate of change at a state, start, how states are turned back into y)."""
    flow = motion.expansion.slow_flow
    modes = len(start) // 2
    if flow.autonomous and not motion.expansion.computation.frame.resonant:
        polar, slope = flow.to_numpy("polar"), flow.to_numpy("polar", wrt="state")
        amplitudes = np.hypot(start[::2], start[1::2])
        with np.errstate(invalid="ignore", divide="ignore"):
            direction = np.where(np.repeat(amplitudes, 2, axis=0) > 0, start / np.repeat(amplitudes, 2, axis=0), 0.0)

        def whole(a: Array) -> Array:
            return np.concatenate([a, np.zeros_like(a)])

        def stiffness(a: Array) -> Array:
            return _norm(slope(0.0, whole(a), *motion.values)[:modes, :modes])

        return (
            lambda t, a: polar(t, whole(a), *motion.values)[:modes],
            stiffness,
            amplitudes,
            lambda a: np.repeat(a, 2, axis=0) * direction[:, None],
        )
    tangent = flow.to_numpy("cartesian", wrt="state")
    return motion.rate, lambda y: _norm(tangent(0.0, y, *motion.values)), start, lambda y: y


def _norm(matrix: Array) -> Array:
    """The Frobenius norm over the first two axes."""
    return np.asarray(np.sqrt(np.sum(matrix**2, axis=(0, 1))))


def _steps(rate: Rate, a: float, b: float, x: Array, count: int) -> Array:
    h = (b - a) / count
    for k in range(count):
        t = a + k * h
        k1 = rate(t, x)
        k2 = rate(t + h / 2, x + h / 2 * k1)
        k3 = rate(t + h / 2, x + h / 2 * k2)
        k4 = rate(t + h, x + h * k3)
        x = x + h / 6 * (k1 + 2 * k2 + 2 * k3 + k4)
    return x
