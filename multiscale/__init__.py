"""Multiple-scale expansions of weakly nonlinear oscillations, to any order, exact and inspectable."""

from importlib import import_module
from typing import TYPE_CHECKING, Any

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
from multiscale.slow_flow import SlowFlow

if TYPE_CHECKING:
    from multiscale.response.observable import Observable, harmonics, observable
    from multiscale.response.orbits.limit_cycles import LimitCycle, limit_cycles
    from multiscale.response.orbits.onset import Onset, onset
    from multiscale.response.orbits.periodic_series import PeriodicSeries, periodic_series
    from multiscale.response.steady.backbone import backbone, effective_cubic, effective_damping
    from multiscale.response.steady.branches import Branch
    from multiscale.response.steady.critical_drive import CriticalDrive, critical_drive
    from multiscale.response.steady.equilibria import Equilibrium, equilibria
    from multiscale.response.steady.frequency_response import Response, frequency_response
    from multiscale.response.steady.jumps import Jump
    from multiscale.response.steady.peak import Peak
    from multiscale.response.steady.sweep import Special
    from multiscale.response.tongues.transition_curves import threshold, transition_curves

__version__ = "0.1.0"

__all__ = [
    "Branch",
    "CriticalDrive",
    "Equilibrium",
    "EvaluationError",
    "Expansion",
    "Jump",
    "Level",
    "LimitCycle",
    "MultiscaleError",
    "NumpyFunction",
    "Observable",
    "Onset",
    "OrderingWarning",
    "Peak",
    "PeriodicSeries",
    "Problem",
    "ProblemError",
    "ResonanceError",
    "Response",
    "SlowFlow",
    "SmallDivisorWarning",
    "Special",
    "StorageError",
    "UnsupportedTermError",
    "backbone",
    "critical_drive",
    "effective_cubic",
    "effective_damping",
    "equilibria",
    "expand",
    "extend",
    "frequency_response",
    "harmonics",
    "limit_cycles",
    "observable",
    "onset",
    "periodic_series",
    "threshold",
    "transition_curves",
]

_RESPONSE = {
    "Branch": "steady.branches",
    "CriticalDrive": "steady.critical_drive",
    "Equilibrium": "steady.equilibria",
    "Jump": "steady.jumps",
    "LimitCycle": "orbits.limit_cycles",
    "Observable": "observable",
    "Onset": "orbits.onset",
    "Peak": "steady.peak",
    "PeriodicSeries": "orbits.periodic_series",
    "Response": "steady.frequency_response",
    "Special": "steady.sweep",
    "backbone": "steady.backbone",
    "critical_drive": "steady.critical_drive",
    "effective_cubic": "steady.backbone",
    "effective_damping": "steady.backbone",
    "equilibria": "steady.equilibria",
    "frequency_response": "steady.frequency_response",
    "harmonics": "observable",
    "limit_cycles": "orbits.limit_cycles",
    "observable": "observable",
    "onset": "orbits.onset",
    "periodic_series": "orbits.periodic_series",
    "threshold": "tongues.transition_curves",
    "transition_curves": "tongues.transition_curves",
}


def __getattr__(name: str) -> Any:
    """The functions on results are imported when first used, which keeps ``import multiscale`` light."""
    if name not in _RESPONSE:
        raise AttributeError(f"module 'multiscale' has no attribute {name!r}")
    value = getattr(import_module(f"multiscale.response.{_RESPONSE[name]}"), name)
    globals()[name] = value
    return value


def __dir__() -> list[str]:
    return sorted({*globals(), *__all__})
