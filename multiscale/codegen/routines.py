"""The routines of an expansion that go into a file of their own, whatever its language."""

from __future__ import annotations

from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass

from multiscale.codegen.functions import (
    Routine,
    defaults,
    displacement_routine,
    eliminated_names,
    frequency_routine,
    inversion_tape,
    slow_flow_routine,
)
from multiscale.codegen.printer import source
from multiscale.codegen.runtime import RUNTIME
from multiscale.codegen.tape import Node, Tape
from multiscale.errors import EvaluationError, MultiscaleError
from multiscale.expansion import Expansion

__all__ = ["FUNCTIONS", "Exported", "Relation", "averages", "exported"]

FUNCTIONS = ("rhs", "jacobian", "frequency", "displacement")
_ELEMENTARY = {"sin", "cos", "exp", "log", "sqrt"}


@dataclass(frozen=True)
class Relation:
    """A detuning worked out from frequencies: `output` on `tape`, from the inputs ``parameter name`` of `arguments`.

    `given` are names that may be given although they are no parameters; `detuning` is "" where nothing is worked out
    but only checked.
    """

    given: tuple[str, ...]
    detuning: str
    arguments: tuple[str, ...]
    tape: Tape
    output: Node


@dataclass(frozen=True)
class Exported:
    """`routines` by name in the order of `FUNCTIONS`; `absent` are those asked for that do not exist, and why."""

    expansion: Expansion
    routines: Mapping[str, Routine]
    absent: Mapping[str, str]
    parameters: tuple[str, ...]
    defaults: Mapping[str, float]
    state: tuple[str, ...]
    relations: tuple[Relation, ...]


def exported(expansion: Expansion, functions: Sequence[str], averaging: bool = False) -> Exported:
    """The routines called `functions`; `averaging` says whether averages of forces can be written."""
    if not isinstance(expansion, Expansion):
        raise EvaluationError(f"an expansion is needed, not a {type(expansion).__name__}: call expand first")
    asked = [functions] if isinstance(functions, str) else list(functions)
    if not asked or (unknown := [name for name in asked if name not in FUNCTIONS]):
        named = repr(unknown[0]) if asked else "empty"
        raise EvaluationError(f"functions: {named}, expected names among {', '.join(FUNCTIONS)}")
    problem, computation = expansion.problem, expansion.computation
    build: dict[str, Callable[[], Routine]] = {
        "rhs": lambda: slow_flow_routine(problem, computation, "cartesian", None),
        "jacobian": lambda: slow_flow_routine(problem, computation, "cartesian", "state"),
        "frequency": lambda: _frequency(expansion),
        "displacement": lambda: displacement_routine(problem, computation, 0, None),
    }
    routines, absent = {}, {}
    for name in [x for x in FUNCTIONS if x in asked]:
        try:
            routines[name] = build[name]()
        except MultiscaleError as error:
            if name in ("rhs", "jacobian"):
                raise
            absent[name] = str(error)
        else:
            _check_functions(routines[name], averaging)
    names = tuple(sorted(str(s.name) for s in (*problem.parameters, problem.small)))
    pairs = zip(expansion.symbols.p, expansion.symbols.q, strict=True)
    state = tuple(str(x.name) for pair in pairs for x in pair)
    return Exported(expansion, routines, absent, names, defaults(problem), state, _relations(expansion))


def _frequency(expansion: Expansion) -> Routine:
    if expansion.slow_flow.phases or not expansion.slow_flow.autonomous:
        raise EvaluationError(
            "the slow flow depends on phases or on time, so the frequency is no function of the amplitude"
        )
    return frequency_routine(expansion.problem, expansion.computation, range(expansion.computation.modes))


def averages(routine: Routine) -> bool:
    """Whether a routine calls more than elementary functions: averages of forces, or what they are made of."""
    tape = routine.program.tape
    steps = [tape.steps[node] for node in tape.live(routine.outputs)]
    return any(s[0] in ("apply", "quad", "jump") or (s[0] == "call" and s[1] not in _ELEMENTARY) for s in steps)


def _check_functions(routine: Routine, averaging: bool = False) -> None:
    """Only elementary functions, with `averaging` also those that averages of forces need."""
    if averages(routine):
        tape = routine.program.tape
        called = set(source(tape, routine.outputs, routine.arguments, "")[1])
        if strange := sorted(called - _ELEMENTARY - RUNTIME.keys()):
            raise EvaluationError(
                f"the problem contains a force given as a Python function ({', '.join(strange)}), which cannot be "
                "written into a file of its own: use slow_flow.to_numpy, or state the force as an expression"
            )
        if not averaging:
            raise EvaluationError(
                "the slow flow averages forces that are not polynomial, which is written for NumPy alone: use "
                "write_module with namespace='numpy', or slow_flow.to_numpy"
            )


def _relations(expansion: Expansion) -> tuple[Relation, ...]:
    found = []
    for detuning in expansion.problem.detunings:
        tape, output, names = inversion_tape(detuning)
        symbol = "" if detuning.detuning is None else str(detuning.detuning.name)
        given = eliminated_names(expansion.problem, detuning)
        found.append(Relation(given, symbol, tuple(names), tape, output))
    return tuple(found)
