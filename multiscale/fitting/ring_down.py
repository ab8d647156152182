"""A free or driven motion recorded in time: the slow flow and its sensitivities, integrated together.

dy/dt = F(t, y; P),    dS/dt = F_y S + F_P ∂P/∂x,    S = ∂y/∂x,    x = (free parameters, y(t_0))

prediction = g(t, y; P),    ∂prediction/∂x = g_y S + g_P ∂P/∂x
"""

from __future__ import annotations

from collections.abc import Iterable, Mapping
from dataclasses import dataclass
from typing import Any, Literal

import numpy as np
import numpy.typing as npt

from multiscale.codegen.numpy_function import NumpyFunction
from multiscale.errors import EvaluationError
from multiscale.expansion import Expansion
from multiscale.fitting.model import amplitude_slope
from multiscale.fitting.unknowns import Unknowns

__all__ = ["RingDownModel", "ring_down_model"]

Array = npt.NDArray[Any]
Observed = Literal["displacement", "velocity", "amplitude"]
_DERIVATIVE = {"displacement": 0, "velocity": 1}
_TOLERANCE = 1e-10
_SMALLEST = 1e-200
"""Below it the tolerance of the integration would leave the range of floating-point numbers."""


@dataclass(frozen=True, eq=False, repr=False)
class RingDownModel:
    """A record of the motion as a function of parameters and initial slow state; made by `ring_down_model`.

    Attributes
    ----------
    names : tuple of str
        What the entries of x are: the free parameters, then the slow state at the first time (p, q of each mode).
    times : array (T,)
    """

    times: Array
    observed: Observed
    index: int
    unknowns: Unknowns
    _flow: tuple[NumpyFunction, NumpyFunction, NumpyFunction]
    _seen: tuple[NumpyFunction, NumpyFunction, NumpyFunction] | None

    @property
    def names(self) -> tuple[str, ...]:
        size = self._flow[0].size
        if size == 2:
            return (*self.unknowns.names, "p", "q")
        return (*self.unknowns.names, *(f"{letter}_{k + 1}" for k in range(size // 2) for letter in "pq"))

    def __repr__(self) -> str:
        return f"RingDownModel of {len(self.times)} times, x = ({', '.join(self.names)})"

    def predict(self, x: npt.ArrayLike) -> Array:
        """The record, shape (T,)."""
        free, start = self._split(x)
        values = self.unknowns.values(free)
        states = self._states(free, start)
        if self._seen is None:
            return np.asarray(np.hypot(*states[2 * self.index : 2 * self.index + 2]))
        return np.asarray(self._seen[0](self.times, states, *values)[self.index])

    def jacobian(self, x: npt.ArrayLike) -> Array:
        """Its derivative, shape (T, len(names))."""
        free, start = self._split(x)
        values, chain = self.unknowns.values(free), self.unknowns.chain(free)
        states, slopes = self._with_slopes(free, start)
        if self._seen is None:
            p, q = states[2 * self.index : 2 * self.index + 2]
            return amplitude_slope(p, q, slopes[2 * self.index], slopes[2 * self.index + 1]).T
        by_state = self._seen[1](self.times, states, *values)[self.index]
        by_parameter = self._seen[2](self.times, states, *values)[self.index]
        result = np.einsum("nt,nkt->tk", by_state, slopes)
        result[:, : len(free)] += by_parameter.T @ chain
        return np.asarray(result)

    def _split(self, x: npt.ArrayLike) -> tuple[Array, Array]:
        x = np.asarray(x, dtype=float)
        if x.shape != (len(self.names),):
            raise EvaluationError(f"x has shape {x.shape}: expected ({len(self.names)},), for {', '.join(self.names)}")
        return x[: len(self.unknowns.names)], x[len(self.unknowns.names) :]

    def _states(self, free: Array, start: Array) -> Array:
        values, flow = self.unknowns.values(free), self._flow[0]
        return self._integrated(lambda t, y: flow(t, y, *values), start, _TOLERANCE * self._size(start, values))

    def _size(self, start: Array, values: tuple[Any, ...]) -> float:
        """The size of the motion: where it starts, or what a drive makes of rest in the time recorded."""
        size = float(np.abs(start).max())
        if size == 0:
            size = float(np.abs(self._flow[0](self.times[0], start, *values)).max() * np.ptp(self.times))
        return max(size, _SMALLEST) if size else 1.0

    def _with_slopes(self, free: Array, start: Array) -> tuple[Array, Array]:
        """States (n, T) and their derivatives by x (n, len(x), T)."""
        values, chain = self.unknowns.values(free), self.unknowns.chain(free)
        flow, by_state, by_parameter = self._flow
        n, size = len(start), self._size(start, values)
        # Every derivative in units that make it as large as the state, so that one tolerance suits all.
        units = np.concatenate([np.where(free == 0, 1.0, np.abs(free)), np.full(n, size)])
        first = np.concatenate([np.zeros((n, len(free))), np.eye(n)], axis=1) * units

        def rate(t: float, z: Array) -> Array:
            y, slopes = z[:n], z[n:].reshape(n, -1)
            turning = by_state(t, y, *values) @ slopes
            turning[:, : len(free)] += by_parameter(t, y, *values) @ chain * units[: len(free)]
            return np.concatenate([flow(t, y, *values), turning.ravel()])

        found = self._integrated(rate, np.concatenate([start, first.ravel()]), _TOLERANCE * size)
        return found[:n], found[n:].reshape(n, -1, len(self.times)) / units[:, None]

    def _integrated(self, rate: Any, start: Array, floor: float) -> Array:
        from scipy.integrate import solve_ivp

        span = (self.times[0], self.times[-1])
        done = solve_ivp(rate, span, start, method="DOP853", t_eval=self.times, rtol=_TOLERANCE, atol=floor)
        if not done.success:
            raise EvaluationError(
                f"the slow flow cannot be integrated to t = {span[1]} at these values: {done.message}"
            )
        return np.asarray(done.y)


def ring_down_model(
    expansion: Expansion,
    times: npt.ArrayLike,
    *,
    free: Iterable[Any],
    known: Mapping[Any, Any] | None = None,
    observed: Observed = "displacement",
    index: int = 0,
) -> RingDownModel:
    """A model of a motion recorded in time, for `fit` or ``scipy.optimize.least_squares``.

    The slow flow is integrated, not the fast motion: the cost does not depend on the number of periods recorded.

    Parameters
    ----------
    expansion : Expansion
        Its amplitude is the fundamental one.
    times : array (T,), increasing
        In the time unit of the equations.
    free : sequence of Symbol or str
        The parameters to be found. A frequency that a relation eliminated may stand for its detuning.
    known : mapping, optional
        The values of all others, by Symbol or name.
    observed : "displacement", "velocity" or "amplitude"
        What was recorded: an unknown, its time derivative, or the slow amplitude of a mode (from a lock-in amplifier).
    index : int
        Which unknown, or which mode.

    Returns
    -------
    RingDownModel
        ``predict(x)`` (T,) and ``jacobian(x)`` (T, K), x being the values of ``names``.

    Raises
    ------
    EvaluationError
        Parameters that are missing or given twice, times that do not increase, an index that does not exist.
    ImportError
        SciPy (extra ``check``) is not installed.

    Examples
    --------
    See `fit`.
    """
    try:
        import scipy.integrate  # noqa: F401
    except ImportError:
        raise ImportError("ring_down_model needs SciPy: pip install 'multiscale-expansions[check]'") from None
    record = np.asarray(times, dtype=float)
    if record.ndim != 1 or len(record) < 2 or not (np.isfinite(record).all() and (np.diff(record) > 0).all()):
        raise EvaluationError("times must be a 1-D array of at least two finite, increasing values")
    if observed not in ("displacement", "velocity", "amplitude"):
        raise EvaluationError(f"observed is {observed!r}: expected 'displacement', 'velocity' or 'amplitude'")
    flow = expansion.slow_flow
    count = len(expansion.symbols.A) if observed == "amplitude" else len(expansion.problem.unknowns)
    if index not in range(count):
        raise EvaluationError(f"index is {index!r}: expected 0 … {count - 1}")
    slow = (flow.to_numpy(), flow.to_numpy(wrt="state"), flow.to_numpy(wrt="parameters"))
    seen = None
    if observed != "amplitude":
        d = _DERIVATIVE[observed]
        seen = (
            expansion.to_numpy(d),
            expansion.to_numpy(d, wrt="state"),
            expansion.to_numpy(d, wrt="parameters"),
        )
    return RingDownModel(record, observed, index, Unknowns.of(expansion.problem, slow[0], free, known), slow, seen)
