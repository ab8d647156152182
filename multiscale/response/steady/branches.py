"""What is known along a branch: amplitudes, phases, stability, and where the kind of stability changes."""

from __future__ import annotations

import itertools
from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
import numpy.typing as npt

from multiscale.response.steady.newton import hopf, reduced_eigenvalues, rotation_rates
from multiscale.response.steady.search import scale_of
from multiscale.response.steady.sweep import Arc, Special, Sweep
from multiscale.response.steady.truncation import spurious_reason

__all__ = ["Branch", "branch_of", "hopf_points"]

Array = npt.NDArray[Any]


@dataclass(frozen=True, eq=False, repr=False)
class Branch:
    """Steady states in the order of the arc they form.

    Attributes
    ----------
    parameter : array (K,)
    state : array (2·modes, K)
        Cartesian in the rotating frame.
    amplitude, phase : array (K,), with several modes (modes, K) and (resonant phases, K)
    eigenvalues : array (K, number), nan-padded where a mode is at rest
        Without those of the cyclic phases.
    stable, spurious : array of bool (K,)
        `spurious`: states that only the truncation makes (see `Equilibrium`); decided between folds as a whole.
    folds : tuple of int
        The positions at which the branch turns back.
    closed : bool
        Whether it is an isolated loop; the last point repeats the first.
    """

    parameter: Array
    state: Array
    amplitude: Array
    phase: Array
    eigenvalues: Array
    stable: Array
    spurious: Array
    folds: tuple[int, ...]
    closed: bool

    def __repr__(self) -> str:
        return f"Branch of {len(self.parameter)} points, {len(self.folds)} folds{', closed' if self.closed else ''}"


def branch_of(sweep: Sweep, arc: Arc) -> Branch:
    """The branch on an arc."""
    flow = sweep.flow
    values = sweep.values(arc.parameter)
    amplitudes, phases = flow.polar(arc.state)
    if flow.rotations:
        nu = rotation_rates(flow, arc.state, values)
        eigenvalues = np.full((len(arc.parameter), 2 * flow.modes), np.nan, dtype=complex)
        for k in range(len(arc.parameter)):
            one = tuple(v if np.ndim(v) == 0 else v[k] for v in values)
            found = reduced_eigenvalues(flow, arc.state[:, k], nu[:, k], one)
            eigenvalues[k, : len(found)] = found
        eigenvalues = eigenvalues[:, ~np.isnan(eigenvalues).all(axis=0)]
    else:
        jacobian = np.moveaxis(flow.jacobian(arc.state, values), -1, 0)
        eigenvalues = np.linalg.eigvals(jacobian).astype(complex)
        for k in np.flatnonzero(~np.any(arc.state, axis=0)).tolist() if not flow.polynomial else ():
            one = tuple(v if np.ndim(v) == 0 else v[k] for v in values)
            eigenvalues[k] = reduced_eigenvalues(flow, arc.state[:, k], np.zeros(0), one)
        eigenvalues = np.take_along_axis(eigenvalues, np.lexsort((eigenvalues.imag, eigenvalues.real), axis=-1), -1)
    sizes = abs(eigenvalues)
    rounding = 1e-10 * np.nanmax(np.where(np.isfinite(sizes), sizes, 0.0), axis=1)
    stable = np.nanmax(eigenvalues.real, axis=1) < -rounding
    stable[list(arc.turns)] = False
    one_mode = flow.modes == 1
    branch = Branch(
        arc.parameter,
        arc.state,
        amplitudes[0] if one_mode else amplitudes,
        phases[0] if len(phases) == 1 and one_mode else phases,
        eigenvalues,
        stable,
        _spurious(sweep, arc),
        arc.turns,
        arc.closed,
    )
    for name in ("parameter", "state", "amplitude", "phase", "eigenvalues", "stable", "spurious"):
        getattr(branch, name).flags.writeable = False
    return branch


def _spurious(sweep: Sweep, arc: Arc) -> Array:
    """Asked for the middle of each stretch between folds, and its first and last third: the majority decides."""
    result = np.zeros(len(arc.parameter), dtype=bool)
    if sweep.flow.expansion.order == sweep.flow.leading:
        return result
    bounds = [0, *arc.turns, len(arc.parameter) - 1]
    for first, last in itertools.pairwise(bounds):
        probes = sorted({first + (last - first) * k // 6 for k in (1, 3, 5)})
        votes = 0
        for k in probes:
            values = sweep.values(float(arc.parameter[k]))
            votes += bool(spurious_reason(sweep.flow, arc.state[:, k], values))
        result[first : last + 1] |= 2 * votes > len(probes)
    return result


def hopf_points(sweep: Sweep, branches: Sequence[Branch]) -> tuple[Special, ...]:
    """Where the number of growing eigenvalues changes by two, located to rounding."""
    found: list[Special] = []
    for branch in branches:
        growing = np.sum(branch.eigenvalues.real > 0, axis=1)
        for k in np.flatnonzero(abs(np.diff(growing)) == 2).tolist():
            middle = float(branch.parameter[k] + branch.parameter[k + 1]) / 2
            y = (branch.state[:, k] + branch.state[:, k + 1]) / 2
            values = sweep.values(middle)
            scale = float(scale_of(sweep.flow, tuple(np.full(1, v) for v in values), 1)[0])
            located = hopf(sweep.flow, y, middle, sweep.values, scale, sweep.span)
            near = 2 * abs(branch.parameter[k + 1] - branch.parameter[k])
            if located is not None and abs(located[0] - middle) <= near:
                found.append(sweep.special(*located))
    return tuple(found)
