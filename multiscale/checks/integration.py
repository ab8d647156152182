"""Integration by SciPy to two tight tolerances, so that its own error is not taken for that of the expansion."""

from __future__ import annotations

from collections.abc import Callable
from functools import lru_cache
from typing import Any

import numpy as np
import numpy.typing as npt

from multiscale.checks.stated import stated
from multiscale.errors import EvaluationError
from multiscale.problem import Problem

__all__ = ["RELATIVE", "integrated", "motion_as_stated"]

Array = npt.NDArray[Any]
RELATIVE = (1e-12, 1e-11)
"""Relative tolerances of the two integrations; what they differ by is the error of the second."""


def integrated(
    rhs: Callable[[float, Array], Any], start: Array, times: Array, size: float | Array, what: str
) -> list[Array]:
    """The states at `times` (columns, the first is the start), once for each tolerance of `RELATIVE`.

    `size` is that of the solution, or of each of its components; absolute tolerances are a tenth of the relative ones
    times it.
    """
    try:
        from scipy.integrate import solve_ivp
    except ImportError:
        raise ImportError(
            "compare needs SciPy, which is not installed: pip install 'multiscale-expansions[check]'"
        ) from None
    found = []
    for relative in RELATIVE:
        with np.errstate(all="ignore"):
            done = solve_ivp(
                rhs,
                (times[0], times[-1]),
                start,
                method="DOP853",
                t_eval=times,
                rtol=relative,
                atol=relative * size / 10,
            )
        if not done.success:
            raise EvaluationError(
                f"the integration of {what} stops at time {done.t[-1] if len(done.t) else times[0]:.6g} of "
                f"{times[-1]:.6g} ({done.message}): the motion grows beyond bounds, or is singular there. Use a "
                "shorter horizon, a smaller amplitude or smaller values of the small parameter"
            )
        found.append(done.y)
    return found


@lru_cache(maxsize=64)
def motion_as_stated(
    problem: Problem,
    values: tuple[tuple[str, float], ...],
    places: tuple[float, ...],
    velocities: tuple[float, ...],
    end: float,
    points: int,
    size: int,
    speed: int,
) -> tuple[Array, ...]:
    """Displacements (unknowns, points) from 0 to `end` for each tolerance, by the equations as stated.

    `places` and `velocities` are those at the start; displacements are of the size 10^`size` and velocities of
    10^`speed`, which differ by the frequency and thus by the unit of time. Orders of one expansion are
    compared with the same motion, so the latest ones are kept.
    """
    times = np.linspace(0.0, end, points)
    equations = stated(problem)
    start = np.array(equations.start(places, velocities))
    sizes = np.array([10.0**size] * equations.size + [10.0**speed] * len(equations.second))
    found = integrated(equations.rhs(dict(values)), start, times, sizes, "the equations as stated")
    motion = tuple(y[: equations.size].copy() for y in found)
    for y in motion:
        y.flags.writeable = False
    return motion
