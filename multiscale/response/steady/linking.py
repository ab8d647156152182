"""Branches of one mode, from all its equilibria at every point of a sweep.

A state at one point is followed to the next by Newton's method from the prediction along the tangent, forwards and
backwards; states that find each other are neighbours. Two that are left over on one side meet in a fold, which is
located and becomes an interior point of the arc. Intervals in which more happens, or in which a branch bends sharply,
are divided. Every equilibrium ends up on an arc, so isolated branches are found like all others.

What lies wholly between two values of the sweep, a pair of folds or an island, is found only where a branch is steep:
the sweep should be as fine as the narrowest feature looked for.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
import numpy.typing as npt

from multiscale.response.steady.newton import polished
from multiscale.response.steady.search import scale_of, states_at
from multiscale.response.steady.sweep import Arc, Special, Sweep

__all__ = ["linked_arcs"]

Array = npt.NDArray[Any]
ROUNDS = 10
Node = tuple[int, int]


@dataclass
class _Grid:
    """All states over the parameter, padded with nan: (points, most, 2)."""

    at: Array
    states: Array
    scale: Array


def _filled(sweep: Sweep, at: Array) -> _Grid:
    values = sweep.values(at)
    index, y, _ = states_at(sweep.flow, values, len(at))
    counts = np.bincount(index, minlength=len(at))
    position = np.arange(len(index)) - np.repeat(np.cumsum(counts) - counts, counts)
    states = np.full((len(at), max(1, int(counts.max(initial=0))), len(y)), np.nan)
    states[index, position] = y.T
    return _Grid(at, states, scale_of(sweep.flow, tuple(np.broadcast_to(v, at.shape) for v in values), len(at)))


def _merged(first: _Grid, second: _Grid) -> _Grid:
    most = max(first.states.shape[1], second.states.shape[1])
    padded = [
        np.concatenate([g.states, np.full((len(g.at), most - g.states.shape[1], g.states.shape[2]), np.nan)], axis=1)
        for g in (first, second)
    ]
    at = np.concatenate([first.at, second.at])
    order = np.argsort(at)
    return _Grid(at[order], np.concatenate(padded)[order], np.concatenate([first.scale, second.scale])[order])


def linked_arcs(sweep: Sweep) -> tuple[list[Arc], list[Special], list[Special]]:
    """(arcs, folds, branchings)."""
    grid = _filled(sweep, sweep.grid)
    for round_ in range(ROUNDS + 1):
        joints, folds, branchings, open_intervals = _joints(sweep, grid, final=round_ == ROUNDS)
        if not open_intervals:
            break
        low = np.array(open_intervals)
        fractions = np.array([0.25, 0.5, 0.75])
        between = grid.at[low, None] + fractions * (grid.at[low + 1] - grid.at[low])[:, None]
        grid = _merged(grid, _filled(sweep, between.ravel()))
    return _walked(grid, joints), folds, branchings


def _followed(sweep: Sweep, grid: _Grid, step: int) -> Array:
    """For each state the position of the one it becomes at the next point (step = 1) or the last (−1), −1 if none."""
    points, most, _size = grid.states.shape
    result = np.full((points, most), -1)
    here, slot = np.nonzero(np.isfinite(grid.states[:, :, 0]))
    inside = (here + step >= 0) & (here + step < points)
    here, slot = here[inside], slot[inside]
    y, at, then = grid.states[here, slot].T, grid.at[here], grid.at[here + step]
    scale = grid.scale[here]
    with np.errstate(all="ignore"):
        move = sweep.slope(y, at) * (then - at)
        length = np.linalg.norm(move, axis=0)
        bound = 0.3 * (np.linalg.norm(y, axis=0) + scale)
        move = np.where(np.isfinite(length), move * np.minimum(1.0, bound / np.where(length > 0, length, 1.0)), 0.0)
        found, _, converged = polished(sweep.flow, y + move, sweep.values(then), scale, 15, 0.5)
    if not sweep.flow.polynomial:
        # Dry friction holds the state of rest, where the flow has no slope.
        held = ~np.any(y, axis=0)
        found, converged = np.where(held, 0.0, found), converged | held
    distance = np.linalg.norm(grid.states[here + step] - found.T[:, None, :], axis=2)
    distance = np.where(np.isfinite(distance), distance, np.inf)
    best = np.argmin(distance, axis=1)
    near = distance[np.arange(len(here)), best] < 1e-6 * (scale + np.linalg.norm(found, axis=0))
    result[here, slot] = np.where(converged & near, best, -1)
    return result


@dataclass
class _Joints:
    """Neighbours: `left` and `right` hold for each state what follows on that side, with the point between."""

    left: dict[Node, tuple[Node, Special | None]]
    right: dict[Node, tuple[Node, Special | None]]


def _joints(sweep: Sweep, grid: _Grid, final: bool) -> tuple[_Joints, list[Special], list[Special], list[int]]:
    forwards, backwards = _followed(sweep, grid, 1), _followed(sweep, grid, -1)
    joints = _Joints({}, {})
    here, slot = np.nonzero(forwards >= 0)
    there = forwards[here, slot]
    mutual = backwards[here + 1, there] == slot
    for i, k, m in zip(here[mutual].tolist(), slot[mutual].tolist(), there[mutual].tolist(), strict=True):
        joints.right[i, k], joints.left[i + 1, m] = ((i + 1, m), None), ((i, k), None)
    bent = set() if final else _bent(sweep, grid, here[mutual], slot[mutual], there[mutual])
    present = np.isfinite(grid.states[:, :, 0])
    alone_right = present.copy()
    alone_left = present.copy()
    for node in joints.right:
        alone_right[node] = False
    for node in joints.left:
        alone_left[node] = False
    folds: list[Special] = []
    branchings: list[Special] = []
    unresolved = list(bent)
    for i in np.flatnonzero(alone_right[:-1].any(axis=1) | alone_left[1:].any(axis=1)).tolist():
        ending = [(i, int(k)) for k in np.flatnonzero(alone_right[i])]
        beginning = [(i + 1, int(k)) for k in np.flatnonzero(alone_left[i + 1])]
        if not _resolved(sweep, grid, joints, ending, beginning, folds, branchings, final):
            unresolved.append(i)
    return joints, folds, branchings, [] if final else sorted(set(unresolved))


def _bent(sweep: Sweep, grid: _Grid, i: Array, k: Array, m: Array) -> set[int]:
    """Intervals in which a branch is steeper than its ends say: it may fold there and back."""
    before, after = grid.states[i, k].T, grid.states[i + 1, m].T
    change = after - before
    with np.errstate(all="ignore"):
        width = grid.at[i + 1] - grid.at[i]
        first, second = sweep.slope(before, grid.at[i]) * width, sweep.slope(after, grid.at[i + 1]) * width
        miss, bend = np.linalg.norm((first + second) / 2 - change, axis=0), np.linalg.norm(second - first, axis=0)
    length = np.linalg.norm(change, axis=0)
    return set(i[(length > 1e-3 * grid.scale[i]) & ~((miss < 0.3 * length) & (bend < length))].tolist())


def _resolved(
    sweep: Sweep,
    grid: _Grid,
    joints: _Joints,
    ending: list[Node],
    beginning: list[Node],
    folds: list[Special],
    branchings: list[Special],
    final: bool,
) -> bool:
    """Join what is left over in one interval; False where it has to be divided."""
    if final and len(ending) == len(beginning) == 1:
        joints.right[ending[0]], joints.left[beginning[0]] = (beginning[0], None), (ending[0], None)
        return True
    if ending and beginning and not final:
        return False
    settled = True
    for nodes, side in ((ending, joints.right), (beginning, joints.left)):
        rest = list(nodes)
        while len(rest) > 1:
            first = rest.pop(0)
            met = None
            for partner in sorted(rest, key=lambda n: float(np.linalg.norm(grid.states[n] - grid.states[first]))):
                if (met := _meeting(sweep, grid, first, partner)) is not None:
                    rest.remove(partner)
                    point, is_fold = met
                    (folds if is_fold else branchings).append(point)
                    side[first], side[partner] = (partner, point), (first, point)
                    break
            settled = settled and met is not None
        settled = settled and not rest
    return settled


def _meeting(sweep: Sweep, grid: _Grid, first: Node, second: Node) -> tuple[Special, bool] | None:
    """The point at which two states of one point of the sweep meet beyond it, and whether it is a fold."""
    a, b = grid.states[first], grid.states[second]
    i, scale = first[0], float(grid.scale[first[0]])
    low, high = grid.at[max(i - 1, 0)], grid.at[min(i + 1, len(grid.at) - 1)]
    if sweep.flow.rests and np.linalg.norm(a + b) < 1e-9 * np.linalg.norm(a):
        return _branching(sweep, i, grid)
    found = sweep.fold_near((a + b) / 2, float(grid.at[i]), scale)
    margin = 1e-9 * sweep.span
    if found is None or not low - margin <= found.parameter <= high + margin:
        return None
    if np.linalg.norm(found.state - (a + b) / 2) > 1.5 * np.linalg.norm(a - b) + 1e-9 * scale:
        return None
    return found, True


def _branching(sweep: Sweep, i: int, grid: _Grid) -> tuple[Special, bool] | None:
    """Where the state of rest changes its stability next to point i: det J = 0, by bisection."""
    rest = np.zeros(grid.states.shape[2])

    def determinant(x: float) -> float:
        return float(np.linalg.det(sweep.flow.jacobian(rest, sweep.values(x))))

    for j in (i - 1, i):
        if not 0 <= j < len(grid.at) - 1:
            continue
        low, high = float(grid.at[j]), float(grid.at[j + 1])
        sign = determinant(low) > 0
        if sign == (determinant(high) > 0):
            continue
        while high - low > 4e-16 * max(abs(low), abs(high), 1e-300):
            middle = (low + high) / 2
            if middle in (low, high):
                break
            low, high = (middle, high) if (determinant(middle) > 0) == sign else (low, middle)
        return sweep.special((low + high) / 2, rest), False
    return None


def _walked(grid: _Grid, joints: _Joints) -> list[Arc]:
    """The chains of neighbours, those with ends first, by parameter and amplitude."""
    nodes = [(int(i), int(k)) for i, k in np.argwhere(np.isfinite(grid.states[:, :, 0]))]
    ends = [n for n in nodes if n not in joints.left or n not in joints.right]
    seen: set[Node] = set()
    arcs = []
    for node in [*ends, *nodes]:
        if node not in seen:
            arcs.append(_arc(grid, joints, node, seen))
    return arcs


def _arc(grid: _Grid, joints: _Joints, node: Node, seen: set[Node]) -> Arc:
    parameter, state, turns = [float(grid.at[node[0]])], [grid.states[node]], []
    seen.add(node)
    start = node
    side = joints.right if node in joints.right else joints.left
    closed = False
    while node in side:
        follower, point = side[node]
        if point is not None:
            # Beyond a fold the arc goes on the way it came.
            turns.append(len(parameter))
            parameter.append(point.parameter)
            state.append(point.state)
            side = joints.left if side is joints.right else joints.right
        closed = follower == start
        parameter.append(float(grid.at[follower[0]]))
        state.append(grid.states[follower])
        if follower in seen:
            break
        seen.add(follower)
        node = follower
    return Arc(np.array(parameter), np.array(state).T, tuple(turns), closed)
