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
    from multiscale.codegen.c_source import write_c
    from multiscale.codegen.module import write_module
    from multiscale.estimate import TermEstimate, estimate_terms
    from multiscale.response.observable import Observable, harmonics, observable
    from multiscale.response.orbits.limit_cycles import LimitCycle, limit_cycles
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
    "TermEstimate",
    "UnsupportedTermError",
    "backbone",
    "critical_drive",
    "effective_cubic",
    "effective_damping",
    "equilibria",
    "estimate_terms",
    "expand",
    "extend",
    "frequency_response",
    "harmonics",
    "limit_cycles",
    "observable",
    "periodic_series",
    "threshold",
    "transition_curves",
    "write_c",
    "write_module",
]

_LATER = {
    "Branch": "response.steady.branches",
    "CriticalDrive": "response.steady.critical_drive",
    "Equilibrium": "response.steady.equilibria",
    "Jump": "response.steady.jumps",
    "LimitCycle": "response.orbits.limit_cycles",
    "Observable": "response.observable",
    "Peak": "response.steady.peak",
    "PeriodicSeries": "response.orbits.periodic_series",
    "Response": "response.steady.frequency_response",
    "Special": "response.steady.sweep",
    "TermEstimate": "estimate",
    "backbone": "response.steady.backbone",
    "critical_drive": "response.steady.critical_drive",
    "effective_cubic": "response.steady.backbone",
    "effective_damping": "response.steady.backbone",
    "equilibria": "response.steady.equilibria",
    "estimate_terms": "estimate",
    "frequency_response": "response.steady.frequency_response",
    "harmonics": "response.observable",
    "limit_cycles": "response.orbits.limit_cycles",
    "observable": "response.observable",
    "periodic_series": "response.orbits.periodic_series",
    "threshold": "response.tongues.transition_curves",
    "transition_curves": "response.tongues.transition_curves",
    "write_c": "codegen.c_source",
    "write_module": "codegen.module",
}


def __getattr__(name: str) -> Any:
    """The functions on results are imported when first used, which keeps ``import multiscale`` light."""
    if name not in _LATER:
        raise AttributeError(f"module 'multiscale' has no attribute {name!r}")
    value = getattr(import_module(f"multiscale.{_LATER[name]}"), name)
    globals()[name] = value
    return value


def __dir__() -> list[str]:
    return sorted({*globals(), *__all__})
