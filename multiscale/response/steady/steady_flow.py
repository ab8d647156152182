"""A slow flow made ready for the search of its steady states.

    y' = G(y; λ),   y = (p_1, q_1, p_2, …),   A_j = ½(p_j − i q_j)

A cyclic phase drives nothing: G commutes with the rotation A_j → A_j e^{i w_j θ}, whose generator is T. A steady state
is a *relative* equilibrium, at rest but for that rotation,

    G(y) = Σ_c ν_c T_c y ,

and its stability is that of J − Σ ν_c T_c on the directions across the T_c y, along which the eigenvalue is zero.

Derivatives that are not generated are taken with a complex step, Im f(x + ih)/h, which is exact to rounding because the
generated kernels are analytic.
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
from multiscale.errors import EvaluationError, ResonanceError
from multiscale.expansion import Expansion

__all__ = ["Coefficients", "SteadyFlow", "checked_name"]

Array = npt.NDArray[Any]
Coefficients = dict[tuple[int, int, tuple[int, ...]], Array]
STEP = 1e-30


@dataclass(frozen=True, eq=False)
class SteadyFlow:
    """Functions of one expansion's slow flow, with values fixed but for those named in the calls."""

    expansion: Expansion
    flow: NumpyFunction
    slope: NumpyFunction
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
        keys, levels = coefficient_function(expansion.problem, expansion.computation)
        return cls(expansion, flow.to_numpy("cartesian"), flow.to_numpy("cartesian", wrt="state"), keys, levels)

    @property
    def modes(self) -> int:
        return self.expansion.computation.modes

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
        return not any(sum(m) == 0 for _, _, m in self.keys)

    def values(self, parameters: Mapping[Any, Any]) -> tuple[Any, ...]:
        """The parameter values in the order of the generated functions, finite or refused."""
        values = self.flow.values(parameters)
        for name, value in zip(self.flow.parameters, values, strict=True):
            if not np.all(np.isfinite(value)):
                raise EvaluationError(f"parameter {name} = {value}: expected a finite number")
        return values

    def rate(self, y: Array, values: tuple[Any, ...]) -> Array:
        """G, also for complex arguments."""
        return np.array(np.broadcast_arrays(*self.flow.kernel(0.0, *y, *values)))

    def jacobian(self, y: Array, values: tuple[Any, ...]) -> Array:
        """dG/dy of shape (2n, 2n) + B, also for complex arguments."""
        batch = np.broadcast_shapes(np.shape(y)[1:], *(np.shape(v) for v in values))
        rows = self.slope.kernel(0.0, *y, *values)
        return np.array([np.broadcast_to(x, batch) for x in rows]).reshape(len(y), len(y), *batch)

    def coefficients(self, values: tuple[Any, ...]) -> Coefficients:
        """The coefficients of dA/dt in A and its conjugate, level by level, each with its power of ε."""
        found = self.levels(0.0, np.zeros(0), *values)
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


def checked_name(flow: SteadyFlow, symbol: Any) -> str:
    """The name of a parameter, given as a Symbol or a name; an eliminated frequency counts."""
    name = str(symbol.name) if isinstance(symbol, sp.Symbol) else symbol
    known = (*flow.flow.parameters, *(name for x in flow.flow.inversions for name in x.eliminated))
    if name not in known:
        raise EvaluationError(f"{symbol!r} is no parameter of this slow flow: expected one of {', '.join(known)}")
    return str(name)
