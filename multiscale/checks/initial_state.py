"""The slow state in which an expansion has given displacements and velocities.

    Σ εⁿ U_n(t, y) = u,      Σ εⁿ V_n(t, y) = u',      n = 0 … N,      V_n = Σ_k D_k U_{n−k}

solved for y = (p_1, q_1, p_2, …) by Newton's method. It begins at the linear motion, which
is read off at an amplitude of a hundredth of the motion asked for: not at zero, where forces such as |u'|u' have no
derivatives of every order. Drives have their exact phase at time t.
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
STEP = 1e-5
"""Of derivatives by central differences, relative to the size of the motion."""
LINEAR = 1e-2
"""The amplitude, relative to the size of the motion, at which the linear motion is read off."""
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

    Notes
    -----
    One residual is accepted for all unknowns, so that they should be in units in which their motions are of comparable
    size.

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
    form = problem.canonical(1)
    with np.errstate(all="ignore"):
        state, within = _solved(motion, LINEAR)
        size = _largest(motion.residual(state))
        if not within and (form.harmonics or form.torus):
            # Corrections by a force that jumps, such as dry friction, do not fall with the amplitude.
            state, within = _solved(motion, 1.0)
            size = _largest(motion.residual(state))
    _check(size, within, motion.batch)
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
    """Displacements and velocities as functions of the slow state, and what they shall be.

    Velocities are divided by the largest natural frequency throughout, so that all rows are displacements.
    """

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
        given = {str(t): _numbers(time, str(t))} | {name: _numbers(x, f"parameter {name}") for name, x in pairs}
        wanted = [_numbers(x, name) for x, name in zip([*places, *velocities], names, strict=True)]
        shapes = [x.shape for x in (*given.values(), *wanted)]
        try:
            self.batch = np.broadcast_shapes(*shapes)
        except ValueError:
            raise EvaluationError(
                f"shapes of time, parameters and conditions do not broadcast: {', '.join(map(str, shapes))}"
            ) from None
        frequency = np.broadcast_to(_largest_frequency(problem, given), self.batch)
        self._arguments, self._kernels = list(given.values()), [f.kernel for f in functions]
        self._weights = np.array([np.ones(self.batch)] * len(unknowns) + [1 / frequency] * len(unknowns))
        self._wanted = np.array([np.broadcast_to(x, self.batch) for x in wanted]) * self._weights
        self._directions = np.eye(functions[0].size)
        self.size = self._sized()

    def _sized(self) -> Array:
        """The largest displacement that is asked for, or that a drive makes at rest."""
        with np.errstate(all="ignore"):
            at_rest = self._at(np.zeros((len(self._directions), *self.batch)))
        driven = np.where(np.isfinite(at_rest), np.abs(at_rest), 0.0)
        size = np.maximum(np.abs(self._wanted), driven).max(axis=0)
        return np.where(size > 0, size, 1.0)

    def _at(self, state: Array) -> Array:
        instant, *values = self._arguments
        rows = [x for kernel in self._kernels for x in kernel(instant, *state, *values)]
        motion: Array = np.array([np.broadcast_to(x, self.batch) for x in rows]) * self._weights
        return motion

    def residual(self, state: Array) -> Array:
        """What is missing to the motion that is asked for, relative to its size."""
        difference: Array = (self._at(state) - self._wanted) / self.size
        return difference

    def slope(self, state: Array, step: float) -> tuple[Array, Array]:
        """(differences of the residual over ± step·size in each direction, B + (2n, 2n), means of the two sides)."""
        columns, means = [], []
        for direction in self._directions:
            move = step * self.size * direction.reshape(-1, *(1 for _ in self.batch))
            upper, lower = self.residual(state + move), self.residual(state - move)
            columns.append((upper - lower) / (2 * step))
            means.append((upper + lower) / 2)
        return np.moveaxis(np.stack(columns, axis=1), (0, 1), (-2, -1)), np.mean(means, axis=0)

    def step(self, matrix: Array, residual: Array) -> Array:
        """The change of state that makes up for a residual; least squares where the equations are singular."""
        right = np.moveaxis(residual, 0, -1)[..., None]
        try:
            found = np.linalg.solve(matrix, right)
        except np.linalg.LinAlgError:
            found = np.linalg.pinv(matrix) @ right
        change: Array = -self.size * np.moveaxis(found[..., 0], -1, 0)
        return change


def _solved(motion: _Motion, small: float) -> tuple[Array, bool]:
    """(state, whether it lies where the correction terms are smaller than the motion itself), entry by entry.

    Newton's method on all entries together; each step is halved until the residual of its entry falls. The linear
    motion is read off at the amplitude `small`, relative to the size of the motion.
    """
    zero = np.zeros((len(motion._directions), *motion.batch))
    plain, mean = motion.slope(zero, small)
    linear = motion.step(plain, mean)
    state, residual = linear, motion.residual(linear)
    for _ in range(ITERATIONS):
        size = _largest(residual)
        step = motion.step(motion.slope(state, STEP)[0], residual)
        pending, share = size > ROUNDING, 1.0
        for _ in range(HALVINGS):
            trial = np.where(pending, state + share * step, state)
            found = motion.residual(trial)
            better = pending & (_largest(found) < size)
            state, residual = np.where(better, trial, state), np.where(better, found, residual)
            pending, share = pending & ~better, share / 2
            if not pending.any():
                break
        if np.all(_largest(residual) >= size):
            break
    # Where displacement and velocity turn back as functions of the state, the determinant has changed its sign.
    correction = _largest(np.einsum("...jk,k...->j...", plain, (state - linear) / motion.size))
    turned = np.linalg.det(motion.slope(state, STEP)[0]) * np.linalg.det(plain)
    return state, bool(np.all((turned > 0) & (correction < 1)))


def _check(size: Array, within: bool, batch: tuple[int, ...]) -> None:
    if bad := int(np.count_nonzero(size > TOLERANCE)):
        where = f" at {bad} of {size.size} entries" if batch else ""
        raise EvaluationError(
            f"no slow state was found for these conditions{where}: Newton's method leaves a residual of "
            f"{float(size.max()):.2g} of the displacement. The amplitude is out of the range in which the correction "
            "terms of this expansion are small: begin with a smaller amplitude or small parameter"
        )
    if not within:
        raise EvaluationError(
            "the amplitude is out of range: in the slow state found, the correction terms outweigh the motion itself. "
            "Begin with a smaller amplitude or small parameter"
        )


def _largest_frequency(problem: Problem, given: Mapping[str, Array]) -> Array:
    found = []
    for x in map(sp.sympify, problem.natural_frequencies):
        symbols = sorted(x.free_symbols, key=str)
        # As floats, since NumPy has no root of a whole number beyond 64 bits.
        found.append(
            np.asarray(sp.lambdify(symbols, sp.N(x, 17), "numpy")(*(given[s.name] for s in symbols)), dtype=float)
        )
    largest: Array = np.max(np.broadcast_arrays(*found), axis=0)
    return largest


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
