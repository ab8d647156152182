"""The peak of a response: a_j largest, where  p_j dp_j/dλ + q_j dq_j/dλ = 0  along the branch."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
import numpy.typing as npt

from multiscale.errors import EvaluationError
from multiscale.response.steady.branches import Branch
from multiscale.response.steady.newton import rotation_rates, turning_jacobian
from multiscale.response.steady.sweep import Sweep

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
    refined = _refined(sweep, branch, k, mode)
    if refined is None or not amplitude * (1 - 1e-12) <= refined[1] < 1.5 * amplitude:
        return Peak(at, amplitude, y, True)
    return Peak(*refined, True)


def _refined(sweep: Sweep, branch: Branch, k: int, mode: int) -> tuple[float, float, Array] | None:
    """(parameter, amplitude, state) by Newton's method on G = 0, ⟨y_j, τ_j⟩ = 0, τ the tangent; regular at folds."""
    flow, span = sweep.flow, sweep.span
    y, scale = branch.state[:, k], float(np.linalg.norm(branch.state[:, k]))
    after = (k + 1) % len(branch.parameter)
    along = np.append(
        (branch.state[:, after] - branch.state[:, k - 1]) / scale,
        (branch.parameter[after] - branch.parameter[k - 1]) / span,
    )
    gauges = [d / np.linalg.norm(d) for T in flow.rotations if np.linalg.norm(d := T @ y) > 1e-9 * scale]
    own = slice(2 * mode, 2 * mode + 2)

    def residual(u: Array) -> Array:
        state, at = u[:-1] * scale, float(u[-1] * span)
        values = sweep.values(at)
        nu = rotation_rates(flow, state, values)
        rest = flow.rate(state, values)
        columns = [
            turning_jacobian(flow, state, nu, values) * scale,
            sweep.drift(state, np.asarray(at))[:, None] * span,
        ]
        for T, rate in zip(flow.rotations, nu, strict=True):
            rest = rest - rate * (T @ state)
            columns.append(-(T @ state)[:, None])
        matrix = np.concatenate(columns, axis=1)
        unit = np.linalg.norm(matrix)
        rows = np.zeros((len(gauges), matrix.shape[1]))
        for row, g in zip(rows, gauges, strict=True):
            row[: len(y)] = g
        tangent = np.linalg.svd(np.vstack([matrix / unit, rows]))[2][-1][: len(u)]
        tangent = tangent * np.sign(tangent @ along) / np.linalg.norm(tangent)
        fixed = [g @ (state - y) / scale for g in gauges]
        return np.array([*(rest / unit), state[own] @ tangent[own] / scale, *fixed])

    u, last = np.append(y / scale, branch.parameter[k] / span), np.inf
    for _ in range(40):
        columns = [(residual(u + h) - residual(u - h)) / 2e-6 for h in 1e-6 * np.eye(len(u))]
        step = np.linalg.lstsq(np.array(columns).T, residual(u), rcond=1e-12)[0]
        size = float(np.linalg.norm(step))
        if not np.isfinite(size):
            return None
        u = u - step * min(1.0, 0.2 / size if size > 0 else 1.0)
        if (size < 1e-9 and size >= 0.5 * last) or size == 0:
            break
        last = size
    else:
        return None
    state = u[:-1] * scale
    return float(u[-1] * span), float(np.hypot(*state[own])), state
