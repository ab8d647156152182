"""Multiple-scale expansions of weakly nonlinear oscillations, to any order, exact and inspectable."""

from multiscale.codegen.numpy_function import NumpyFunction
from multiscale.errors import (
    EvaluationError,
    MultiscaleError,
    OrderingWarning,
    ProblemError,
    ResonanceError,
    SmallDivisorWarning,
    StorageError,
    UnsupportedTermError,
)
from multiscale.expansion import Expansion, expand, extend
from multiscale.level import Level
from multiscale.problem import Problem
from multiscale.response.limit_cycles import LimitCycle, limit_cycles
from multiscale.response.periodic_series import PeriodicSeries, periodic_series
from multiscale.response.transition_curves import threshold, transition_curves
from multiscale.slow_flow import SlowFlow

__version__ = "0.1.0"

__all__ = [
    "EvaluationError",
    "Expansion",
    "Level",
    "LimitCycle",
    "MultiscaleError",
    "NumpyFunction",
    "OrderingWarning",
    "PeriodicSeries",
    "Problem",
    "ProblemError",
    "ResonanceError",
    "SlowFlow",
    "SmallDivisorWarning",
    "StorageError",
    "UnsupportedTermError",
    "expand",
    "extend",
    "limit_cycles",
    "periodic_series",
    "threshold",
    "transition_curves",
]
