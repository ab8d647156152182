"""Steady states that only the truncation makes.

A flow of several levels, ε^k(D_k + sεD_{k+1} + s²ε²D_{k+2} + …)A with s = 1, has more equilibria than its first
non-vanishing level, s = 0. Followed from s = 1 to s = 0, those of the expansion end in an equilibrium of D_k; the
others run off to infinity like a negative power of s: terms of different order balance in them, where the expansion
does not hold.

Two real equilibria may meet in a fold on the way and go on as a complex pair, which says nothing against them: A and Ā
are therefore followed as independent complex unknowns, along a path of complex s that goes round such points.
"""

from __future__ import annotations

from typing import Any

import numpy as np
import numpy.typing as npt

from multiscale.response.steady.newton import polished
from multiscale.response.steady.steady_flow import Coefficients, SteadyFlow

__all__ = ["spurious_reason"]

Array = npt.NDArray[Any]
LAST = 1e-5
BEND = 0.8


def spurious_reason(flow: SteadyFlow, y: Array, values: tuple[Any, ...]) -> str:
    """Why a state is no equilibrium of the expansion as ε → 0, or ""."""
    if flow.expansion.order == flow.leading or not np.any(y):
        return ""
    if not flow.polynomial:
        return _by_real_path(flow, y, values)
    path = _Path(flow, flow.coefficients(values))
    start = (y[::2] - 1j * y[1::2]) / 2
    x = np.concatenate([start, start.conj(), path.rates(start)])
    sizes, tau, step, end = [(1.0, _size(x, flow))], 0.0, 0.05, -np.log(LAST)
    while tau < end:
        ahead = min(step, end - tau)
        found = path.corrected(x + path.tangent(x, tau) * ahead, tau + ahead, x)
        if found is None:
            step = ahead / 2
            if step < 1e-4:
                break
            continue
        x, tau, step = found, tau + ahead, min(1.5 * ahead, 0.4)
        sizes.append((np.exp(-tau), _size(x, flow)))
        if not sizes[-1][1] < 6 * sizes[0][1] and _exponent(sizes) < -0.2:
            break
    exponent, small = _exponent(sizes), flow.expansion.problem.small
    if exponent > -0.1:
        return "" if tau >= end else f"it cannot be followed below {np.exp(-tau):.2g} of the given {small}"
    return (
        f"its amplitude grows like {small}**{exponent:.2g} as {small} → 0 instead of tending to an equilibrium of "
        f"level {flow.leading}: terms of different order balance in it"
    )


def _by_real_path(flow: SteadyFlow, y: Array, values: tuple[Any, ...]) -> str:
    """With coefficients that depend on the amplitude s stays real; a fold on the way decides nothing."""
    place, now, start = flow.flow.parameters.index(str(flow.expansion.problem.small.name)), y, np.linalg.norm(y)
    small = flow.expansion.problem.small
    for s in np.exp(np.linspace(0.0, np.log(LAST), 60))[1:]:
        fewer = tuple(v * s if k == place else v for k, v in enumerate(values))
        found, _, done = polished(flow, now, fewer, start, reach=0.1)
        if not done or np.linalg.norm(found - now) > 0.5 * np.linalg.norm(now):
            return ""
        now = found
        if np.linalg.norm(now) > 10 * start:
            return (
                f"its amplitude grows without bound as {small} → 0 instead of tending to an equilibrium of level "
                f"{flow.leading}: terms of different order balance in it"
            )
    return ""


def _exponent(sizes: list[tuple[float, float]]) -> float:
    """d log|A| / d log s over the last decade or so."""
    late = [s for s in sizes if s[0] <= 12 * sizes[-1][0]]
    if len(late) < 2:
        return 0.0
    return float(np.log(late[-1][1] / late[0][1]) / np.log(late[-1][0] / late[0][0]))


def _size(x: Array, flow: SteadyFlow) -> float:
    return float(np.linalg.norm(x[: 2 * flow.modes]))


class _Path:
    """The equations at s = exp(−τ + iφ(τ)), φ = BEND·τe^{−τ}, in (A, B, ν), B in the place of Ā."""

    def __init__(self, flow: SteadyFlow, coefficients: Coefficients) -> None:
        self._modes = modes = flow.modes
        keys, values = list(coefficients), np.array([complex(c) for c in coefficients.values()])
        powers = np.array([m for _, _, m in keys])
        # Columns A_1 … B_1 …; the second half of the equations is the conjugate of the first, A and B exchanged.
        own, other = powers[:, ::2], powers[:, 1::2]
        self._powers = np.vstack([np.hstack([own, other]), np.hstack([other, own])])
        self._coefficients = np.concatenate([values, values.conj()])
        self._levels = np.array([n - flow.leading for n, _, _ in keys] * 2)
        rows = np.array([a for _, a, _ in keys])
        self._rows = np.equal.outer(np.arange(2 * modes), np.concatenate([rows, modes + rows])).astype(float)
        self._weights = np.array([T[::2, 1::2].diagonal() for T in flow.rotations]).reshape(-1, flow.modes)

    def rates(self, start: Array) -> Array:
        """The ν of a state: dA/dt = iν w A."""
        value, _, _ = self._equations(np.concatenate([start, start.conj(), np.zeros(len(self._weights))]), 0.0)
        if not len(self._weights):
            return np.zeros(0, dtype=complex)
        directions = 1j * self._weights * start
        return np.asarray(np.linalg.lstsq(directions.T, value[: self._modes], rcond=1e-9)[0])

    def _equations(self, x: Array, tau: float) -> tuple[Array, Array, Array]:
        """(value, derivative by x, derivative by τ)."""
        modes, free = self._modes, len(self._weights)
        s = np.exp(-tau + 1j * BEND * tau * np.exp(-tau))
        slope = -1 + 1j * BEND * (1 - tau) * np.exp(-tau)
        amplitude, conjugate, nu = x[:modes], x[modes : 2 * modes], x[2 * modes :]
        weighted = self._coefficients * s**self._levels
        factors = x[: 2 * modes] ** self._powers
        terms = weighted * np.prod(factors, axis=1)
        value, by_tau = self._rows @ terms, self._rows @ (self._levels * slope * terms)
        matrix = np.zeros((2 * modes, 2 * modes + free), dtype=complex)
        for k in range(2 * modes):
            lowered = factors.copy()
            lowered[:, k] = self._powers[:, k] * x[k] ** np.maximum(self._powers[:, k] - 1, 0)
            matrix[:, k] = self._rows @ (weighted * np.prod(lowered, axis=1))
        for c in range(free):
            turned = 1j * self._weights[c]
            value -= nu[c] * np.concatenate([turned * amplitude, -turned * conjugate])
            matrix[:, 2 * modes + c] -= np.concatenate([turned * amplitude, -turned * conjugate])
            matrix[:, : 2 * modes] -= nu[c] * np.diag(np.concatenate([turned, -turned]))
        return value, matrix, by_tau

    def tangent(self, x: Array, tau: float) -> Array:
        _, matrix, by_tau = self._equations(x, tau)
        return -np.asarray(np.linalg.lstsq(matrix, by_tau, rcond=1e-12)[0])

    def corrected(self, x: Array, tau: float, last: Array) -> Array | None:
        """The solution near a prediction, None where it is not near or there is none."""
        guess, modes = x, self._modes
        for _ in range(5):
            value, matrix, _ = self._equations(x, tau)
            if not (np.isfinite(value).all() and np.isfinite(matrix).all()):
                return None
            step = np.linalg.lstsq(matrix, value, rcond=1e-12)[0]
            x = x - step
            if np.linalg.norm(step[: 2 * modes]) < 1e-8 * np.linalg.norm(x[: 2 * modes]):
                moved = np.linalg.norm((x - guess)[: 2 * modes])
                return x if moved < 0.05 * np.linalg.norm(last[: 2 * modes]) else None
        return None
