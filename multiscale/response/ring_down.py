"""Free decay by the slow flow, up to the stop that friction brings about in finite time.

    da/dt = f(a),    stop where a reaches 0:   f(0+) < 0 as for Coulomb friction, or f ~ −a^p with p < 1

Beyond a = 0 the slow flow means nothing, so it is not integrated there. It also assumes that little is lost within a
half-period: where the loss −f(a)·π/ω exceeds a itself, the oscillator comes to rest at one of its next turning points,
which one averaging cannot tell. That time is reported; what lies behind it is out of range.
"""

from __future__ import annotations

import math
from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any

import numpy as np
import numpy.typing as npt

from multiscale.errors import EvaluationError
from multiscale.expansion import Expansion

__all__ = ["RingDown", "ring_down"]

FLOOR = 1e-10
"""Amplitude, relative to the first one, below which the rest of the way is extrapolated as f ~ −a^p."""


@dataclass(frozen=True)
class RingDown:
    """A free decay; made by `ring_down`.

    Attributes
    ----------
    t : array, shape (N,)
    state : array, shape (2, N)
        Slow states (p, q), as `Expansion.to_numpy` takes them; zero after the stop.
    amplitude : array, shape (N,)
    stop : float or None
        The time at which the slow flow reaches zero amplitude; None where it does not before the last time.
    in_range_until : float
        The time from which the loss in a half-period exceeds the amplitude; infinite where that does not come.
    """

    t: npt.NDArray[np.float64]
    state: npt.NDArray[np.float64]
    amplitude: npt.NDArray[np.float64]
    stop: float | None
    in_range_until: float


def ring_down(
    expansion: Expansion, parameters: Mapping[Any, float], initial: npt.ArrayLike, t: npt.ArrayLike
) -> RingDown:
    """Integrate the slow flow of one free oscillator from a slow state, with an end where friction stops it.

    Parameters
    ----------
    expansion : Expansion
        Of one oscillator without drives.
    parameters : mapping
        A value for every parameter, by symbol or name.
    initial : (p, q)
        Slow state at t[0], as everywhere: u = p cos + q sin of the fast angle.
    t : 1-D array
        Increasing times.

    Raises
    ------
    EvaluationError
        More than one mode, drives, or times that do not increase.
    ImportError
        Without SciPy (the extra ``check``).

    Examples
    --------
    >>> import sympy as sp, multiscale as ms
    >>> time = sp.Symbol("t", real=True)
    >>> eps = sp.Symbol("epsilon", positive=True)
    >>> u = sp.Function("u")(time)
    >>> problem = ms.Problem(u.diff(time, 2) + u + eps*sp.sign(u.diff(time)), u, small=eps)
    >>> decay = ms.ring_down(ms.expand(problem, 1), {eps: 0.05}, [1.0, 0.0], [0.0, 10.0, 40.0])
    >>> round(decay.stop, 6), decay.amplitude.round(6).tolist()
    (31.415927, [1.0, 0.68169, 0.0])
    """
    solve_ivp = _integrator()
    times, start = _checked(expansion, initial, t)
    flow = expansion.slow_flow.to_numpy("polar").bind(parameters)
    frequency = expansion.frequency_to_numpy().bind(parameters)
    floor = math.log(FLOOR * start[0])
    # ln a is integrated: no trial step of the integrator can then pass a = 0.
    first = np.array([math.log(start[0]), start[1]])

    def logarithmic(time: float, y: npt.NDArray[np.float64]) -> npt.NDArray[np.float64]:
        amplitude = math.exp(y[0])
        rate, turn = flow(time, [amplitude, y[1]])
        return np.array([rate / amplitude, turn])

    def reached_floor(_: float, y: npt.NDArray[np.float64]) -> float:
        return float(y[0] - floor)

    def half_period_lost(time: float, y: npt.NDArray[np.float64]) -> float:
        """1 + (da/dt)/a · (half a period)."""
        period = 2 * math.pi / float(frequency(time, [math.exp(y[0]), 0.0]))
        return float(1 + logarithmic(time, y)[0] * period / 2)

    reached_floor.terminal = True  # type: ignore[attr-defined]
    done = solve_ivp(
        logarithmic,
        (times[0], times[-1]),
        first,
        method="DOP853",
        rtol=1e-11,
        atol=1e-11,
        t_eval=times,
        events=(reached_floor, half_period_lost),
    )
    if not done.success:
        raise EvaluationError(f"the slow flow cannot be integrated over the times asked for: {done.message}")
    stop, exponent = _stop(flow, done)
    count = done.y.shape[1]
    amplitude, phase = np.zeros(len(times)), np.zeros(len(times))
    amplitude[:count], phase[:count] = np.exp(done.y[0]), done.y[1]
    if half_period_lost(times[0], first) <= 0:
        until = float(times[0])
    elif len(done.t_events[1]):
        until = float(done.t_events[1][0])
    elif stop is not None:
        # Below the floor: with f ~ −a^p the loss is the amplitude (half a period)/(1 − p) before the stop.
        until = stop - math.pi / float(frequency(times[-1], [0.0, 0.0])) / (1 - exponent)
    else:
        until = math.inf
    # A = ½ a e^{iβ} = ½ (p − iq).
    state = np.array([amplitude * np.cos(phase), -amplitude * np.sin(phase)])
    return RingDown(times, state, amplitude, stop, until)


def _integrator() -> Any:
    try:
        from scipy.integrate import solve_ivp
    except ImportError as error:
        raise ImportError("ring_down needs SciPy: pip install 'multiscale-expansions[check]'") from error
    return solve_ivp


def _stop(flow: Any, done: Any) -> tuple[float | None, float]:
    """(time, p): time at the floor plus what is left of the way, ∫ da/|f| with f ~ −a^p; None for p ≥ 1 (viscous)."""
    if not len(done.t_events[0]):
        return None, math.nan
    time, (logarithm, phase) = float(done.t_events[0][0]), done.y_events[0][0]
    amplitude = math.exp(logarithm)
    rate, above = (float(flow(time, [x, phase])[0]) for x in (amplitude, 2 * amplitude))
    exponent = math.log2(above / rate)
    if exponent > 1 - 1e-6:
        return None, exponent
    return time + amplitude / (-rate * (1 - exponent)), exponent


def _checked(
    expansion: Expansion, initial: npt.ArrayLike, t: npt.ArrayLike
) -> tuple[npt.NDArray[np.float64], npt.NDArray[np.float64]]:
    """(times, (a, β))."""
    if len(expansion.problem.unknowns) != 1 or expansion.slow_flow.phases or not expansion.slow_flow.autonomous:
        raise EvaluationError("ring_down is for one oscillator without drives: integrate slow_flow.to_numpy() instead")
    times, state = np.asarray(t, dtype=float), np.asarray(initial, dtype=float)
    if times.ndim != 1 or len(times) < 2 or not (np.diff(times) > 0).all():
        raise EvaluationError(f"t is {t!r}: expected at least two increasing times")
    if state.shape != (2,) or not np.isfinite(state).all() or not state.any():
        raise EvaluationError(f"initial is {initial!r}: expected a slow state (p, q) that is not zero")
    return times, np.array([math.hypot(*state), math.atan2(-state[1], state[0])])
