"""Newton's method for steady states, for folds and for Hopf points.

    state            G(y) − Σ ν_c T_c y = 0
    fold             with J v = 0,  ⟨l, v⟩ = 1, the parameter λ being one more unknown
    Hopf             with J (v + i w) = iω (v + i w),  ⟨l, v + i w⟩ = 1

J − Σ ν_c T_c stands for J where phases are cyclic. Steps are the shortest that solve the linearised equations, so that
the free phases, along which states are not isolated, need no condition of their own.
"""

from __future__ import annotations

from collections.abc import Callable
from typing import Any

import numpy as np
import numpy.typing as npt

from multiscale.response.steady.steady_flow import DIFFERENCE, STEP, SteadyFlow

__all__ = ["fold", "hopf", "polished", "reduced_eigenvalues", "rotation_rates", "solve_batch", "turning_jacobian"]

Array = npt.NDArray[Any]
NEXT_TO_REST = 1e-8
Values = Callable[[Any], tuple[Any, ...]]


def solve_batch(matrix: Array, right: Array) -> Array:
    """The solutions of M x = b, arrays (rows, columns) + B and (rows,) + B; shortest where M is not square."""
    m, b = np.moveaxis(matrix, (0, 1), (-2, -1)), np.moveaxis(right, 0, -1)
    if matrix.shape[:2] == (2, 2):
        with np.errstate(divide="ignore", invalid="ignore"):
            det = m[..., 0, 0] * m[..., 1, 1] - m[..., 0, 1] * m[..., 1, 0]
            return np.stack(
                [
                    (m[..., 1, 1] * b[..., 0] - m[..., 0, 1] * b[..., 1]) / det,
                    (m[..., 0, 0] * b[..., 1] - m[..., 1, 0] * b[..., 0]) / det,
                ]
            )
    if m.shape[-1] == m.shape[-2]:
        try:
            return np.moveaxis(np.linalg.solve(m, b[..., None])[..., 0], -1, 0)
        except np.linalg.LinAlgError:
            pass
    finite: Array = np.asarray(np.isfinite(m).all(axis=(-2, -1)))
    inverse = np.linalg.pinv(np.where(finite[..., None, None], m, 0.0), rcond=1e-12)
    return np.moveaxis((inverse @ b[..., None])[..., 0], -1, 0)


def rotation_rates(flow: SteadyFlow, y: Array, values: tuple[Any, ...]) -> Array:
    """The ν_c of a state, (number of cyclic phases,) + B: by least squares, zero for a phase that is not there."""
    if not flow.rotations:
        return np.zeros((0, *y.shape[1:]))
    directions = np.stack([np.tensordot(T, y, 1) for T in flow.rotations], axis=1)
    m, rate = np.moveaxis(directions, (0, 1), (-2, -1)), np.moveaxis(flow.rate(y, values), 0, -1)
    return np.moveaxis((np.linalg.pinv(m, rcond=1e-9) @ rate[..., None])[..., 0], -1, 0)


def turning_jacobian(flow: SteadyFlow, y: Array, nu: Array, values: tuple[Any, ...]) -> Array:
    """J − Σ ν_c T_c."""
    result = flow.jacobian(y, values)
    for T, rate in zip(flow.rotations, nu, strict=True):
        result = result - T.reshape(T.shape + (1,) * (result.ndim - 2)) * rate
    return result


def polished(
    flow: SteadyFlow, y: Array, values: tuple[Any, ...], scale: Any, steps: int = 30, reach: float = np.inf
) -> tuple[Array, Array, Array]:
    """(states, ν, converged) by Newton's method from y, (2n,) + B; no step is longer than reach·(|y| + scale)."""
    nu = rotation_rates(flow, y, values)
    size = len(y)
    converged = np.zeros(y.shape[1:], dtype=bool)
    lost = np.zeros(y.shape[1:], dtype=bool)
    with np.errstate(over="ignore", invalid="ignore"):
        for _ in range(steps):
            rest, matrix = flow.rate(y, values), turning_jacobian(flow, y, nu, values)
            directions = [np.tensordot(T, y, 1) for T in flow.rotations]
            for direction, rate in zip(directions, nu, strict=True):
                rest = rest - rate * direction
            if directions:
                matrix = np.concatenate([matrix, -np.stack(directions, axis=1)], axis=1)
            step = solve_batch(matrix, rest)
            length, bound = np.linalg.norm(step[:size], axis=0), np.linalg.norm(y, axis=0) + scale
            if np.isfinite(reach):
                step = step * np.minimum(1.0, reach * bound / np.where(length > 0, length, 1.0))
            if not flow.polynomial:
                # Beyond the range of a force: not asked for again.
                lost |= ~np.isfinite(length)
                step, y, nu = np.where(lost, 0.0, step), np.where(lost, 0.0, y), np.where(lost, 0.0, nu)
            y, nu = y - step[:size], nu - step[size:]
            converged = length <= 1e-11 * np.linalg.norm(y, axis=0) + 1e-14 * np.asarray(scale)
            if np.all(converged | lost | ~np.isfinite(length)):
                break
    return y, nu, converged & ~lost


def reduced_eigenvalues(flow: SteadyFlow, y: Array, nu: Array, values: tuple[Any, ...]) -> Array:
    """Eigenvalues of one state, those of its cyclic phases left out; fewest oscillations last.

    A mode that dry friction brings to rest in finite time has −∞ twice.
    """
    # At exactly zero amplitude the average of a force counts as zero, so that rest is seen from next to it.
    shown = y if flow.polynomial else np.where(np.repeat((y[::2] == 0) & (y[1::2] == 0), 2), NEXT_TO_REST, y)
    matrix = turning_jacobian(flow, shown, nu, values)
    if not flow.polynomial and (sudden := _sudden_rates(flow, y, values)).any():
        slow = np.repeat(sudden == 0, 2)
        others = np.linalg.eigvals(matrix[np.ix_(slow, slow)]) if slow.any() else np.zeros(0)
        return np.concatenate([np.repeat(np.sort(sudden[sudden != 0]), 2), others]).astype(complex)
    directions = [d for T in flow.rotations if np.linalg.norm(d := T @ y) > 1e-9 * np.linalg.norm(y)]
    if directions:
        left, sizes, _ = np.linalg.svd(np.array(directions).T)
        across = left[:, int(np.sum(sizes > 1e-9 * sizes[0])) :]
        matrix = across.T @ matrix @ across
    found = np.linalg.eigvals(matrix).astype(complex)
    return found[np.lexsort((found.imag, found.real))]


def _sudden_rates(flow: SteadyFlow, y: Array, values: tuple[Any, ...]) -> Array:
    """∓∞ for each mode at rest whose (da/dt)/a has no limit there, 0 for the others."""
    result = np.zeros(flow.modes)
    size = max(float(np.linalg.norm(y)), 1.0)
    for k in np.flatnonzero((y[::2] == 0) & (y[1::2] == 0)).tolist():
        direction = np.zeros(len(y))
        direction[2 * k] = 1.0
        far, near = (
            float(direction @ (flow.rate(y + h * direction, values) - flow.rate(y, values))) / h
            for h in (1e-6 * size, 1e-8 * size)
        )
        if abs(near) > 4 * abs(far) and np.isfinite(near):
            result[k] = np.copysign(np.inf, near)
    return result


def _newton(
    residual: Callable[[Array], Array], x: Array, scale: Array, steps: int = 40, analytic: bool = True
) -> Array | None:
    """A root of a real system, its Jacobian by complex steps if `analytic`, else by differences; None without
    convergence.

    The last steps are taken until they no longer shrink, so that the root is as good as rounding allows.
    """
    last = np.inf
    for _ in range(steps):
        with np.errstate(all="ignore"):
            if analytic:
                value = residual(x.astype(complex)).real
                columns = [residual(x + 1j * STEP * e).imag / STEP for e in np.diag(scale)]
            else:
                value, h = residual(x), DIFFERENCE
                columns = [(residual(x + h * e) - residual(x - h * e)) / (2 * h) for e in np.diag(scale)]
        matrix = np.array(columns).T
        if not (np.isfinite(value).all() and np.isfinite(matrix).all()):
            return None
        step = np.linalg.lstsq(matrix, value, rcond=1e-13)[0]
        size = float(np.max(abs(step)))
        x = x - step * scale * min(1.0, 0.5 / size if size > 0 else 1.0)
        if (size < 1e-9 and size >= 0.5 * last) or size == 0:
            return x
        last = size
    return x if last < 1e-8 else None


def _null(matrix: Array) -> Array:
    return np.asarray(np.linalg.svd(matrix)[2][-1])


def _gauges(flow: SteadyFlow, y: Array) -> list[Array]:
    return [d / np.linalg.norm(d) for T in flow.rotations if np.linalg.norm(d := T @ y) > 1e-9 * np.linalg.norm(y)]


def fold(
    flow: SteadyFlow, y: Array, at: float, values: Values, scale: float, span: float
) -> tuple[float, Array] | None:
    """(λ, state) of the fold near a state: J v = 0 along the branch."""
    size = len(y)
    nu = rotation_rates(flow, y, values(at))
    matrix = turning_jacobian(flow, y, nu, values(at))
    gauges = _gauges(flow, y)
    direction = _null(np.vstack([matrix, *gauges]) if gauges else matrix)

    def residual(x: Array) -> Array:
        state, v, parameter, rates, turns = (
            x[:size],
            x[size : 2 * size],
            x[2 * size],
            x[2 * size + 1 : 2 * size + 1 + len(nu)],
            x[2 * size + 1 + len(nu) :],
        )
        now = values(parameter)
        jacobian = turning_jacobian(flow, state, rates, now)
        rest, turned = flow.rate(state, now), jacobian @ v
        for T, a, b in zip(flow.rotations, rates, turns, strict=True):
            rest, turned = rest - a * (T @ state), turned - b * (T @ state)
        fixed = [g @ (state - y) for g in gauges] + [g @ v for g in gauges]
        return np.concatenate([rest, turned, [direction @ v - 1], fixed])

    unit = max(float(np.linalg.norm(matrix)), 1e-300)
    start = np.concatenate([y, direction, [at], nu, np.zeros(len(nu))])
    scales = np.concatenate([np.full(size, scale), np.ones(size), [span], np.full(2 * len(nu), unit)])
    found = _newton(residual, start, scales, analytic=flow.polynomial)
    return None if found is None else (float(found[2 * size]), found[:size])


def hopf(
    flow: SteadyFlow, y: Array, at: float, values: Values, scale: float, span: float
) -> tuple[float, Array] | None:
    """(λ, state) where a pair of eigenvalues near the imaginary axis crosses it."""
    size = len(y)
    nu = rotation_rates(flow, y, values(at))
    matrix = turning_jacobian(flow, y, nu, values(at))
    numbers, vectors = np.linalg.eig(matrix)
    pair = [k for k in range(size) if numbers[k].imag > 1e-6 * np.linalg.norm(matrix)]
    if not pair:
        return None
    k = min(pair, key=lambda j: abs(numbers[j].real))
    wave, rate = vectors[:, k], numbers[k].imag
    gauges = _gauges(flow, y)

    def residual(x: Array) -> Array:
        state, v, w = x[:size], x[size : 2 * size], x[2 * size : 3 * size]
        parameter, turning, rates = x[3 * size], x[3 * size + 1], x[3 * size + 2 :]
        now = values(parameter)
        jacobian = turning_jacobian(flow, state, rates, now)
        rest = flow.rate(state, now)
        for T, a in zip(flow.rotations, rates, strict=True):
            rest = rest - a * (T @ state)
        normal = [wave.real @ v + wave.imag @ w - 1, wave.real @ w - wave.imag @ v]
        fixed = [g @ (state - y) for g in gauges]
        return np.concatenate([rest, jacobian @ v + turning * w, jacobian @ w - turning * v, normal, fixed])

    unit = max(float(np.linalg.norm(matrix)), 1e-300)
    start = np.concatenate([y, wave.real, wave.imag, [at, rate], nu])
    scales = np.concatenate([np.full(size, scale), np.ones(2 * size), [span], np.full(1 + len(nu), unit)])
    found = _newton(residual, start, scales, analytic=flow.polynomial)
    return None if found is None or found[3 * size + 1] <= 0 else (float(found[3 * size]), found[:size])
