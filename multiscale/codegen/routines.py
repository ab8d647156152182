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
from multiscale.codegen.runtime import RUNTIME
from multiscale.codegen.tape import Node, Tape
from multiscale.codegen.travelling import ELEMENTARY
from multiscale.errors import EvaluationError, MultiscaleError
from multiscale.expansion import Expansion

__all__ = ["FUNCTIONS", "Exported", "Relation", "exported", "functions_called"]

FUNCTIONS = ("rhs", "jacobian", "frequency", "displacement")


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


def exported(expansion: Expansion, functions: Sequence[str]) -> Exported:
    """The routines called `functions`."""
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
            _check_functions(routines[name])
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


def functions_called(made: Exported) -> set[str]:
    """Everything that the routines and the relations call."""
    found: set[str] = set()
    for routine in made.routines.values():
        found |= _called(routine.program.tape, routine.outputs)
    for relation in made.relations:
        found |= _called(relation.tape, [relation.output])
    return found


def _called(tape: Tape, outputs: Sequence[Node]) -> set[str]:
    """The functions that a computation calls, those of the integrands of its phase averages included."""
    found = set()
    for node in tape.live(outputs):
        step = tape.steps[node]
        if step[0] in ("call", "apply"):
            found.add(str(step[1]))
        elif step[0] in ("quad", "jump"):
            function = "jump" if step[0] == "jump" else "arcs" if step[2] else "circle"
            found |= {function, *_called(step[1].tape, [step[1].output])}
    return found


def _check_functions(routine: Routine) -> None:
    known = ELEMENTARY.keys() | RUNTIME.keys()
    if strange := sorted(_called(routine.program.tape, routine.outputs) - known):
        named = ", ".join(name.removeprefix("law_") for name in strange)
        raise EvaluationError(
            f"the problem contains a force given as a Python function or a table ({named}), which cannot be written "
            "into a file of its own: use slow_flow.to_numpy, or state the force as an expression"
        )


def _relations(expansion: Expansion) -> tuple[Relation, ...]:
    found = []
    for detuning in expansion.problem.detunings:
        tape, output, names = inversion_tape(detuning)
        symbol = "" if detuning.detuning is None else str(detuning.detuning.name)
        given = eliminated_names(expansion.problem, detuning)
        found.append(Relation(given, symbol, tuple(names), tape, output))
    return tuple(found)
