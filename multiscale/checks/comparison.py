"""The motion of an expansion beside that of the equations as stated, and the order at which they part.

On 0 ≤ t ≤ c/ε the motion of an expansion of order N is in error by O(ε^N). For several ε the equations as stated are
integrated from given initial conditions, the slow flow from the slow state that reconstructs them, and

    error(ε) = max_t |Σ εⁿU_n(t) − u(t)| / max_t |u(t)| ,       order = slope of log error over log ε
"""

from __future__ import annotations

from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass, field
from typing import TYPE_CHECKING, Any

import numpy as np
import numpy.typing as npt
import sympy as sp

from multiscale.checks.one_motion import Run
from multiscale.errors import EvaluationError
from multiscale.expansion import Expansion

if TYPE_CHECKING:
    from matplotlib.axes import Axes

__all__ = ["Comparison", "compare"]

Array = npt.NDArray[Any]
MARGIN = 10.0
"""An error counts as that of the expansion when it is this many times larger than that of the integration."""


@dataclass(frozen=True, eq=False, repr=False)
class Comparison:
    """Errors of an expansion in the motion itself, for several values of the small parameter.

    Attributes
    ----------
    small : Symbol
        The small parameter.
    small_values : array (k,)
        Its values, largest first.
    errors : array (k,)
        Largest difference of any displacement from the motion of the equations as stated, over the whole time and
        divided by the largest displacement of any unknown.
    floors : array (k,)
        The error of the numerical integration in the same measure, from two tolerances.
    limited : array (k,) of bool
        Where the integration error is what is seen: less than ten times the floor. Left out of the fit.
    slopes : array
        The observed order between neighbouring values that are not limited.
    order : float
        The observed order, the least-squares slope of log error over log ε; nan with fewer than two values.
    spread : float
        Largest less smallest of `slopes`: small where the errors follow one power.
    expected : int
        The order N of the expansion: on times of 1/ε the error is O(ε^N); symmetry may raise it.
    horizon, power :
        The times compared are 0 … horizon/ε^power.
    """

    small: sp.Symbol
    small_values: Array
    errors: Array
    floors: Array
    expected: int
    horizon: float
    power: int = 1
    limited: Array = field(init=False)
    slopes: Array = field(init=False)
    order: float = field(init=False)
    spread: float = field(init=False)

    def __post_init__(self) -> None:
        limited = ~(self.errors > MARGIN * self.floors)
        x, y = np.log(self.small_values[~limited]), np.log(self.errors[~limited])
        slopes = np.diff(y) / np.diff(x)
        enough = len(x) > 1
        found = {
            "limited": limited,
            "slopes": slopes,
            "order": float(np.polyfit(x, y, 1)[0]) if enough else np.nan,
            "spread": float(np.ptp(slopes)) if enough else np.nan,
        }
        for name, value in found.items():
            object.__setattr__(self, name, value)
        for array in (self.small_values, self.errors, self.floors, limited, slopes):
            array.flags.writeable = False

    @property
    def warnings(self) -> tuple[str, ...]:
        """What a careful reader of the numbers should know."""
        found = []
        if self.limited.any():
            values = ", ".join(f"{x:.4g}" for x in self.small_values[self.limited])
            found.append(
                f"at {self.small} = {values} the integration error is what is seen: left out of the fit; use larger "
                "values"
            )
        if not len(self.slopes):
            found.append("no order can be given: fewer than two values show the error of the expansion")
        return tuple(found)

    def __repr__(self) -> str:
        last = f", {int(self.limited.sum())} limited by the integration" if self.limited.any() else ""
        return (
            f"Comparison at {len(self.errors)} values of {self.small}: observed order {self.order:.2f} "
            f"(spread {self.spread:.2f}), expected {self.expected}{last}"
        )

    def plot(self, ax: Axes | None = None) -> Axes:
        """The errors over the small parameter, both logarithmic, with the fitted power. Needs Matplotlib."""
        from multiscale.plotting import plot_comparison

        return plot_comparison(self, ax)


def compare(
    expansion: Expansion,
    parameters: Mapping[Any, Any],
    initial: Mapping[sp.Expr, float] | Sequence[float] | Array,
    small_values: Sequence[float] | Array,
    horizon: float,
    *,
    power: int = 1,
    points: int = 1000,
    on_value: Callable[[float, float], object] | None = None,
) -> Comparison:
    """Compare an expansion with direct integration of the equations as stated, on times of order 1/ε.

    The equations are taken as they were written, solved for the accelerations and integrated by SciPy (DOP853, relative
    tolerance 1e-12); a second integration at 1e-11 tells how far its result can be trusted. Takes seconds.

    Parameters
    ----------
    expansion : Expansion
    parameters : mapping
        A number for each parameter but the small one, by Symbol or name. Detunings are held fixed while ε varies, so a
        drive frequency cannot stand for one.
    initial : mapping or array
        {u: displacement, u.diff(t): velocity} at t = 0, or a slow state, Cartesian in the frame, from which the
        displacements and velocities follow.
    small_values : sequence of float
        At least two positive values, of which the larger ones should be small enough for the leading term of the error
        to dominate.
    horizon : float
        c: the time compared is c/ε^power, in the units of time of the equations.
    power : int
        1 as a rule; 2 where the flow begins at ε².
    points : int
        Instants at which the displacements are compared.
    on_value : callable, optional
        Called with (ε, error) after each value, largest ε first; returning False ends with the values so far.

    Returns
    -------
    Comparison

    Raises
    ------
    EvaluationError
        Values missing, unknown or not finite; a frequency given in place of its detuning; no slow state for the initial
        conditions; a motion that leaves all bounds.
    ImportError
        SciPy is missing; the message names the extra.

    Notes
    -----
    With `ordering` there is no ε in the equations. Each value of the small parameter then scales every unknown and
    parameter by the power of it that `ordering` gives, {u: 1, mu: 2} → εu(0), ε²μ: `parameters` and `initial` are the
    values at ε = 1, and what is compared are the user's own unknowns of the scaled problem, relative to their size.

    Examples
    --------
    >>> import sympy as sp, multiscale as ms
    >>> t = sp.Symbol("t", real=True)
    >>> eps, mu = sp.symbols("epsilon mu", positive=True)
    >>> u = sp.Function("u")(t)
    >>> problem = ms.Problem(u.diff(t, 2) + u + eps*(2*mu*u.diff(t) + u**3), u, small=eps)
    >>> result = ms.expand(problem, order=1)
    >>> ms.compare(result, {mu: 0.2}, {u: 1.0, u.diff(t): 0.0}, [0.02, 0.01], horizon=1.0)
    Comparison at 2 values of epsilon: observed order 0.97 (spread 0.00), expected 1
    """
    run = Run.of(expansion, parameters, initial, horizon, power, points)
    rows = []
    for small in _checked_values(expansion, small_values):
        error, floor = run.at(small)
        rows.append((small, error, floor))
        if on_value is not None and on_value(small, error) is False:
            break
    values, errors, floors = (np.array(column) for column in zip(*rows, strict=True))
    return Comparison(expansion.problem.small, values, errors, floors, expansion.order, float(horizon), power)


def _checked_values(expansion: Expansion, given: Sequence[float] | Array) -> list[float]:
    try:
        values = sorted({float(x) for x in given}, reverse=True)
    except (TypeError, ValueError):
        values = []
    if len(values) < 2 or not all(0 < x < np.inf for x in values):
        raise EvaluationError(
            f"small_values is {given!r}: expected at least two different positive values of {expansion.problem.small}"
        )
    return values
