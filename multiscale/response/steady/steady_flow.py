"""A slow flow made ready for the search of its steady states.

    y' = G(y; λ),   y = (p_1, q_1, p_2, …),   A_j = ½(p_j − i q_j)

A cyclic phase drives nothing: G commutes with the rotation A_j → A_j e^{i w_j θ}, whose generator is T. A steady state
is a *relative* equilibrium, at rest but for that rotation,

    G(y) = Σ_c ν_c T_c y ,

and its stability is that of J − Σ ν_c T_c on the directions across the T_c y, along which the eigenvalue is zero.

Derivatives that are not generated are taken with a complex step, Im f(x + ih)/h, which is exact to rounding because the
generated kernels are analytic. With forces that are not polynomial they are not: differences take the place of the
step, and what lies beyond the range of a force is nan.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from functools import cached_property
from typing import Any

import numpy as np
import numpy.typing as npt
import sympy as sp

from multiscale.codegen.functions import coefficient_function
from multiscale.codegen.numpy_function import NumpyFunction
from multiscale.codegen.runtime import IntegralError
from multiscale.errors import EvaluationError, ResonanceError
from multiscale.expansion import Expansion

__all__ = ["Coefficients", "SteadyFlow", "checked_name"]

Array = npt.NDArray[Any]
Coefficients = dict[tuple[int, int, tuple[int, ...]], Array]
STEP = 1e-30
DIFFERENCE = 1e-5
"""Relative step where derivatives are differences: averages of forces are right to 10⁻¹³ or so."""
WIDE = 1e-3


@dataclass(frozen=True, eq=False)
class SteadyFlow:
    """Functions of one expansion's slow flow, with values fixed but for those named in the calls."""

    expansion: Expansion
    flow: NumpyFunction
    slope: NumpyFunction | None
    keys: tuple[tuple[int, int, tuple[int, ...]], ...]
    levels: NumpyFunction

    @classmethod
    def of(cls, expansion: Expansion) -> SteadyFlow:
        """Refuses a flow that depends on time."""
        if not isinstance(expansion, Expansion):
            raise EvaluationError(f"an Expansion was expected, got a {type(expansion).__name__}: call expand first")
        flow = expansion.slow_flow
        if not flow.autonomous:
            raise ResonanceError(
                f"the slow flow depends on {expansion.problem.time} explicitly (slow parameters, or beats between "
                "drives near one mode), so it has no steady states: integrate slow_flow.to_numpy('cartesian') "
                "instead, or tie the drives together by relations with one detuning"
            )
        projected = bool(expansion.computation.canonical.numeric)
        keys, levels = coefficient_function(expansion.problem, expansion.computation, at_amplitudes=projected)
        try:
            slope = flow.to_numpy("cartesian", wrt="state")
        except EvaluationError:
            # A force law without a derivative.
            if not projected:
                raise
            slope = None
        return cls(expansion, flow.to_numpy("cartesian"), slope, keys, levels)

    @property
    def modes(self) -> int:
        return self.expansion.computation.modes

    @property
    def polynomial(self) -> bool:
        """Whether every coefficient is a function of the parameters alone."""
        return not self.expansion.computation.canonical.numeric

    @property
    def several_phases(self) -> bool:
        """Whether a force is averaged over several phases: its part is in `rate`, not in `coefficients`."""
        return bool(self.expansion.computation.canonical.torus)

    @property
    def phases(self) -> int:
        """The number of resonant phases."""
        return len(self.expansion.computation.frame.resonant)

    @cached_property
    def rotations(self) -> tuple[Array, ...]:
        """T_c of each cyclic phase: the integer directions in which no resonant phase changes."""
        rows = self.expansion.computation.frame.resonant
        if rows:
            weights = [[int(x * sp.ilcm(*(y.q for y in v))) for x in v] for v in sp.Matrix(rows).nullspace()]
        else:
            weights = [[int(j == k) for j in range(self.modes)] for k in range(self.modes)]
        found = []
        for row in weights:
            matrix = np.zeros((2 * self.modes, 2 * self.modes))
            for j, w in enumerate(row):
                matrix[2 * j, 2 * j + 1], matrix[2 * j + 1, 2 * j] = w, -w
            found.append(matrix)
        return tuple(found)

    @property
    def rests(self) -> bool:
        """Whether the state of zero amplitude is an equilibrium whatever the parameters."""
        return not self.several_phases and not any(sum(m) == 0 for _, _, m in self.keys)

    def at_rest(self, values: tuple[Any, ...], points: int) -> Array:
        """|G(0)| at every point: what drives the state of rest."""
        batch = tuple(np.broadcast_to(v, (points,)) for v in values)
        zero = np.zeros((2 * self.modes, points))
        push = np.linalg.norm(self.rate(zero, batch), axis=0)
        if self.several_phases:
            # Averages that vanish are rounding.
            push = np.where(push < 1e-11 * np.linalg.norm(self.rate(zero + 0.1, batch), axis=0), 0.0, push)
        return np.asarray(push)

    def values(self, parameters: Mapping[Any, Any]) -> tuple[Any, ...]:
        """The parameter values in the order of the generated functions, finite or refused."""
        values = self.flow.values(parameters)
        for name, value in zip(self.flow.parameters, values, strict=True):
            if not np.all(np.isfinite(value)):
                raise EvaluationError(f"parameter {name} = {value}: expected a finite number")
        return values

    def rate(self, y: Array, values: tuple[Any, ...]) -> Array:
        """G, also for complex arguments."""
        if self.polynomial:
            return np.array(np.broadcast_arrays(*self.flow.kernel(0.0, *y, *values)))
        return _where_defined(self.flow, len(y), y, values)

    def jacobian(self, y: Array, values: tuple[Any, ...]) -> Array:
        """dG/dy of shape (2n, 2n) + B, also for complex arguments."""
        batch = np.broadcast_shapes(np.shape(y)[1:], *(np.shape(v) for v in values))
        if not self.polynomial:
            return self._slope_or_difference(y, values, batch)
        assert self.slope is not None
        rows = self.slope.kernel(0.0, *y, *values)
        return np.array([np.broadcast_to(x, batch) for x in rows]).reshape(len(y), len(y), *batch)

    def _slope_or_difference(self, y: Array, values: tuple[Any, ...], batch: tuple[int, ...]) -> Array:
        """dG/dy where its averages are known well enough, by differences of the fourth order elsewhere."""
        size = len(y)
        if self.slope is None or (self.several_phases and not self._slope_known(y, values)):
            found = np.full((size, size, *batch), np.nan)
        else:
            found = _where_defined(self.slope, size**2, y, values).reshape(size, size, *batch)
        if np.isfinite(found).all():
            return found
        step = WIDE * (np.linalg.norm(y, axis=0) + WIDE)
        columns = []
        for e in np.eye(size).reshape(size, size, *(1,) * (np.ndim(y) - 1)):
            one, two = (self.rate(y + k * step * e, values) - self.rate(y - k * step * e, values) for k in (1, 2))
            columns.append((8 * one - two) / (12 * step))
        return np.where(np.isfinite(found), found, np.stack(np.broadcast_arrays(*columns), axis=1))

    def _slope_known(self, y: Array, values: tuple[Any, ...]) -> bool:
        """Whether the averages in the slope converge at one of the states; over several phases they are costly."""
        assert self.slope is not None
        one, first = np.reshape(y, (len(y), -1))[:, 0], tuple(np.ravel(v)[0] for v in values)
        return bool(np.isfinite(_where_defined(self.slope, len(y) ** 2, one, first)).all())

    def coefficients(self, values: tuple[Any, ...], amplitude: Array | None = None) -> Coefficients:
        """The coefficients of dA/dt in A and its conjugate, level by level, each with its power of ε.

        `amplitude`, of shape B, is what they depend on where forces are not polynomial, the same for all modes.
        """
        if amplitude is None:
            found = self.levels(0.0, np.zeros(0), *values)
        else:
            state = np.broadcast_to(amplitude, (self.modes, *np.shape(amplitude)))
            found = _where_defined(self.levels, 2 * len(self.keys), state, values)
            found = found.reshape(len(self.keys), 2, *found.shape[1:])
        small = values[self.flow.parameters.index(str(self.expansion.problem.small.name))]
        return {key: (c[0] + 1j * c[1]) * np.asarray(small) ** key[0] for key, c in zip(self.keys, found, strict=True)}

    @cached_property
    def leading(self) -> int:
        """The first level at which the flow does not vanish."""
        return min((n for n, _, _ in self.keys), default=0)

    def polar(self, y: Array) -> tuple[Array, Array]:
        """Amplitudes (modes,) + B and resonant phases (r,) + B in (−π, π], nan where an amplitude is zero."""
        p, q = y[::2], y[1::2]
        amplitudes = np.hypot(p, q)
        deviations = np.where(amplitudes > 0, -np.arctan2(q, p), np.nan)
        rows = self.expansion.computation.frame.resonant
        phases = np.zeros((len(rows), *amplitudes.shape[1:]))
        for k, row in enumerate(rows):
            angle = sum(n * deviations[j] for j, n in enumerate(row) if n)
            phases[k] = -np.remainder(np.pi - angle, 2 * np.pi) + np.pi
        return amplitudes, phases


def _where_defined(function: NumpyFunction, count: int, y: Array, values: tuple[Any, ...]) -> Array:
    """The `count` outputs of a kernel, (count,) + B, nan where a force has no value."""
    batch = np.broadcast_shapes(np.shape(y)[1:], *(np.shape(v) for v in values))
    try:
        with np.errstate(all="ignore"):
            rows = function.kernel(0.0, *y, *values)
        return np.array([np.broadcast_to(x, batch) for x in rows])
    except (IntegralError, EvaluationError):
        axis = next((k for k, n in enumerate(batch) if n > 1), None)
        if axis is None:
            return np.full((count, *batch), np.nan)
        middle, depth = batch[axis] // 2, len(batch) - axis
        halves = [
            _where_defined(function, count, np.stack([_cut(x, depth, part) for x in y]), rest)
            for part in (slice(None, middle), slice(middle, None))
            for rest in (tuple(_cut(np.asarray(v), depth, part) for v in values),)
        ]
        return np.concatenate(halves, axis=axis + 1)


def _cut(x: Array, depth: int, part: slice) -> Array:
    """A part of an array along the `depth`-th axis from the end, where it has one."""
    if x.ndim < depth or x.shape[-depth] == 1:
        return x
    return x[(slice(None),) * (x.ndim - depth) + (part,)]


def checked_name(flow: SteadyFlow, symbol: Any) -> str:
    """The name of a parameter, given as a Symbol or a name; an eliminated frequency counts."""
    name = str(symbol.name) if isinstance(symbol, sp.Symbol) else symbol
    known = (*flow.flow.parameters, *(name for x in flow.flow.inversions for name in x.eliminated))
    if name not in known:
        raise EvaluationError(f"{symbol!r} is no parameter of this slow flow: expected one of {', '.join(known)}")
    return str(name)
