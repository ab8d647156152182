"""Jumps: where a slow sweep of the parameter leaves a stable branch at a fold, and where it lands."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
import numpy.typing as npt

from multiscale.response.steady.branches import Branch
from multiscale.response.steady.newton import polished, reduced_eigenvalues
from multiscale.response.steady.search import scale_of
from multiscale.response.steady.sweep import Sweep

__all__ = ["Jump", "jumps"]

Array = npt.NDArray[Any]


@dataclass(frozen=True, eq=False)
class Jump:
    """A jump at `parameter` from one amplitude (of the first mode that moves) to another.

    `increasing` says whether the parameter grows when it happens. `to_state` is the stable state at the fold, the
    nearest one in amplitude where there are several.
    """

    parameter: float
    from_state: Array
    to_state: Array
    from_amplitude: float
    to_amplitude: float
    increasing: bool


def jumps(sweep: Sweep, branches: Sequence[Branch]) -> tuple[tuple[Jump, ...], tuple[Jump, ...]]:
    """(jumps up, jumps down) in amplitude."""
    up: list[Jump] = []
    down: list[Jump] = []
    for branch in branches:
        for k in branch.folds:
            if branch.spurious[k] or not (branch.stable[k - 1] or branch.stable[k + 1]):
                continue
            increasing = bool(branch.parameter[k - 1] < branch.parameter[k])
            if (jump := _jump(sweep, branches, branch, k, increasing)) is not None:
                (up if jump.to_amplitude > jump.from_amplitude else down).append(jump)
    return tuple(sorted(up, key=lambda j: j.parameter)), tuple(sorted(down, key=lambda j: j.parameter))


def _jump(sweep: Sweep, branches: Sequence[Branch], own: Branch, k: int, increasing: bool) -> Jump | None:
    at, start = float(own.parameter[k]), own.state[:, k]
    values = sweep.values(at)
    scale = float(scale_of(sweep.flow, tuple(np.full(1, v) for v in values), 1)[0])
    landings = []
    for branch in branches:
        before, after = branch.parameter[:-1], branch.parameter[1:]
        for j in np.flatnonzero((before - at) * (after - at) <= 0).tolist():
            usable = (branch.stable[j] or branch.stable[j + 1]) and not branch.spurious[j]
            if not usable or (branch is own and k in (j, j + 1)):
                continue
            share = 0.0 if after[j] == before[j] else (at - before[j]) / (after[j] - before[j])
            guess = branch.state[:, j] + share * (branch.state[:, j + 1] - branch.state[:, j])
            y, nu, done = polished(sweep.flow, guess, values, scale)
            if not done:
                continue
            eigenvalues = reduced_eigenvalues(sweep.flow, y, nu, values)
            # Folds of equivalent branches lie at the same parameter: their vanishing eigenvalue is no stability.
            if np.max(eigenvalues.real) < -1e-6 * np.max(abs(eigenvalues)):
                landings.append(y)
    distance = [float(np.linalg.norm(y - start)) for y in landings]
    landings = [y for y, d in zip(landings, distance, strict=True) if d > 1e-6 * scale]
    if not landings:
        return None
    amplitude = sweep.flow.polar(start)[0]
    landed = min(landings, key=lambda y: float(np.linalg.norm(sweep.flow.polar(y)[0] - amplitude)))
    reached = sweep.flow.polar(landed)[0]
    mode = int(np.argmax(abs(reached - amplitude)))
    return Jump(at, start, landed, float(amplitude[mode]), float(reached[mode]), increasing)
