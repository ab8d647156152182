"""Where the slow flow carries a state within a horizon, and its linearisation along the way, for many starts at once.

Modes that no resonant phase ties together are followed by their amplitudes alone, da/dt = Re Σ…, because their phases
turn without effect; otherwise y' = g(t, y) in the rotating frame. Classical Runge-Kutta steps of fourth order, short
against every rate of the slow flow.

Deviations are complex, η_j = δ(2A_j) with 2A_j = p_j − iq_j, and real as x = (Re η_1, Re η_2, …, Im η_1, …):

    followed in the frame      2A_j = a_j e^{iδ_j}:     x' = J(t, y) x
    followed by amplitudes     η_j relative to e^{iδ_j}, that is δa_j + i a_j δφ_j:
                               δa_j' = Σ (∂a_j'/∂a_k) δa_k,
                               (a_j δφ_j)' = (a_j'/a_j) a_j δφ_j + a_j Σ (∂δ_j'/∂a_k) δa_k
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from itertools import pairwise
from typing import Any

import numpy as np
import numpy.typing as npt

from multiscale.checks.motion import Motion

__all__ = ["NODES", "SlowPath", "phases", "slow_path"]

Array = npt.NDArray[Any]
Rate = Callable[[Any, Array], Array]
NODES = 9
PER_RATE = 6
"""Steps in the time in which a deviation may grow or turn by e."""
MOST = 6000


@dataclass(frozen=True, eq=False)
class SlowPath:
    """Evenly spaced `times` (NODES,), `states` y (n, NODES) + S there, and the steps between them.

    `pieces` are the variables followed, (variables, 2m + 1) + S for each piece between nodes, its ends included; `lead`
    makes of them the phase factors (modes,) + B by which relative deviations are turned into those of the frame, and
    `tangent` the matrix (n, n) + B by which deviations change, both at times of shape B. `shifts` (modes, NODES) + S is
    dδ/dt, which the amplitudes leave out; 0 in the frame, which turns with the motion. `still`: no state changes.
    """

    times: Array
    states: Array
    pieces: tuple[Array, ...]
    lead: Callable[[Array], Array]
    tangent: Rate
    shifts: Array
    still: bool


@dataclass(frozen=True, eq=False)
class _Followed:
    """Variables followed from `start`; `back` makes y of them, `change` the largest rate of change of a deviation."""

    start: Array
    rate: Rate
    tangent: Rate
    back: Callable[[Array], Array]
    lead: Callable[[Array], Array]
    shift: Callable[[Array], Array]

    def change(self, x: Array) -> Array:
        return np.asarray(np.sqrt(np.sum(self.tangent(0.0, x) ** 2, axis=(0, 1))))


def slow_path(motion: Motion, start: Array, horizon: float) -> SlowPath:
    """The path of starts (n,) + S; nan where it cannot be followed that far."""
    times = np.linspace(0.0, horizon, NODES)
    free = motion.expansion.slow_flow.autonomous and not motion.expansion.computation.frame.resonant
    followed = (_amplitudes if free else _frame)(motion, start)
    with np.errstate(all="ignore"):
        x = followed.start
        # Then deviations are polynomials in time; in the frame they may turn about a state that stays.
        still = bool(free and not np.any(followed.rate(0.0, x)))
        steps = 2
        if not still:
            fast = followed.change(x)
            lost = ~(PER_RATE * fast * horizon < MOST)
            x = np.where(lost, np.nan, x)
            if not lost.all():
                steps = max(steps, int(np.ceil(PER_RATE * float(np.max(fast[~lost])) * horizon / (NODES - 1))))
        pieces = []
        for a, b in pairwise(times):
            pieces.append(_steps(followed.rate, a, b, x, steps + steps % 2))
            x = pieces[-1][:, -1]
        nodes = np.stack([pieces[0][:, 0], *(piece[:, -1] for piece in pieces)], axis=1)
        states, shifts = followed.back(nodes), followed.shift(nodes)
        return SlowPath(times, states, tuple(pieces), followed.lead, followed.tangent, shifts, still)


def phases(y: Array) -> Array:
    """e^{iδ} of each mode, (modes,) + B, of states (n,) + B; 1 at rest."""
    complex_amplitudes = y[::2] - 1j * y[1::2]
    size = abs(complex_amplitudes)
    with np.errstate(invalid="ignore", divide="ignore"):
        return np.asarray(np.where(size > 0, complex_amplitudes / size, np.where(size == 0, 1.0, np.nan)))


def _amplitudes(motion: Motion, start: Array) -> _Followed:
    flow, modes = motion.expansion.slow_flow, len(start) // 2
    polar, slope = flow.to_numpy("polar"), flow.to_numpy("polar", wrt="state")
    direction = phases(start)

    def whole(a: Array) -> Array:
        return np.concatenate([a, np.zeros_like(a)])

    def tangent(t: Any, a: Array) -> Array:
        matrix = np.array(slope(t, whole(a), *motion.values))
        rates = polar(t, whole(a), *motion.values)[:modes]
        matrix[modes:, :modes] *= a[:, None]
        matrix[:, modes:] = 0.0
        for j in range(modes):
            matrix[modes + j, modes + j] = np.where(a[j] > 0, rates[j] / a[j], matrix[j, j])
        return matrix

    def back(a: Array) -> Array:
        turned = direction[:, None] * a
        return np.stack([turned.real, -turned.imag], axis=1).reshape(2 * modes, *a.shape[1:])

    return _Followed(
        np.hypot(start[::2], start[1::2]),
        lambda t, a: polar(t, whole(a), *motion.values)[:modes],
        tangent,
        back,
        lambda a: np.ones(a.shape, dtype=complex),
        lambda a: polar(0.0, whole(a), *motion.values)[modes:],
    )


def _frame(motion: Motion, start: Array) -> _Followed:
    flow, modes = motion.expansion.slow_flow, len(start) // 2
    slope = flow.to_numpy("cartesian", wrt="state")
    order = [*range(0, 2 * modes, 2), *range(1, 2 * modes, 2)]
    sign = np.repeat([1.0, -1.0], modes)

    def tangent(t: Any, y: Array) -> Array:
        matrix = slope(t, y, *motion.values)[np.ix_(order, order)]
        return np.asarray(matrix * np.outer(sign, sign).reshape(*matrix.shape[:2], *(1,) * (matrix.ndim - 2)))

    return _Followed(start, motion.rate, tangent, lambda y: y, phases, lambda y: np.zeros(y[::2].shape))


def _steps(rate: Rate, a: float, b: float, x: Array, count: int) -> Array:
    """States (n, count + 1) + S from a to b."""
    h = (b - a) / count
    found = np.empty((len(x), count + 1, *x.shape[1:]))
    found[:, 0] = x
    for k in range(count):
        t = a + k * h
        k1 = rate(t, x)
        k2 = rate(t + h / 2, x + h / 2 * k1)
        k3 = rate(t + h / 2, x + h / 2 * k2)
        k4 = rate(t + h, x + h * k3)
        x = x + h / 6 * (k1 + 2 * k2 + 2 * k3 + k4)
        found[:, k + 1] = x
    return found
