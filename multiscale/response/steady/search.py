"""All steady states at given parameters, for one point or for every point of a sweep.

One driven mode: by elimination, complete. One mode without phases: the positive roots of the polynomial a'/a in a²,
complete. Several modes: Newton's method from many seeded starts, which proves nothing about what it did not find.
Forces that are not polynomial: by a scan over the amplitude of one mode, by seeded starts otherwise.
"""

from __future__ import annotations

import itertools
from typing import Any

import numpy as np
import numpy.typing as npt

from multiscale.errors import EvaluationError
from multiscale.response.steady.amplitude_scan import held_at_rest, scanned_starts, typical_amplitude
from multiscale.response.steady.elimination import candidates, natural_scale
from multiscale.response.steady.newton import polished, turning_jacobian
from multiscale.response.steady.steady_flow import SteadyFlow

__all__ = ["distinct", "refuse_continua", "scale_of", "states_at"]

Array = npt.NDArray[Any]
STARTS = 600
FEW_STARTS = 24
"""For averages over several phases, of which each takes milliseconds."""
SEED = 20240229
SAME = 1e-7


def _one_mode_terms(flow: SteadyFlow, values: tuple[Any, ...], points: int) -> tuple[dict[Any, Array], dict[Any, int]]:
    terms: dict[tuple[int, int], Array] = {}
    levels: dict[tuple[int, int], int] = {}
    for (n, _, m), c in flow.coefficients(values).items():
        key = (m[0], m[1])
        terms[key] = terms.get(key, np.zeros(points, dtype=complex)) + c
        levels[key] = min(n, levels.get(key, n))
    return terms, levels


def scale_of(flow: SteadyFlow, values: tuple[Any, ...], points: int) -> Array:
    """A typical amplitude at each point."""
    if not flow.polynomial:
        return typical_amplitude(flow, values, points)
    if flow.modes == 1:
        return 2 * natural_scale(*_one_mode_terms(flow, values, points), points)
    sizes = np.zeros(points)
    for mode in range(flow.modes):
        terms: dict[Any, Array] = {}
        levels: dict[Any, int] = {}
        for (n, a, m), c in flow.coefficients(values).items():
            if a == mode:
                key = (sum(m), 0)
                terms[key] = terms.get(key, np.zeros(points)) + abs(c)
                levels[key] = min(n, levels.get(key, n))
        sizes = np.maximum(sizes, natural_scale(terms, levels, points))
    return 2 * sizes


def states_at(flow: SteadyFlow, values: tuple[Any, ...], points: int) -> tuple[Array, Array, bool]:
    """(index of the point, states (2n, M), whether these are all), sorted by point and by amplitude.

    Every value is a number or an array over points.
    """
    values = tuple(np.broadcast_to(np.asarray(v, dtype=float), (points,)) for v in values)
    scale = scale_of(flow, values, points)
    complete = flow.modes == 1 and flow.polynomial
    scanned = flow.modes == 1 and not flow.polynomial and not flow.several_phases
    if scanned:
        index, starts, changing = scanned_starts(flow, values, points)
        if not changing:
            raise EvaluationError(CONSERVED)
    elif not flow.polynomial:
        index, starts = _seeded(flow, points, scale, FEW_STARTS if flow.several_phases else STARTS // 3)
    elif flow.modes == 1 and flow.phases:
        terms, _ = _one_mode_terms(flow, values, points)
        _refuse_free_circles(terms)
        # Roots far above the natural scale (made by the truncation, mostly) are separated well at their own.
        far = np.maximum(scale / 2, natural_scale(terms, dict.fromkeys(terms, 1), points))
        tries = [scale / 2, far] if np.any(far > 2 * scale) else [scale / 2]
        index, amplitude = (np.concatenate(x) for x in zip(*(candidates(terms, s) for s in tries), strict=True))
        starts = np.stack([2 * amplitude.real, -2 * amplitude.imag])
    elif flow.modes == 1:
        index, starts = _limit_cycles(flow, values, points, scale)
    else:
        index, starts = _seeded(flow, points, scale)
    reach = np.inf if complete else 0.1 if scanned else 0.5
    steps = 30 if complete or scanned or flow.several_phases else 80
    y, _, converged = polished(flow, starts, tuple(v[index] for v in values), scale[index], steps, reach)
    converged &= np.linalg.norm(y, axis=0) > 1e-9 * scale[index]
    # What is left of a mode that is at rest is rounding.
    y = np.where(np.repeat(np.hypot(y[::2], y[1::2]) < 1e-13 * scale[index], 2, axis=0), 0.0, y)
    index, y = index[converged], y[:, converged]
    resting = _resting(flow, values, points)
    index = np.concatenate([resting, index])
    y = np.concatenate([np.zeros((len(y), len(resting))), y], axis=1)
    order = np.lexsort((*y[::-1], np.round(np.linalg.norm(y, axis=0) / scale[index], 9), index))
    index, y = index[order], y[:, order]
    kept = distinct(flow, index, y, scale)
    return index[kept], y[:, kept], complete


def _resting(flow: SteadyFlow, values: tuple[Any, ...], points: int) -> Array:
    """The points at which the state of zero amplitude is a steady state."""
    if flow.polynomial:
        pushed = [c for (_, _, m), c in flow.coefficients(values).items() if sum(m) == 0]
        return np.flatnonzero(~np.any(np.array(pushed) != 0, axis=0)) if pushed else np.arange(points)
    if flow.modes == 1 and not flow.several_phases:
        return np.flatnonzero(held_at_rest(flow, values, points))
    return np.flatnonzero(flow.at_rest(values, points) == 0)


def distinct(flow: SteadyFlow, index: Array, y: Array, scale: Array) -> Array:
    """The positions of the first of each set of equal states (up to cyclic phases); `index` is sorted."""
    marks = _invariants(flow, y) / scale[index]
    kept = np.ones(len(index), dtype=bool)
    bounds = np.flatnonzero(np.diff(index, prepend=-1, append=-1)) if len(index) else np.zeros(0, dtype=int)
    most = int(np.max(np.diff(bounds), initial=0))
    if most <= 64:
        for lag in range(1, most):
            same = (index[lag:] == index[:-lag]) & (np.max(abs(marks[:, lag:] - marks[:, :-lag]), axis=0) < SAME)
            kept[lag:] &= ~same
    else:
        for first, last in itertools.pairwise(bounds):
            for k in range(first + 1, last):
                earlier = first + np.flatnonzero(kept[first:k])
                kept[k] = not np.any(np.max(abs(marks[:, earlier] - marks[:, [k]]), axis=0) < SAME)
    return np.flatnonzero(kept)


def _invariants(flow: SteadyFlow, y: Array) -> Array:
    """What two states agree in when they differ by cyclic phases alone."""
    if not flow.rotations:
        return np.asarray(y)
    amplitudes, phases = flow.polar(y)
    rows = flow.expansion.computation.frame.resonant
    marks = [*amplitudes]
    for row, phase in zip(rows, phases, strict=True):
        least = np.min([amplitudes[j] for j, n in enumerate(row) if n], axis=0)
        marks += [np.where(least > 0, least * np.cos(phase), 0.0), np.where(least > 0, least * np.sin(phase), 0.0)]
    return np.asarray(np.nan_to_num(np.array(marks)))


CONSERVED = (
    "the amplitude of this flow is conserved: every amplitude is a steady state, none is isolated. Use "
    "expansion.frequency() or backbone(expansion), or give the damping a value"
)


def _refuse_free_circles(terms: dict[tuple[int, int], Array]) -> None:
    """Without drive and damping the backbone is a circle of steady states at every detuning."""
    free = np.all([c == 0 for (m, n), c in terms.items() if m - n != 1] or [np.True_], axis=0)
    bent = np.any([c != 0 for (m, n), c in terms.items() if m - n == 1 and n] or [np.False_], axis=0)
    growth = np.any([c.real != 0 for (m, n), c in terms.items() if m - n == 1] or [np.False_], axis=0)
    if np.any(free & bent & ~growth):
        raise EvaluationError(CONSERVED)


def _limit_cycles(flow: SteadyFlow, values: tuple[Any, ...], points: int, scale: Array) -> tuple[Array, Array]:
    """Starts (a, 0) from the positive roots ρ of Σ Re c_k ρ^k = a'/a."""
    terms, _ = _one_mode_terms(flow, values, points)
    index, starts = [], []
    for point in range(points):
        half = scale[point] / 2
        growth = np.zeros(1 + max((m for m, _ in terms), default=1))
        for (m, n), c in terms.items():
            growth[n] += c[point].real * half ** (m + n)
        if not growth.any():
            raise EvaluationError(CONSERVED)
        roots = np.roots(growth[::-1])
        for root in roots[(abs(roots.imag) < 1e-6 * abs(roots)) & (roots.real > 0)].real:
            index.append(point)
            starts.append(2 * half * np.sqrt(root))
    return np.array(index, dtype=int), np.stack([np.array(starts, dtype=float), np.zeros(len(starts))])


def _seeded(flow: SteadyFlow, points: int, scale: Array, count: int = STARTS) -> tuple[Array, Array]:
    """Starts of amplitudes spread over decades and of all phases, the same at every point."""
    random = np.random.default_rng(SEED)
    sizes = 10 ** random.uniform(-2.5, 1.0, (flow.modes, count))
    angles = random.uniform(0, 2 * np.pi, (flow.modes, count))
    one = np.empty((2 * flow.modes, count))
    one[::2], one[1::2] = sizes * np.cos(angles), sizes * np.sin(angles)
    index = np.repeat(np.arange(points), count)
    return index, np.tile(one, points) * scale[index]


def refuse_continua(flow: SteadyFlow, y: Array, nu: Array, values: tuple[Any, ...]) -> None:
    """Refuse a state that is one of a continuum not explained by cyclic phases."""
    matrix = turning_jacobian(flow, y, nu, values)
    directions = [T @ y for T in flow.rotations]
    free = int(np.linalg.matrix_rank(np.array(directions), tol=1e-9 * np.linalg.norm(y))) if directions else 0
    full = np.concatenate([matrix, *([-np.array(directions).T] if directions else [])], axis=1)
    sizes = np.linalg.svd(full, compute_uv=False)
    if np.linalg.norm(y) > 0 and free and sizes[-1] < 1e-10 * sizes[0]:
        raise EvaluationError(
            "steady states of this flow are not isolated (a quantity is conserved): give the damping a value, or fix "
            "the conserved quantity by integrating slow_flow.to_numpy('cartesian')"
        )
