"""The slow state in which an expansion has given displacements and velocities.

    Σ εⁿ U_n(t, y) = u,      Σ εⁿ V_n(t, y) = u',      n = 0 … N,      V_n = Σ_k D_k U_{n−k}

solved for y = (p_1, q_1, p_2, …) by Newton's method from y = 0, where the equations are nearly those of the linear
oscillator. Drives have their exact phase at time t. Derivatives are taken with a complex step, Im f(y + ih)/h, which is
exact to rounding because the generated functions are analytic in y.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from typing import Any

import numpy as np
import numpy.typing as npt
import sympy as sp

from multiscale.checks.initial_series import initial_series
from multiscale.codegen.numpy_function import NumpyFunction
from multiscale.errors import EvaluationError, UnsupportedTermError
from multiscale.expansion import Expansion
from multiscale.problem import Problem

__all__ = ["check_free", "initial_state", "state_by"]

Array = npt.NDArray[Any]
STEP = 1e-30
ITERATIONS = 40
HALVINGS = 12
ROUNDING = 1e-15
TOLERANCE = 1e-11
"""Residual that is accepted, relative to the largest displacement (velocities divided by the largest frequency)."""


def initial_state(
    expansion: Expansion,
    conditions: Mapping[sp.Expr, Any],
    parameters: Mapping[Any, Any] | None = None,
    *,
    time: npt.ArrayLike = 0.0,
) -> Any:
    """The slow state of a motion with given displacements and velocities, to the order of the expansion.

    Parameters
    ----------
    expansion : Expansion
    conditions : mapping
        {u: displacement, u.diff(t): velocity} for every unknown. Arrays (a measured record, a grid of starts) give one
        state for each entry; all shapes broadcast, with those of `time` and of the parameters.
    parameters : mapping, optional
        Numbers by Symbol or name. Without it the state is a series in ε, for one undriven oscillator at t = 0; values
        in `conditions` may then contain symbols.
    time : float or array
        The instant of the conditions: it matters where the frame turns or a drive acts. A state at t ≠ 0 is the one
        *at* that time, Cartesian in the frame there.

    Returns
    -------
    array (2·modes,) + B
        Cartesian in the rotating frame, as every generated function takes it.
    dict
        Without `parameters`: {p: series, q: series} through ε^N.

    Raises
    ------
    EvaluationError
        A displacement or velocity is missing or not finite; a key is no unknown; the displacement lies outside the
        range that the expansion can represent; Newton's method leaves a residual.
    UnsupportedTermError
        A series for several modes, drives or slow parameters; fewer modes than unknowns.

    Examples
    --------
    >>> import sympy as sp, multiscale as ms
    >>> t = sp.Symbol("t", real=True)
    >>> eps, alpha = sp.symbols("epsilon alpha", positive=True)
    >>> u = sp.Function("u")(t)
    >>> result = ms.expand(ms.Problem(u.diff(t, 2) + u + eps*u**3, u, small=eps), order=2)
    >>> ms.initial_state(result, {u: 1.0, u.diff(t): 0.0}, {eps: 0.1}).round(6)
    array([0.997095, 0.      ])
    >>> ms.initial_state(result, {u: alpha, u.diff(t): 0})
    {p: 23*alpha**5*epsilon**2/1024 - alpha**3*epsilon/32 + alpha, q: 0}
    """
    if not isinstance(expansion, Expansion):
        raise EvaluationError(f"initial_state was given a {type(expansion).__name__}: call expand first")
    places, velocities = _read(expansion.problem, conditions)
    check_free(expansion)
    if parameters is None:
        return initial_series(expansion, places, velocities)
    return state_by([expansion.to_numpy(derivative=d) for d in (0, 1)], expansion.problem, conditions, parameters, time)


def check_free(expansion: Expansion) -> None:
    """Whether every initial condition is free: as many modes as unknowns."""
    modes, unknowns = expansion.computation.modes, len(expansion.problem.unknowns)
    if modes != unknowns:
        raise UnsupportedTermError(
            f"the expansion has {modes} modes for {unknowns} unknowns, whose initial conditions are then not all free: "
            "give the slow state itself"
        )


def state_by(
    functions: Sequence[NumpyFunction],
    problem: Problem,
    conditions: Mapping[sp.Expr, Any],
    parameters: Mapping[Any, Any],
    time: npt.ArrayLike = 0.0,
) -> Array:
    """The same by the functions of displacement and velocity, once they are made."""
    motion = _Motion(functions, problem, parameters, time, *_read(problem, conditions))
    state = _solved(motion)
    _check(motion, state)
    return state


def _read(problem: Problem, conditions: Mapping[sp.Expr, Any]) -> tuple[list[Any], list[Any]]:
    """Values in the order of the unknowns: displacements, velocities."""
    wanted = [(u, u.diff(problem.time)) for u in problem.unknowns]
    names = ", ".join(str(x) for pair in wanted for x in pair)
    if not isinstance(conditions, Mapping):
        raise EvaluationError(f"conditions are a {type(conditions).__name__}: expected a mapping with the keys {names}")
    known = {x for pair in wanted for x in pair}
    for key in conditions:
        if key not in known:
            raise EvaluationError(f"condition for {key}: expected the unknowns and their velocities, {names}")
    for x in (x for pair in wanted for x in pair):
        if x not in conditions:
            what = "velocity" if x.is_Derivative else "displacement"
            raise EvaluationError(f"the {what} {x} is missing: give a value for each of {names}")
    return [conditions[u] for u, _ in wanted], [conditions[v] for _, v in wanted]


class _Motion:
    """Displacement and velocity as functions of the slow state, and what they shall be."""

    def __init__(
        self,
        functions: Sequence[NumpyFunction],
        problem: Problem,
        parameters: Mapping[Any, Any],
        time: npt.ArrayLike,
        places: Sequence[Any],
        velocities: Sequence[Any],
    ) -> None:
        t, unknowns = problem.time, problem.unknowns
        names = [str(u) for u in unknowns] + [str(u.diff(t)) for u in unknowns]
        pairs = zip(functions[0].parameters, functions[0].values(parameters), strict=True)
        self._arguments = [_numbers(time, str(t)), *(_numbers(x, f"parameter {name}") for name, x in pairs)]
        wanted = [_numbers(x, name) for x, name in zip([*places, *velocities], names, strict=True)]
        shapes = [x.shape for x in (*self._arguments, *wanted)]
        try:
            self.batch = np.broadcast_shapes(*shapes)
        except ValueError:
            raise EvaluationError(
                f"shapes of time, parameters and conditions do not broadcast: {', '.join(map(str, shapes))}"
            ) from None
        self._kernels = [f.kernel for f in functions]
        self._wanted = np.array([np.broadcast_to(x, self.batch) for x in wanted])
        self.rest = np.zeros((functions[0].size, *self.batch))
        self._scale = self._scales(len(unknowns))

    def _scales(self, count: int) -> Array:
        """The size of each equation: the largest displacement, for velocities times the largest frequency."""
        slope, at_rest = np.abs(self.slope(self.rest)), np.abs(self._motion(self.rest))
        frequency = slope[count:].max(axis=(0, 1)) / slope[:count].max(axis=(0, 1))
        largest = np.maximum(np.abs(self._wanted), at_rest)
        size = np.maximum(largest[:count].max(axis=0), largest[count:].max(axis=0) / frequency)
        size = np.where(size > 0, size, 1.0)
        return np.concatenate([np.stack([x] * count) for x in (size, size * frequency)])

    def _motion(self, state: Array) -> Array:
        instant, *values = self._arguments
        rows = [x for kernel in self._kernels for x in kernel(instant, *state, *values)]
        return np.array([np.broadcast_to(x, self.batch) for x in rows])

    def residual(self, state: Array) -> Array:
        difference: Array = (self._motion(state) - self._wanted) / self._scale
        return difference

    def slope(self, state: Array) -> Array:
        """Derivative of the motion by the state, (2n, 2n) + B."""
        columns = []
        for k in range(len(state)):
            moved = state.astype(np.complex128)
            moved[k] += 1j * STEP
            columns.append(self._motion(moved).imag / STEP)
        return np.stack(columns, axis=1)

    def linear(self, change: Array) -> Array:
        """What a change of the slow state makes of the motion near rest, in units of the displacement."""
        moved: Array = np.einsum("jk...,k...->j...", self.slope(self.rest), change) / self._scale
        return moved

    def step(self, state: Array, residual: Array) -> Array:
        """Newton's step; least squares where the equations are singular."""
        matrix = np.moveaxis(self.slope(state) / self._scale[:, None], (0, 1), (-2, -1))
        right = np.moveaxis(residual, 0, -1)[..., None]
        try:
            found = np.linalg.solve(matrix, right)
        except np.linalg.LinAlgError:
            found = np.linalg.pinv(matrix) @ right
        return np.moveaxis(found[..., 0], -1, 0)


def _solved(motion: _Motion) -> Array:
    """Newton's method on all entries together; each step is halved until the residual of its entry falls."""
    state = motion.rest
    with np.errstate(all="ignore"):
        residual = motion.residual(state)
        for _ in range(ITERATIONS):
            size, step = _largest(residual), motion.step(state, residual)
            pending = size > ROUNDING
            share = 1.0
            for _ in range(HALVINGS):
                trial = np.where(pending, state - share * step, state)
                found = motion.residual(trial)
                better = pending & (_largest(found) < size)
                state, residual = np.where(better, trial, state), np.where(better, found, residual)
                pending, share = pending & ~better, share / 2
                if not pending.any():
                    break
            if np.all(_largest(residual) >= size):
                break
    return state


def _check(motion: _Motion, state: Array) -> None:
    size = _largest(motion.residual(state))
    if bad := int(np.count_nonzero(size > TOLERANCE)):
        where = f" at {bad} of {size.size} entries" if motion.batch else ""
        raise EvaluationError(
            f"no slow state was found for these conditions{where}: Newton's method leaves a residual of "
            f"{float(size.max()):.2g} of the displacement. The amplitude is out of the range in which the correction "
            "terms of this expansion are small: begin with a smaller amplitude or small parameter"
        )
    rest = motion.rest
    turned, plain = (np.linalg.det(np.moveaxis(motion.slope(y), (0, 1), (-2, -1))) for y in (state, rest))
    linear = rest - motion.step(rest, motion.residual(rest))
    correction = _largest(motion.linear(state - linear))
    if np.any((turned * plain <= 0) | (correction > 1)):
        raise EvaluationError(
            "the amplitude is out of range: in the slow state found, the correction terms outweigh the motion itself. "
            "Begin with a smaller amplitude or small parameter"
        )


def _largest(residual: Array) -> Array:
    found: Array = np.max(np.abs(residual), axis=0)
    return np.where(np.isfinite(found), found, np.inf)


def _numbers(x: Any, name: str) -> Array:
    try:
        value = np.asarray(x)
        if value.dtype.kind in "USmMc":
            raise TypeError
        value = value.astype(np.float64)
    except (TypeError, ValueError):
        raise EvaluationError(f"{name} is {x!r}: expected real numbers") from None
    if not np.all(np.isfinite(value)):
        raise EvaluationError(f"{name} is {x!r}: expected finite numbers")
    return value
