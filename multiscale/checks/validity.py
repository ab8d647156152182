"""How large a motion may be for an expansion to hold within a tolerance over a horizon.

The *promise* of an amplitude is the relative error of the motion that `error_growth` expects over the horizon. It is
looked at over many amplitudes, and the end of the range in which it stays within the tolerance is refined.
"""

from __future__ import annotations

import warnings
from collections.abc import Mapping
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import numpy as np
import numpy.typing as npt

from multiscale.checks.error_growth import promise_at
from multiscale.checks.motion import Motion, motion_of
from multiscale.checks.term_sizes import FLOW, term_ratios
from multiscale.errors import EvaluationError, OrderingWarning
from multiscale.expansion import Expansion
from multiscale.remarks import warn_at

if TYPE_CHECKING:
    from matplotlib.axes import Axes

__all__ = ["Validity", "validity"]

Array = npt.NDArray[Any]
DECADES = (-12, 12)
PER_DECADE = 2
REFINED = 16
COMPARABLE = 0.5
"""A ratio of the last two retained terms above which those left out are not small beside them."""


@dataclass(frozen=True, eq=False, repr=False)
class Validity:
    """The range of amplitudes within a tolerance; made by `validity`.

    Attributes
    ----------
    amplitude : float
        The largest amplitude whose promise is within the tolerance, as are all smaller ones down to `least`. Where
        none of those looked at is too large, the last of those given, or inf.
    residual : float
        At that amplitude, what the equations of motion leave over, relative to the restoring term.
    ratios : dict
        At that amplitude, sizes of successive terms relative to each other:
        ``{"slow flow": (|εD_1A|/|ωA|, …), u(t): (|εU_1|/|U_0|, …), …}``, levels that vanish left out.
    least : float
        The smallest amplitude within the tolerance: 0, or more where a drive leaves an error that is no smaller for a
        smaller state.
    tolerance, horizon : float
        Relative error, and the time over which it is promised.
    amplitudes, residuals, promises : array
        What was looked at, by rising amplitude.
    """

    amplitude: float
    residual: float
    ratios: dict[str, tuple[float, ...]]
    least: float
    tolerance: float
    horizon: float
    amplitudes: Array
    residuals: Array
    promises: Array
    expansion: Expansion

    @property
    def throughout(self) -> bool:
        """Whether the tolerance is kept to the largest amplitude looked at, so that no end of the range was found."""
        return bool(self.amplitude >= self.amplitudes[-1])

    def __repr__(self) -> str:
        reach = f"amplitudes to {self.amplitude:.4g}" + (", the largest looked at," if self.throughout else "")
        if self.amplitude == np.inf:
            reach = "all amplitudes"
        return (
            f"Validity: {reach} within {self.tolerance:.3g} over a time of {self.horizon:.4g}, "
            f"order {self.expansion.order}"
        )

    def plot(self, ax: Axes | None = None) -> Axes:
        """The promised error over amplitude, with the tolerance. Needs Matplotlib."""
        from multiscale.plotting import plot_validity

        return plot_validity(self, ax)


def validity(
    expansion: Expansion,
    parameters: Mapping[Any, Any],
    tolerance: float,
    *,
    horizon: float | None = None,
    state: npt.ArrayLike | None = None,
    amplitudes: npt.ArrayLike | None = None,
) -> Validity:
    """The largest amplitude at which an expansion keeps a relative error over a horizon.

    Parameters
    ----------
    expansion : Expansion
    parameters : mapping
        A number for each parameter, by Symbol or name; drives are kept as they are given.
    tolerance : float
        Relative error of the motion that is accepted, such as 0.01.
    horizon : float, optional
        Time over which it is to hold; 1/(εω) with the lowest natural frequency by default. Needed with `ordering`.
    state : array (2·modes,), optional
        Direction of the slow state, (p_1, q_1, p_2, …) in the rotating frame, scaled by the amplitude; equal
        amplitudes by default. The amplitude of a state is that of its largest mode.
    amplitudes : 1-D array, optional
        Amplitudes to look at, rising and positive; those from 1e-12 to 1e12 by default. The end of the range is then
        refined between two of them; where all keep the tolerance, it is the last.

    Returns
    -------
    Validity

    Raises
    ------
    EvaluationError
        Parameters missing or not finite; a tolerance or horizon that is not positive; a tolerance that no amplitude
        keeps.

    Warns
    -----
    OrderingWarning
        At the amplitude found, the last retained level of the slow flow is not small beside the one before.
    SmallDivisorWarning
        At these parameters a combination of frequencies comes close to a natural frequency.

    Notes
    -----
    What the equations of motion leave over drives an error of amplitude and phase, which the linearised slow flow
    carries along the motion, and a part that stays bounded (`multiscale.checks.error_growth`): damping, the effect of
    amplitude on frequency and instability are taken into account. The true error is expected within a factor of
    three of the promise as long as both are small; `compare` gives it. Unknowns share one unit.

    Examples
    --------
    >>> import sympy as sp, multiscale as ms
    >>> t = sp.Symbol("t", real=True)
    >>> eps, alpha = sp.symbols("epsilon alpha", positive=True)
    >>> u = sp.Function("u")(t)
    >>> problem = ms.Problem(u.diff(t, 2) + u + eps*alpha*u**3, u, small=eps)
    >>> [round(ms.validity(ms.expand(problem, n), {eps: 0.1, alpha: 1.0}, 0.01).amplitude, 2) for n in (1, 2, 4)]
    [1.16, 2.14, 3.0]
    """
    motion = motion_of(expansion, parameters)
    warn_at(expansion, dict(zip(motion.flow.parameters, motion.values, strict=True)))
    tolerance = _positive("tolerance", tolerance)
    horizon = _horizon(motion, horizon)
    direction = _direction(motion, state)
    scan = _amplitudes(amplitudes)
    promises, residuals = promise_at(motion, direction[:, None] * scan, horizon)
    least, amplitude, looked = _range(motion, direction, horizon, tolerance, scan, promises, residuals)
    scan, promises, residuals = looked
    if amplitude == np.inf and amplitudes is not None:
        amplitude = float(scan[-1])
    inside = min(amplitude, float(scan[promises <= tolerance].max()))
    ratios = _ratios(motion, direction, inside)
    _warn_of_comparable_terms(expansion, inside, ratios[FLOW])
    return Validity(
        amplitude,
        float(residuals[np.searchsorted(scan, inside)]),
        ratios,
        least,
        tolerance,
        horizon,
        scan,
        residuals,
        promises,
        expansion,
    )


def _range(
    motion: Motion,
    direction: Array,
    horizon: float,
    tolerance: float,
    scan: Array,
    promises: Array,
    residuals: Array,
) -> tuple[float, float, tuple[Array, Array, Array]]:
    """(least, largest amplitude of the first range within the tolerance, everything looked at)."""
    inside = promises <= tolerance
    if not inside.any():
        best = int(np.argmin(promises))
        raise EvaluationError(
            f"no amplitude keeps the tolerance {tolerance:.3g} over the horizon {horizon:.6g}: the best promise is "
            f"{promises[best]:.3g}, at amplitude {scan[best]:.3g}; take a smaller {motion.expansion.problem.small}, a "
            "higher order, or a shorter horizon"
        )
    first = int(np.argmax(inside))
    outside = np.flatnonzero(~inside[first:])
    looked = (scan, promises, residuals)
    least, largest = float(scan[0] if first else 0.0), np.inf
    if first:
        least, looked = _refined(motion, direction, horizon, tolerance, looked, scan[first - 1], scan[first])
    if outside.size:
        last = first + int(outside[0])
        largest, looked = _refined(motion, direction, horizon, tolerance, looked, scan[last - 1], scan[last])
    return least, largest, looked


def _refined(
    motion: Motion,
    direction: Array,
    horizon: float,
    tolerance: float,
    looked: tuple[Array, Array, Array],
    low: float,
    high: float,
) -> tuple[float, tuple[Array, Array, Array]]:
    """The amplitude within the tolerance next to where the promise crosses it between low and high."""
    for _ in range(3):
        points = np.geomspace(low, high, REFINED + 2)[1:-1]
        promises, residuals = promise_at(motion, direction[:, None] * points, horizon)
        joined = [np.concatenate(pair) for pair in zip(looked, (points, promises, residuals), strict=True)]
        order = np.argsort(joined[0])
        looked = tuple(x[order] for x in joined)  # type: ignore[assignment]
        kept = (looked[0] >= low) & (looked[0] <= high)
        here, inside = looked[0][kept], looked[1][kept] <= tolerance
        # The first change, seen from the lower end.
        k = int(np.argmax(inside != inside[0]))
        low, high = float(here[k - 1]), float(here[k])
        result = low if inside[k - 1] else high
    return result, looked


def _positive(name: str, value: Any) -> float:
    try:
        number = float(value)
    except (TypeError, ValueError):
        number = float("nan")
    if not (number > 0 and np.isfinite(number)):
        raise EvaluationError(f"{name} is {value!r}: expected a positive number")
    return number


def _horizon(motion: Motion, horizon: float | None) -> float:
    if horizon is not None:
        return _positive("horizon", horizon)
    if motion.expansion.problem.ordering is not None:
        raise EvaluationError(
            "the problem was stated with `ordering`, where the small parameter is 1 and gives no time: pass horizon="
        )
    if not motion.small:
        raise EvaluationError(f"{motion.expansion.problem.small} is 0: pass horizon=, since 1/ε is none")
    return float(1 / (abs(motion.small) * motion.frequencies.min()))


def _direction(motion: Motion, state: npt.ArrayLike | None) -> Array:
    modes = motion.expansion.computation.modes
    given = np.tile([1.0, 0.0], modes) if state is None else np.asarray(state, dtype=float)
    if given.shape != (2 * modes,) or not np.isfinite(given).all() or not np.any(given):
        raise EvaluationError(f"state is {state!r}: expected {2 * modes} numbers (p_1, q_1, …), not all zero")
    return np.asarray(given / np.hypot(given[::2], given[1::2]).max())


def _amplitudes(given: npt.ArrayLike | None) -> Array:
    if given is None:
        return np.logspace(*DECADES, PER_DECADE * (DECADES[1] - DECADES[0]) + 1)
    found = np.asarray(given, dtype=float)
    if (
        found.ndim != 1
        or not found.size
        or not np.isfinite(found).all()
        or found[0] <= 0
        or np.any(np.diff(found) <= 0)
    ):
        raise EvaluationError("amplitudes: expected a 1-D array of positive numbers, rising")
    return found


def _ratios(motion: Motion, direction: Array, amplitude: float) -> dict[str, tuple[float, ...]]:
    own = np.hypot(direction[::2], direction[1::2]) * amplitude
    return {name: tuple(float(x) for x in rows) for name, rows in term_ratios(motion, own).items()}


def _warn_of_comparable_terms(expansion: Expansion, amplitude: float, ratios: tuple[float, ...]) -> None:
    if len(ratios) > 1 and ratios[-1] > COMPARABLE:
        warnings.warn(
            f"at amplitude {amplitude:.3g} the last level of the slow flow is {ratios[-1]:.2g} times the one before: "
            f"the orders given to the terms do not fit their sizes, or what is left out beyond order {expansion.order} "
            "is comparable with what is kept; compare with the next order",
            OrderingWarning,
            stacklevel=3,
        )
