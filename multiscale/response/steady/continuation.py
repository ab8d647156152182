"""Branches of several modes, followed along their arc by prediction and correction from the steady states found.

With u = (y/scale, λ/span) the step is ds along the tangent, then Newton's method with the shortest correction. Folds
lie where the tangent's λ changes sign, and are then located to rounding.
"""

from __future__ import annotations

from typing import Any

import numpy as np
import numpy.typing as npt

from multiscale.response.steady.newton import polished, rotation_rates, turning_jacobian
from multiscale.response.steady.search import distinct, scale_of, states_at
from multiscale.response.steady.sweep import Arc, Special, Sweep

__all__ = ["followed_arcs"]

Array = npt.NDArray[Any]
LONGEST, SHORTEST, MOST = 0.02, 1e-7, 4000
STATIONS = 7


def followed_arcs(sweep: Sweep) -> tuple[list[Arc], list[Special], list[Special]]:
    """(arcs, folds, branchings): the branches through every state found at `STATIONS` points of the sweep."""
    at = np.linspace(sweep.grid[0], sweep.grid[-1], STATIONS)
    values = sweep.values(at)
    index, y, _ = states_at(sweep.flow, values, len(at))
    sizes = scale_of(sweep.flow, tuple(np.broadcast_to(v, at.shape) for v in values), len(at))
    arcs: list[Arc] = []
    folds: list[Special] = []
    branchings: list[Special] = []
    order = sorted(range(len(index)), key=lambda k: (index[k] not in (0, STATIONS - 1), index[k]))
    for k in order:
        station = float(at[index[k]])
        if not any(_passes(sweep, arc, station, y[:, k], sizes[index[k]]) for arc in arcs):
            arcs.append(_Walk(sweep, float(sizes[index[k]]), folds, branchings).through(y[:, k], station))
    return arcs, folds, branchings


def _passes(sweep: Sweep, arc: Arc, at: float, y: Array, scale: float) -> bool:
    """Whether an arc goes through a state."""
    for k in range(len(arc.parameter) - 1):
        low, high = arc.parameter[k], arc.parameter[k + 1]
        if (low - at) * (high - at) > 0:
            continue
        share = 0.0 if low == high else (at - low) / (high - low)
        guess = arc.state[:, k] + share * (arc.state[:, k + 1] - arc.state[:, k])
        exact, _, done = polished(sweep.flow, guess, sweep.values(at), scale)
        pair = np.stack([exact, y], axis=1)
        if done and len(distinct(sweep.flow, np.zeros(2, dtype=int), pair, np.array([10 * scale]))) == 1:
            return True
    return False


class _Walk:
    """Steps along one branch."""

    def __init__(self, sweep: Sweep, scale: float, folds: list[Special], branchings: list[Special]) -> None:
        self._sweep, self._scale = sweep, scale
        self._folds, self._branchings = folds, branchings

    def through(self, y: Array, at: float) -> Arc:
        """The whole arc, both ways to the ends of the sweep or round."""
        tangent = self._tangent(y, at, None)
        if tangent[-1] < 0:
            tangent = -tangent
        ahead, turns, closed = self._one_way(y, at, tangent)
        behind, back, _ = ([(y, at)], [], False) if closed else self._one_way(y, at, -tangent)
        points = [*behind[:0:-1], *ahead]
        first = len(behind) - 1
        places = sorted([first - k for k in back] + [first + k for k in turns])
        return Arc(np.array([p[1] for p in points]), np.array([p[0] for p in points]).T, tuple(places), closed)

    def _matrix(self, y: Array, at: float) -> tuple[Array, Array]:
        """Derivative of the equations by (y, λ, ν) in scaled units, and the directions of free phases."""
        flow, values = self._sweep.flow, self._sweep.values(at)
        nu = rotation_rates(flow, y, values)
        free = [T @ y for T in flow.rotations if np.linalg.norm(T @ y) > 1e-9 * self._scale]
        columns = [
            turning_jacobian(flow, y, nu, values) * self._scale,
            self._sweep.drift(y, np.asarray(at))[:, None] * self._sweep.span,
            *(-d[:, None] for d in free),
        ]
        gauges = np.zeros((len(free), len(y) + 1 + len(free)))
        for row, d in zip(gauges, free, strict=True):
            row[: len(y)] = d / np.linalg.norm(d)
        unit = max(np.linalg.norm(columns[0]), 1e-300)
        return np.vstack([np.concatenate(columns, axis=1) / unit, gauges]), np.array(unit)

    def _tangent(self, y: Array, at: float, last: Array | None) -> Array:
        matrix, _ = self._matrix(y, at)
        null = np.linalg.svd(matrix)[2][-1][: len(y) + 1]
        null = null / np.linalg.norm(null)
        return np.asarray(-null if last is not None and null @ last < 0 else null)

    def _corrected(self, u: Array, tangent: Array) -> Array | None:
        """The point of the branch in the plane across the tangent at a prediction."""
        size = len(u) - 1
        start = u
        for _ in range(8):
            y, at = u[:size] * self._scale, float(u[size] * self._sweep.span)
            flow, values = self._sweep.flow, self._sweep.values(at)
            nu = rotation_rates(flow, y, values)
            rest = flow.rate(y, values) - sum((a * (T @ y) for T, a in zip(flow.rotations, nu, strict=True)), 0 * y)
            matrix, unit = self._matrix(y, at)
            plane = np.zeros(matrix.shape[1])
            plane[: size + 1] = tangent
            right = np.zeros(len(matrix) + 1)
            right[:size] = rest / unit
            right[-1] = tangent @ (u - start)
            step = np.linalg.lstsq(np.vstack([matrix, plane]), right, rcond=1e-13)[0][: size + 1]
            u = u - step
            if np.linalg.norm(step) < 1e-12 * (1 + np.linalg.norm(u)):
                return u
        return None

    def _turn(self, state: Array, at: float, reach: float) -> Special | None:
        """The fold near a point, or the branching where a mode comes to rest and the branch continues mirrored."""
        found = self._sweep.fold_near(state, at, self._scale)
        if found is None or np.linalg.norm(found.state - state) > reach:
            return None
        own, there = (np.hypot(y[::2], y[1::2]) for y in (state, found.state))
        resting = (there < 1e-5 * self._scale) & (own > 1e-2 * reach)
        if resting.any():
            found = self._sweep.special(found.parameter, np.where(np.repeat(resting, 2), 0.0, found.state))
            self._branchings.append(found)
        else:
            self._folds.append(found)
        return found

    def _one_way(self, y: Array, at: float, tangent: Array) -> tuple[list[tuple[Array, float]], list[int], bool]:
        sweep, scale, span = self._sweep, self._scale, self._sweep.span
        low, high = sweep.grid[0], sweep.grid[-1]
        points, turns, step = [(y, at)], list[int](), LONGEST / 4
        u = np.append(y / scale, at / span)
        begin, travelled = u, 0.0
        while len(points) < MOST and step > SHORTEST:
            found = self._corrected(u + step * tangent, tangent)
            after = None if found is None else self._tangent(found[:-1] * scale, float(found[-1] * span), tangent)
            if found is None or after is None or after @ tangent < 0.97 or np.linalg.norm(found - u) > 2 * step:
                step /= 2
                continue
            state, parameter = found[:-1] * scale, float(found[-1] * span)
            if not low <= parameter <= high:
                edge = float(low if parameter < low else high)
                share = (edge - points[-1][1]) / (parameter - points[-1][1])
                guess = points[-1][0] + share * (state - points[-1][0])
                last, _, done = polished(sweep.flow, guess, sweep.values(edge), scale)
                if done and edge != points[-1][1]:
                    points.append((last, edge))
                return points, turns, False
            if after[-1] * tangent[-1] < 0:
                fold = self._turn(state, parameter, 4 * step * scale)
                if fold is not None:
                    turns.append(len(points))
                    points.append((fold.state, fold.parameter))
            points.append((state, parameter))
            travelled += float(np.linalg.norm(found - u))
            u, tangent = found, after
            if travelled > 4 * step and np.linalg.norm(u - begin) < step:
                points.append((y, at))
                return points, turns, True
            step = min(1.4 * step, LONGEST)
        return points, turns, False
