"""Steady states of one mode whose coefficients depend on its amplitude, by a scan over the amplitude.

    A = ½ a W, |W| = 1:      dA/dt = Σ f_k(a) W^k = 0,      f_k(a) = Σ_{m−n=k} c_mn(a) (a/2)^{m+n}

At a fixed amplitude this is a polynomial in W alone, and a steady state is a root on the unit circle. With its roots
sorted by size, ln|W_1(a)| ≤ ln|W_2(a)| ≤ … are continuous in a, and steady states are their zeros. For one constant
drive, f_0 + f_1 W, that is |f_1(a)| = |f_0|: the phase is eliminated exactly. Without resonant phases the zeros are
those of Re f_1, the limit cycles.

The scan takes `PER_DECADE` amplitudes in every decade from 10**`LOWEST` up to where every |ln|W|| has stayed above
`FAR` for a decade, at most to 10**`HIGHEST`, or to where the force has no value any more. Intervals with a change of
sign, and those about a least |ln|W||, are divided. Two states closer than that may be missed, so nothing is claimed to
be complete.
"""

from __future__ import annotations

from math import gcd
from typing import TYPE_CHECKING, Any

import numpy as np
import numpy.typing as npt

if TYPE_CHECKING:
    from multiscale.response.steady.steady_flow import SteadyFlow

__all__ = ["held_at_rest", "scanned_starts", "typical_amplitude"]

Array = npt.NDArray[Any]
LOWEST, HIGHEST, PER_DECADE = -9, 6, 24
FAR = 3.0
PARTS, ROUNDS = 8, 3
TINY = 1e-9
SEED = 20261201
TOUCHING = 1e-3
"""A least |ln|W|| from which Newton's method is tried."""
EDGE = 50.0
"""ln|W| is cut off there: a root at 0 or at infinity."""


def harmonics(flow: SteadyFlow, a: Array, values: tuple[Any, ...]) -> dict[int, Array]:
    """{k: f_k} at amplitudes of shape B, nan where the force has no value."""
    found: dict[int, Array] = {}
    for (_, _, m), c in flow.coefficients(values, a).items():
        k = m[0] - m[1]
        found[k] = found.get(k, 0.0) + c * (a / 2) ** sum(m)
    return dict(zip(found, np.broadcast_arrays(*found.values()), strict=True))


def _roots(parts: dict[int, Array]) -> tuple[Array, int]:
    """(the roots X = W^step of Σ f_k W^k, sorted by size, shape (D,) + B; step)."""
    orders = sorted(parts)
    step = gcd(*(k - orders[0] for k in orders)) or 1
    rows = np.zeros(((orders[-1] - orders[0]) // step + 1, *next(iter(parts.values())).shape), dtype=complex)
    for k, f in parts.items():
        rows[(k - orders[0]) // step] = f
    size = np.max(abs(rows), axis=0)
    rows = rows / np.where(size > 0, size, 1.0)
    # A vanishing leading coefficient is a root at infinity.
    rows[-1] = np.where(abs(rows[-1]) < 1e-60, 1e-60, rows[-1])
    if len(rows) == 2:
        with np.errstate(invalid="ignore"):
            return -rows[:1] / rows[1:], step
    degree = len(rows) - 1
    usable: Array = np.asarray(np.isfinite(rows).all(axis=0))
    companion = np.zeros((*rows.shape[1:], degree, degree), dtype=complex)
    companion[..., 0, :] = np.where(usable, -rows[-2::-1] / rows[-1], 0).transpose(*range(1, rows.ndim), 0)
    companion[..., range(1, degree), range(degree - 1)] = 1
    found = np.where(usable[..., None], np.linalg.eigvals(companion), np.nan)
    found = np.take_along_axis(found, np.argsort(abs(found), axis=-1), -1)
    return np.moveaxis(found, -1, 0), step


def _marks(flow: SteadyFlow, a: Array, values: tuple[Any, ...]) -> Array:
    """What vanishes at steady states, (D,) + B."""
    parts = harmonics(flow, a, values)
    if not flow.phases:
        growth = parts[1]
        size = abs(growth)
        real = np.where(abs(growth.real) > 1e-12 * size, growth.real, 0.0)
        return np.asarray(real / np.where(size > 0, size, 1.0))[None]
    with np.errstate(divide="ignore"):
        logarithms = np.log(abs(_roots(parts)[0]))
    return np.asarray(np.clip(logarithms, -EDGE, EDGE))


def _collapsed(values: tuple[Any, ...]) -> tuple[Any, ...]:
    """Values that do not change over the points once only, so that averages are computed once."""
    return tuple(v[:1] if np.ndim(v) and np.all(v == v[0]) else v for v in values)


def _ladder(flow: SteadyFlow, values: tuple[Any, ...], points: int) -> tuple[Array, Array]:
    """(amplitudes (M,), marks (D, M, points)) over the whole scan."""
    decade = np.arange(PER_DECADE) / PER_DECADE
    values = _collapsed(values)

    def marks(exponents: Array) -> Array:
        found = _marks(flow, 10.0 ** exponents[:, None], values)
        return np.broadcast_to(found, (len(found), len(exponents), points))

    exponents = np.concatenate([k + decade for k in range(LOWEST, 1)])
    columns, places = [marks(exponents)], [exponents]
    for k in range(1, HIGHEST):
        last = columns[-1][:, -PER_DECADE:]
        if np.isnan(last[:, -1]).all() or (flow.phases and (np.isnan(last) | (abs(last) > FAR)).all()):
            break
        places.append(k + decade)
        columns.append(marks(places[-1]))
    return 10.0 ** np.concatenate(places), np.concatenate(columns, axis=1)


def _wanted(marks: Array) -> Array:
    """The intervals to be divided, (D, M − 1) + B: where a mark changes its sign, and about a least one."""
    size, sign = abs(marks), np.sign(marks)
    with np.errstate(invalid="ignore"):
        result = sign[:, :-1] * sign[:, 1:] < 0
        least = (size[:, 1:-1] <= size[:, :-2]) & (size[:, 1:-1] <= size[:, 2:]) & (size[:, 1:-1] < 1)
        least &= size[:, 1:-1] > 0
    result[:, :-1] |= least
    result[:, 1:] |= least
    # Up to where the force ends.
    return result | ((size[:, :-1] < 1) & np.isnan(marks[:, 1:]))


def scanned_starts(flow: SteadyFlow, values: tuple[Any, ...], points: int) -> tuple[Array, Array, bool]:
    """(index of the point, starts (2, N) for Newton's method, whether some damping or drive is there)."""
    amplitudes, marks = _ladder(flow, values, points)
    if not np.isfinite(marks).any():
        # Nowhere a value: the reason is raised here.
        flow.levels(0.0, np.ones(1), *(np.ravel(v)[0] for v in values))
    if not np.any(np.abs(marks) > 0):
        return np.zeros(0, dtype=int), np.zeros((2, 0)), False
    _, place, point = np.nonzero(_wanted(marks))
    low, high = amplitudes[place], amplitudes[place + 1]
    for _ in range(ROUNDS):
        chosen = np.unique(np.stack([low, high, point]), axis=1)
        low, high, point = chosen[0], chosen[1], chosen[2].astype(int)
        shares = np.linspace(0, 1, PARTS + 1)[:, None]
        a = low ** (1 - shares) * high**shares
        marks = _marks(flow, a, tuple(v[point] for v in values))
        order, place, column = np.nonzero(_wanted(marks))
        low, high, point = a[place, column], a[place + 1, column], point[column]
        ends = marks[order, place, column], marks[order, place + 1, column]
    crossing = ends[0] * ends[1] < 0
    kept = crossing | (np.minimum(abs(ends[0]), abs(ends[1])) < TOUCHING)
    low, high, point, order, crossing = (x[kept] for x in (low, high, point, order, crossing))
    with np.errstate(divide="ignore", invalid="ignore"):
        share = np.where(crossing, (ends[0] / (ends[0] - ends[1]))[kept], 0.5)
    a = low ** (1 - share) * high**share
    if not flow.phases:
        return point, np.stack([a, np.zeros(len(a))]), True
    roots, step = _roots(harmonics(flow, a, tuple(v[point] for v in values)))
    angle = np.angle(roots[order, np.arange(len(a))])
    turned = (angle[:, None] + 2 * np.pi * np.arange(step)) / step
    index = np.repeat(point, step)
    return index, np.repeat(a, step) * np.stack([np.cos(turned.ravel()), -np.sin(turned.ravel())]), True


def held_at_rest(flow: SteadyFlow, values: tuple[Any, ...], points: int) -> Array:
    """Whether a mode stays at rest, (points,): nothing drives it, or dry friction is stronger than the drive.

    With f_1(a) → −S ≠ 0 as a → 0, da/dt ≤ 2(|f_0| − S) in every phase, so that |f_0| < S holds the mode.
    """
    near = harmonics(flow, np.full(points, TINY), values)
    far = harmonics(flow, np.full(points, 100 * TINY), values)
    zero = np.zeros(points)
    friction = -near.get(1, zero).real
    friction = np.where(friction > 0.9 * -far.get(1, zero).real, np.maximum(friction, 0.0), 0.0)
    push = np.sum([abs(f) for k, f in near.items() if k != 1], axis=0) if len(near) > 1 else zero
    return np.asarray((push < friction) | (flow.at_rest(values, points) == 0))


def typical_amplitude(flow: SteadyFlow, values: tuple[Any, ...], points: int) -> Array:
    """The amplitude at which the other terms of the flow reach the size of the drive, 1 where there is none."""
    push = flow.at_rest(values, points)
    if flow.modes > 1 or flow.several_phases:
        return _balance(flow, values, push)
    a = 10.0 ** np.arange(-6, 4.5, 0.5)
    size = np.zeros((len(a), points))
    constant = np.zeros((len(a), points))
    for (_, _, m), c in flow.coefficients(_collapsed(values), a[:, None]).items():
        target = size if sum(m) else constant
        target += abs(c) * (a[:, None] / 2) ** sum(m)
    with np.errstate(invalid="ignore"):
        beyond = size >= np.maximum(push, constant)
    first = np.argmax(beyond, axis=0)
    return np.where((push > 0) & beyond.any(axis=0) & (first > 0), a[first], 1.0)


def _balance(flow: SteadyFlow, values: tuple[Any, ...], push: Array) -> Array:
    """|y| at which G(y) − G(0) reaches the size of G(0), in the middle of a few directions."""
    random = np.random.default_rng(SEED)
    sizes, ways = 10.0 ** np.arange(-4, 3), random.normal(size=(2 * flow.modes, 3))
    y = sizes[:, None, None] * (ways / np.linalg.norm(ways, axis=0))[:, None, :, None]
    y = np.broadcast_to(y, (*y.shape[:3], len(push)))
    start = flow.rate(np.zeros((2 * flow.modes, len(push))), tuple(np.broadcast_to(v, push.shape) for v in values))
    moved = np.linalg.norm(flow.rate(y, values) - start[:, None, None], axis=0)
    with np.errstate(invalid="ignore"):
        beyond = np.median(moved, axis=1) >= push
    first = np.argmax(beyond, axis=0)
    return np.where((push > 0) & beyond.any(axis=0), sizes[first], 1.0)
