"""Direct integration of the equations of motion, and the order of an error. SciPy is an optional dependency."""

from __future__ import annotations

from collections.abc import Callable, Sequence
from typing import Any

import numpy as np
import pytest

TOLERANCE = {"method": "DOP853", "rtol": 1e-11, "atol": 1e-13}


def integrate(rhs: Callable[[float, Any], Any], start: Sequence[complex], times: np.ndarray) -> np.ndarray:
    """The states at `times` (first one: the start), as columns."""
    scipy_integrate = pytest.importorskip("scipy.integrate")
    found = scipy_integrate.solve_ivp(rhs, (times[0], times[-1]), start, t_eval=times, **TOLERANCE)
    assert found.success, found.message
    return found.y


def maxima(rhs: Callable[[float, Any], Any], start: Sequence[float], horizon: float) -> tuple[np.ndarray, np.ndarray]:
    """Times and heights of the maxima of the first component, whose derivative is the second."""
    scipy_integrate = pytest.importorskip("scipy.integrate")

    def top(t: float, y: Any) -> float:
        return y[1]

    top.direction = -1  # type: ignore[attr-defined]
    # The short steps keep the interpolation, by which the event is located, as good as the integration.
    found = scipy_integrate.solve_ivp(rhs, (0.0, horizon), start, events=top, max_step=0.05, **TOLERANCE)
    assert found.success, found.message
    return found.t_events[0], found.y_events[0][:, 0]


def slope(small: Sequence[float], errors: Sequence[float]) -> float:
    """The exponent p of the least-squares fit errors ~ C εᵖ."""
    return float(np.polyfit(np.log(small), np.log(errors), 1)[0])
