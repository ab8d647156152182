"""One parameter that is swept while the others are fixed, and what the branches over it are made of."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any

import numpy as np
import numpy.typing as npt

from multiscale.errors import EvaluationError
from multiscale.response.steady.newton import fold, rotation_rates, solve_batch, turning_jacobian
from multiscale.response.steady.steady_flow import DIFFERENCE, STEP, SteadyFlow, checked_name

__all__ = ["Arc", "Special", "Sweep"]

Array = npt.NDArray[Any]


@dataclass(frozen=True, eq=False)
class Special:
    """A fold, a Hopf point or a branching: the parameter, the Cartesian state and the amplitudes there."""

    parameter: float
    state: Array
    amplitudes: tuple[float, ...]


@dataclass(frozen=True, eq=False)
class Arc:
    """States (2n, K) along a branch and the parameter at each; `turns` are the positions of its folds."""

    parameter: Array
    state: Array
    turns: tuple[int, ...]
    closed: bool


@dataclass(frozen=True, eq=False)
class Sweep:
    """A slow flow as a function of one parameter."""

    flow: SteadyFlow
    name: str
    fixed: tuple[tuple[str, float], ...]
    grid: Array

    @classmethod
    def of(cls, flow: SteadyFlow, parameters: Mapping[Any, Any], sweep: Any) -> Sweep:
        if not isinstance(sweep, Mapping) or len(sweep) != 1:
            raise EvaluationError(f"sweep is {sweep!r}: expected one parameter and its values, {{sigma: array}}")
        ((symbol, given),) = sweep.items()
        name = checked_name(flow, symbol)
        fixed = {checked_name(flow, key): value for key, value in parameters.items()}
        if name in fixed:
            raise EvaluationError(f"{name} is given both as a parameter and in sweep: leave it out of the parameters")
        for key, value in fixed.items():
            if np.ndim(value):
                raise EvaluationError(
                    f"parameter {key} is an array: sweep one parameter, and give numbers for the rest"
                )
        try:
            grid = np.asarray(given, dtype=float)
        except (TypeError, ValueError):
            raise EvaluationError(f"sweep gives {name} the values {given!r}: expected a 1-D array of numbers") from None
        if grid.ndim != 1 or len(grid) < 2 or not np.isfinite(grid).all():
            raise EvaluationError(
                f"sweep gives {name} an array of shape {grid.shape}: expected 2 or more finite values"
            )
        made = cls(flow, name, tuple((k, float(v)) for k, v in fixed.items()), np.unique(grid))
        flow.values(dict(made.fixed) | {name: made.grid})
        if len(made.grid) < 2:
            raise EvaluationError(f"sweep gives {name} one value only: use equilibria for a single point")
        return made

    @property
    def span(self) -> float:
        return float(self.grid[-1] - self.grid[0])

    def values(self, at: Any) -> tuple[Any, ...]:
        """All parameter values at a number or an array of the swept one, also complex."""
        return self.flow.flow.values(dict(self.fixed) | {self.name: at})

    def drift(self, y: Array, at: Array) -> Array:
        """∂G/∂λ."""
        if not self.flow.polynomial:
            step = DIFFERENCE * self.span
            ahead, behind = (self.flow.rate(y, self.values(at + h)) for h in (step, -step))
            return np.asarray((ahead - behind) / (2 * step))
        small = STEP * self.span
        return np.asarray(self.flow.rate(y.astype(complex), self.values(at + 1j * small)).imag / small)

    def slope(self, y: Array, at: Array) -> Array:
        """dy/dλ along the branch, (2n,) + B."""
        values = self.values(at)
        nu = rotation_rates(self.flow, y, values)
        matrix = turning_jacobian(self.flow, y, nu, values)
        directions = [np.tensordot(T, y, 1) for T in self.flow.rotations]
        if directions:
            matrix = np.concatenate([matrix, -np.stack(directions, axis=1)], axis=1)
        return -solve_batch(matrix, self.drift(y, at))[: len(y)]

    def fold_near(self, y: Array, at: float, scale: float) -> Special | None:
        found = fold(self.flow, y, at, self.values, scale, self.span)
        return None if found is None else self.special(*found)

    def special(self, at: float, y: Array) -> Special:
        y = np.array(y)
        y.flags.writeable = False
        return Special(float(at), y, tuple(float(a) for a in self.flow.polar(y)[0]))
