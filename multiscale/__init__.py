"""Multiple-scale expansions of weakly nonlinear oscillations, to any order, exact and inspectable."""

from importlib import import_module
from typing import TYPE_CHECKING, Any

import multiscale.travel  # noqa: F401 - registers how functions of time are pickled
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
from multiscale.problem import Problem, RestState, states_of_rest
from multiscale.problem.force_law import ForceLaw
from multiscale.slow_flow import SlowFlow

if TYPE_CHECKING:
    from multiscale.checks.amplitude import with_amplitude
    from multiscale.checks.approximants import Approximant, QuadraticApproximant
    from multiscale.checks.certificate import Certificate, certify
    from multiscale.checks.comparison import Comparison, compare
    from multiscale.checks.initial_state import initial_state
    from multiscale.checks.pade import pade
    from multiscale.checks.taylor_remainder import TaylorRemainder, taylor_remainder
    from multiscale.checks.validity import Validity, validity
    from multiscale.codegen.c_source import write_c
    from multiscale.codegen.module import write_module
    from multiscale.estimate import TermEstimate, estimate_terms
    from multiscale.fitting.model import Fit, fit
    from multiscale.fitting.response import ResponseModel, response_model
    from multiscale.fitting.ring_down import RingDownModel, ring_down_model
    from multiscale.large.matrices import Springs
    from multiscale.large.model import ReducedModel
    from multiscale.large.reduction import reduce_model
    from multiscale.response.noise import NoisyFlow, noisy_flow
    from multiscale.response.observable import Observable, harmonics, observable
    from multiscale.response.orbits.limit_cycles import LimitCycle, limit_cycles
    from multiscale.response.orbits.onset import Onset, onset
    from multiscale.response.orbits.periodic_series import PeriodicSeries, periodic_series
    from multiscale.response.ring_down import RingDown, ring_down
    from multiscale.response.steady.backbone import backbone, effective_cubic, effective_damping
    from multiscale.response.steady.branches import Branch
    from multiscale.response.steady.critical_drive import CriticalDrive, critical_drive
    from multiscale.response.steady.equilibria import Equilibrium, equilibria
    from multiscale.response.steady.frequency_response import Response, frequency_response
    from multiscale.response.steady.jumps import Jump
    from multiscale.response.steady.peak import Peak
    from multiscale.response.steady.sweep import Special
    from multiscale.response.tongues.transition_curves import threshold, transition_curves
    from multiscale.storage.document import from_json, to_json

__version__ = "0.1.0"

__all__ = [
    "Approximant",
    "Branch",
    "Certificate",
    "Comparison",
    "CriticalDrive",
    "Equilibrium",
    "EvaluationError",
    "Expansion",
    "Fit",
    "ForceLaw",
    "Jump",
    "Level",
    "LimitCycle",
    "MultiscaleError",
    "NoisyFlow",
    "NumpyFunction",
    "Observable",
    "Onset",
    "OrderingWarning",
    "Peak",
    "PeriodicSeries",
    "Problem",
    "ProblemError",
    "QuadraticApproximant",
    "ReducedModel",
    "ResonanceError",
    "Response",
    "ResponseModel",
    "RestState",
    "RingDown",
    "RingDownModel",
    "SlowFlow",
    "SmallDivisorWarning",
    "Special",
    "Springs",
    "StorageError",
    "TaylorRemainder",
    "TermEstimate",
    "UnsupportedTermError",
    "Validity",
    "backbone",
    "certify",
    "compare",
    "critical_drive",
    "effective_cubic",
    "effective_damping",
    "equilibria",
    "estimate_terms",
    "expand",
    "extend",
    "fit",
    "frequency_response",
    "from_json",
    "harmonics",
    "initial_state",
    "limit_cycles",
    "noisy_flow",
    "observable",
    "onset",
    "pade",
    "periodic_series",
    "reduce_model",
    "response_model",
    "ring_down",
    "ring_down_model",
    "states_of_rest",
    "taylor_remainder",
    "threshold",
    "to_json",
    "transition_curves",
    "validity",
    "with_amplitude",
    "write_c",
    "write_module",
]

_LATER = {
    "Approximant": "checks.approximants",
    "Branch": "response.steady.branches",
    "Certificate": "checks.certificate",
    "Comparison": "checks.comparison",
    "CriticalDrive": "response.steady.critical_drive",
    "Equilibrium": "response.steady.equilibria",
    "Fit": "fitting.model",
    "Jump": "response.steady.jumps",
    "LimitCycle": "response.orbits.limit_cycles",
    "NoisyFlow": "response.noise",
    "Observable": "response.observable",
    "Onset": "response.orbits.onset",
    "Peak": "response.steady.peak",
    "PeriodicSeries": "response.orbits.periodic_series",
    "QuadraticApproximant": "checks.approximants",
    "ReducedModel": "large.model",
    "Response": "response.steady.frequency_response",
    "ResponseModel": "fitting.response",
    "RingDown": "response.ring_down",
    "RingDownModel": "fitting.ring_down",
    "Springs": "large.matrices",
    "Special": "response.steady.sweep",
    "TaylorRemainder": "checks.taylor_remainder",
    "TermEstimate": "estimate",
    "Validity": "checks.validity",
    "backbone": "response.steady.backbone",
    "certify": "checks.certificate",
    "compare": "checks.comparison",
    "critical_drive": "response.steady.critical_drive",
    "effective_cubic": "response.steady.backbone",
    "effective_damping": "response.steady.backbone",
    "equilibria": "response.steady.equilibria",
    "estimate_terms": "estimate",
    "fit": "fitting.model",
    "frequency_response": "response.steady.frequency_response",
    "from_json": "storage.document",
    "harmonics": "response.observable",
    "initial_state": "checks.initial_state",
    "limit_cycles": "response.orbits.limit_cycles",
    "noisy_flow": "response.noise",
    "observable": "response.observable",
    "onset": "response.orbits.onset",
    "pade": "checks.pade",
    "periodic_series": "response.orbits.periodic_series",
    "reduce_model": "large.reduction",
    "response_model": "fitting.response",
    "ring_down": "response.ring_down",
    "ring_down_model": "fitting.ring_down",
    "taylor_remainder": "checks.taylor_remainder",
    "threshold": "response.tongues.transition_curves",
    "to_json": "storage.document",
    "transition_curves": "response.tongues.transition_curves",
    "validity": "checks.validity",
    "with_amplitude": "checks.amplitude",
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
