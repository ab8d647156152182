"""One motion by the expansion and by the equations as stated, at any value of the small parameter.

Both begin with the same displacements and velocities: the slow state reconstructs them at t = 0.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from functools import cached_property
from typing import Any

import numpy as np
import numpy.typing as npt
import sympy as sp

from multiscale.checks.initial_state import check_free, state_by
from multiscale.checks.integration import integrated, motion_as_stated
from multiscale.codegen.numpy_function import NumpyFunction
from multiscale.errors import EvaluationError
from multiscale.expansion import Expansion

__all__ = ["Run"]

Array = npt.NDArray[Any]


@dataclass(frozen=True, eq=False)
class Run:
    """What is compared, for any value of the small parameter."""

    expansion: Expansion
    values: dict[str, float]
    initial: Mapping[sp.Expr, float] | Array
    horizon: float
    power: int
    points: int

    @classmethod
    def of(
        cls,
        expansion: Expansion,
        parameters: Mapping[Any, Any],
        initial: Mapping[sp.Expr, float] | Sequence[float] | Array,
        horizon: float,
        power: int,
        points: int,
    ) -> Run:
        if not isinstance(expansion, Expansion):
            raise EvaluationError(f"compare was given a {type(expansion).__name__}: call expand first")
        if not (isinstance(power, int) and power > 0 and isinstance(points, int) and points > 1):
            raise EvaluationError(f"power is {power!r} and points is {points!r}: expected positive integers")
        try:
            reach = float(horizon)
        except (TypeError, ValueError):
            reach = np.nan
        if not 0 < reach < np.inf:
            raise EvaluationError(f"horizon is {horizon!r}: expected a positive number, the time is horizon/ε^power")
        if isinstance(initial, Mapping):
            check_free(expansion)
        start: Mapping[sp.Expr, float] | Array = initial if isinstance(initial, Mapping) else _state(expansion, initial)
        if isinstance(start, Mapping) and (several := [key for key, x in start.items() if np.ndim(x)]):
            raise EvaluationError(f"the condition for {several[0]} is an array: compare takes one motion")
        return cls(expansion, _values(expansion, parameters), start, reach, power, points)

    def at(self, small: float) -> tuple[float, float]:
        """(error, floor) at one value of the small parameter."""
        problem, bound = self.expansion.problem, self._scaled(small)
        flow, place, velocity = (f.bind(bound) for f in self._functions)
        slow = self._start(small, bound)
        if isinstance(self.initial, Mapping):
            start = [self._own(u, small) * float(self.initial[u]) for u in self._conditions]
        else:
            start = [*place(0.0, slow).tolist(), *velocity(0.0, slow).tolist()]
        count = len(problem.unknowns)
        end = self.horizon / small**self.power
        times = np.linspace(0.0, end, self.points)
        span = float(np.max(np.abs([*slow, *(end * flow(0.0, slow))])))
        slow_motions = integrated(flow, slow, times, span or 1.0, "the slow flow")
        approximate = [place(times, y) for y in slow_motions]
        sizes = (_decade(approximate[0]), _decade(velocity(times, slow_motions[0])))
        numbers = tuple(sorted(bound.items()))
        exact = motion_as_stated(problem, numbers, tuple(start[:count]), tuple(start[count:]), end, self.points, *sizes)
        largest = float(np.abs(exact[0]).max())
        if not largest > 0:
            raise EvaluationError("the motion stays at rest: give initial conditions that are not zero")
        floor = np.abs(exact[0] - exact[1]).max() + np.abs(approximate[0] - approximate[1]).max()
        return float(np.abs(approximate[0] - exact[0]).max()) / largest, float(floor) / largest

    @cached_property
    def _functions(self) -> tuple[NumpyFunction, NumpyFunction, NumpyFunction]:
        """Slow flow, displacement, velocity."""
        expansion = self.expansion
        return expansion.slow_flow.to_numpy(), expansion.to_numpy(), expansion.to_numpy(derivative=1)

    @property
    def _conditions(self) -> list[sp.Expr]:
        unknowns = self.expansion.problem.unknowns
        return [*unknowns, *(u.diff(self.expansion.problem.time) for u in unknowns)]

    def _own(self, key: sp.Expr, small: float) -> float:
        """ε to the order of an unknown, of the unknown of a velocity, or of a parameter; 1 without `ordering`."""
        orders = self.expansion.problem.ordering or {}
        return float(small ** orders.get(key.args[0] if isinstance(key, sp.Derivative) else key, 0))

    def _scaled(self, small: float) -> dict[str, float]:
        problem = self.expansion.problem
        own = {s.name: self._own(s, small) for s in problem.parameters}
        values = {name: x * own[name] for name, x in self.values.items()}
        return values | {str(problem.small.name): 1.0 if problem.ordering is not None else small}

    def _start(self, small: float, bound: Mapping[str, float]) -> Array:
        if isinstance(self.initial, Mapping):
            scaled = {key: self._own(key, small) * np.asarray(x) for key, x in self.initial.items()}
            return state_by(self._functions[1:], self.expansion.problem, scaled, bound)
        if self.expansion.problem.ordering is None:
            return self.initial
        scales = [self._own(u, small) for u in self.expansion.problem.unknowns]
        if len(set(scales)) == 1:
            # Unknowns of one order: so are the modes, however many are carried.
            scales = scales[:1] * self.expansion.computation.modes
        else:
            check_free(self.expansion)
        state: Array = self.initial * np.repeat(scales, 2)
        return state


def _decade(motion: Array) -> int:
    """The power of ten below the largest value."""
    return int(np.floor(np.log10(max(float(np.abs(motion).max()), 1e-300))))


def _values(expansion: Expansion, parameters: Mapping[Any, Any]) -> dict[str, float]:
    """Numbers by name for every parameter but the small one."""
    problem = expansion.problem
    own = {str(s.name) for s in problem.parameters}
    found: dict[str, float] = {}
    for key, value in parameters.items():
        name = str(key.name) if isinstance(key, sp.Symbol) else str(key)
        if name == problem.small.name:
            raise EvaluationError(f"{name} is among the parameters: its values are those of small_values")
        if name not in own:
            eliminated = {str(s.name) for d in problem.detunings if (s := d.eliminated) is not None}
            hint = (
                "; it is eliminated by a relation: give its detuning, which is held fixed" if name in eliminated else ""
            )
            raise EvaluationError(f"unknown parameter {name!r}: expected {', '.join(sorted(own)) or 'none'}{hint}")
        try:
            number = float(value)
        except (TypeError, ValueError):
            number = np.nan
        if not np.isfinite(number):
            raise EvaluationError(f"parameter {name} is {value!r}: expected a finite number")
        found[name] = number
    if missing := sorted(own - found.keys()):
        raise EvaluationError(
            f"missing parameter {', '.join(missing)}: give a value for each of {', '.join(sorted(own))}"
        )
    return found


def _state(expansion: Expansion, initial: Any) -> Array:
    count = 2 * expansion.computation.modes
    try:
        state = np.asarray(initial, dtype=np.float64)
    except (TypeError, ValueError):
        state = np.full(0, np.nan)
    if state.shape != (count,) or not np.all(np.isfinite(state)):
        raise EvaluationError(
            f"initial is {initial!r}: expected {{unknown: displacement, unknown.diff(t): velocity}}, or a slow state "
            f"of {count} finite numbers"
        )
    return state
