"""The functions that results offer: slow flow, its Jacobians, frequency, displacement."""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass
from fractions import Fraction

import sympy as sp

from multiscale.algebra.quotient import Quotient
from multiscale.codegen.calls import evaluate
from multiscale.codegen.numpy_function import Inversion, NumpyFunction
from multiscale.codegen.printer import source
from multiscale.codegen.program import Complex, Program
from multiscale.codegen.tape import Node, Tape
from multiscale.computed import Computation, Finished
from multiscale.frame import turns
from multiscale.problem import Problem
from multiscale.problem.force_law import law_name
from multiscale.problem.relations import Detuning

__all__ = [
    "coefficient_function",
    "displacement_function",
    "field_coefficient_function",
    "frequency_function",
    "observable_function",
    "slow_flow_function",
]

Key = tuple[int, int, tuple[int, ...]]


@dataclass(frozen=True)
class Routine:
    """A computation ready to be written in some language: what its outputs are, on the tape of `program`.

    `state` names the inputs that hold the state; `shape` is that of the outputs for one state.
    """

    program: Program
    state: tuple[str, ...]
    outputs: tuple[Node, ...]
    shape: tuple[int, ...]
    heading: str
    is_complex: bool = False

    @property
    def arguments(self) -> list[str]:
        """The inputs in the order of every generated function: time, state, parameters."""
        return ["time t", *self.state, *(f"parameter {s.name}" for s in self.program.parameters)]


def _function(problem: Problem, routine: Routine) -> NumpyFunction:
    parameters = tuple(str(s.name) for s in routine.program.parameters)
    text, functions = source(routine.program.tape, routine.outputs, routine.arguments, routine.heading)
    ready = tuple(defaults(problem).items())
    relations = tuple(_inversion(problem, d) for d in problem.detunings)
    size, shape = len(routine.state), routine.shape
    laws = _laws_in(functions, problem)
    return NumpyFunction(text, functions, parameters, size, shape, routine.is_complex, ready, relations, laws)


def _laws_in(functions: Sequence[str], problem: Problem) -> tuple[tuple[str, Callable[..., object]], ...]:
    """The user's force laws, and their derivatives, among the functions of a kernel."""
    available: dict[str, Callable[..., object]] = {}
    for name, law in problem.laws.items():
        available[law_name(name)] = law.function
        if law.derivative is not None:
            available[f"{law_name(name)}_slope"] = law.derivative
    return tuple((name, available[name]) for name in functions if name in available)


def defaults(problem: Problem) -> dict[str, float]:
    """Values that a mapping may leave out: the bookkeeping symbol of an `ordering` is 1."""
    return {} if problem.ordering is None else {str(problem.small.name): 1.0}


def inversion_tape(detuning: Detuning) -> tuple[Tape, Node, list[str]]:
    """(tape, the detuning on it, names of the parameters it is worked out from)."""
    tape = Tape()
    names = sorted(str(s.name) for s in detuning.formula.free_symbols)
    return tape, evaluate(tape, detuning.formula, lambda s: tape.input(f"parameter {s.name}")), names


def eliminated_names(problem: Problem, detuning: Detuning) -> tuple[str, ...]:
    """What may be given although it is no parameter any more."""
    parameters = {str(s.name) for s in (*problem.parameters, problem.small)}
    own = [detuning.eliminated] if detuning.eliminated is not None else detuning.formula.free_symbols
    return tuple(sorted(name for s in own if (name := str(s.name)) not in parameters))


def _inversion(problem: Problem, detuning: Detuning) -> Inversion:
    tape, output, names = inversion_tape(detuning)
    text, functions = source(tape, [output], [f"parameter {name}" for name in names], "A detuning from frequencies.")
    eliminated = eliminated_names(problem, detuning)
    found = "" if detuning.detuning is None else str(detuning.detuning.name)
    return Inversion(eliminated, found, tuple(names), text, functions)


def _cartesian_state(program: Program, modes: int) -> tuple[list[str], list[Complex]]:
    names = [f"state {letter}{k + 1 if modes > 1 else ''}" for k in range(modes) for letter in "pq"]
    tape = program.tape
    nodes = [tape.input(name) for name in names]
    state = list(zip(nodes[::2], nodes[1::2], strict=True))
    program.set_state(state)
    if program.projected:
        program.set_amplitudes(tape.call("root", tape.add(tape.mul(p, p), tape.mul(q, q))) for p, q in state)
    return names, state


def _flow(program: Program, computation: Computation, mode: int) -> dict[tuple[int, ...], Complex]:
    return program.series((n, computation.flow(n, mode)) for n in range(1, computation.order + 1))


def _cartesian(program: Program, computation: Computation) -> tuple[list[str], list[Node]]:
    names, state = _cartesian_state(program, computation.modes)
    program.without_torus = True
    tape, modes = program.tape, computation.modes
    outputs = []
    for a in range(modes):
        # In the frame the fast part of a term, relative to the mode's own, is zero but for beats between drives.
        own = tuple(int(k == a) for k in range(modes)) + (0,) * len(computation.canonical.drives)

        def wave(key: tuple[int, ...], own: tuple[int, ...] = own) -> Complex:
            rest = program.wave(tuple(x - y for x, y in zip(key, own, strict=True)))
            return program.multiply(program.phase_factor(state, key[:modes]), rest)

        groups = program.grouped(_flow(program, computation, a), turns, scale=2)
        real, imag = program.summed(groups, state, wave)
        for x, y in _torus_terms(program, computation, a):
            real, imag = tape.add(real, tape.mul(tape.constant(2), x)), tape.add(imag, tape.mul(tape.constant(2), y))
        outputs += [real, tape.neg(imag)]
    return names, outputs


def _torus_terms(program: Program, computation: Computation, mode: int) -> list[Complex]:
    """What averages over several phases add to dA/dt: κ G, with κ read off the term κ z (X + iY), z (X + iY) = G."""
    found = []
    for mean in computation.canonical.torus:
        if mean.mode == mode:
            for n in range(1, computation.order + 1):
                for c in computation.flow(n, mode).values():
                    real, imag = (program.quotient(_factor_of(mean.real, q)) for q in (c.real, c.imag))
                    term = program.multiply((real, imag), program.torus_mean(mean))
                    scale = program.tape.power(program.small, n)
                    found.append((program.tape.mul(scale, term[0]), program.tape.mul(scale, term[1])))
    return found


def _factor_of(name: str, q: Quotient) -> Quotient:
    """What multiplies a generator that stands linearly."""
    terms = ((tuple(x for x in m if x[0] != name), c) for m, c in q.numerator if (name, 1) in m)
    return Quotient(tuple(terms), q.denominator)


def _polar(program: Program, computation: Computation) -> tuple[list[str], list[Node]]:
    tape, modes, frame = program.tape, range(computation.modes), computation.frame
    names = [f"state a{k + 1}" for k in modes]
    names += [f"state gamma{k + 1}" for k in range(len(frame.resonant))] + [f"state beta{j + 1}" for j in frame.cyclic]
    nodes = [tape.input(name) for name in names]
    size, phases = nodes[: computation.modes], nodes[computation.modes :][: len(frame.resonant)]
    program.set_amplitudes(size)
    program.set_state(_deviated(program, computation, size, phases))
    rates, turning = [], []
    for a in modes:
        rate, turn = _polar_mode(program, computation, a, size, phases)
        rates.append(rate)
        turning.append(turn)
    combined = [
        tape.total(tape.mul(tape.constant(n), b) for n, b in zip(row, turning, strict=True)) for row in frame.resonant
    ]
    return names, [*rates, *combined, *(turning[j] for j in frame.cyclic)]


def _deviated(program: Program, computation: Computation, size: list[Node], phases: list[Node]) -> list[Complex]:
    """(p, q) = a (cos δ, −sin δ) with the deviations of resonant phases, cyclic ones being zero."""
    if not computation.canonical.torus:
        return []
    tape, symbols = program.tape, sp.symbols(f"@g:{len(phases)}")
    nodes = dict(zip(symbols, phases, strict=True))
    state = []
    for a, delta in zip(size, computation.frame.deviations(symbols, [sp.Integer(0)] * len(size)), strict=True):
        angle = evaluate(tape, sp.sympify(delta), nodes.__getitem__)
        cosine, sine = tape.call("cos", angle), tape.call("sin", angle)
        state.append((tape.mul(a, cosine), tape.neg(tape.mul(a, sine))))
    return state


def _polar_mode(program: Program, computation: Computation, a: int, size: list[Node], phases: list[Node]) -> Complex:
    """(da/dt, dδ/dt) of one mode: the terms of dA/dt, grouped by their phase."""
    tape, frame, modes = program.tape, computation.frame, computation.modes
    groups: dict[tuple[int, ...], tuple[dict[tuple[int, ...], Node], dict[tuple[int, ...], Node]]] = {}
    for m, pair in _flow(program, computation, a).items():
        powers = tuple(m[2 * k] + m[2 * k + 1] for k in range(modes))
        tables = groups.setdefault(frame.relative(m, a), ({}, {}))
        for table, node in zip(tables, pair, strict=True):
            if node != tape.constant(0):
                scaled = tape.mul(tape.constant(Fraction(2, 2 ** sum(powers))), node)
                table[powers] = tape.add(table.get(powers, tape.constant(0)), scaled)
    regular = all(m[a] for tables in groups.values() for table in tables for m in table)
    lower = int(regular)
    rate, turn = [], []
    for combination, tables in groups.items():
        slow = zip(frame.coordinates(combination), phases, strict=True)
        angle = tape.add(tape.total(tape.mul(tape.constant(n), g) for n, g in slow), program.angle(combination))
        zero = tape.constant(0)
        cosine, sine = (tape.constant(1), zero) if angle == zero else (tape.call("cos", angle), tape.call("sin", angle))
        lowered = [{(*m[:a], m[a] - lower, *m[a + 1 :]): c for m, c in t.items()} for t in tables]
        real, imag = (program.horner(t, size) if t else zero for t in lowered)
        rate.append(tape.sub(tape.mul(real, cosine), tape.mul(imag, sine)))
        turn.append(tape.add(tape.mul(imag, cosine), tape.mul(real, sine)))
    if regular:
        return tape.mul(size[a], tape.total(rate)), tape.total(turn)
    return tape.total(rate), tape.div(tape.total(turn), size[a])


def _complex(program: Program, computation: Computation) -> tuple[list[str], list[Node]]:
    tape, modes = program.tape, range(computation.modes)
    names = [f"state A{k + 1 if computation.modes > 1 else ''}" for k in modes]
    amplitudes = [tape.input(name) for name in names]
    if program.projected:
        program.set_amplitudes(tape.mul(tape.constant(2), tape.call("absolute", A)) for A in amplitudes)
    if computation.canonical.torus:
        two, program.without_torus = tape.constant(2), True
        program.set_state(
            [(tape.mul(two, tape.call("real", A)), tape.neg(tape.mul(two, tape.call("imag", A)))) for A in amplitudes]
        )
    variables = [x for A in amplitudes for x in (A, tape.call("conj", A))]
    outputs = []
    for a in modes:
        terms: dict[tuple[int, ...], Node] = {}
        for m, (real, imag) in _flow(program, computation, a).items():
            cosine, sine = program.multiply((real, imag), program.wave(computation.frame.relative(m, a)))
            node = tape.add(cosine, tape.mul(tape.constant(1j), sine))
            powers = m[: 2 * computation.modes]
            terms[powers] = tape.add(terms.get(powers, tape.constant(0)), node)
        total = program.horner(terms, variables) if terms else tape.constant(0)
        for x, y in _torus_terms(program, computation, a):
            total = tape.add(total, tape.add(x, tape.mul(tape.constant(1j), y)))
        outputs.append(total)
    return names, outputs


def _jacobian(program: Program, outputs: list[Node], inputs: Sequence[str]) -> list[Node]:
    """Row by row, d output / d input."""
    tape = program.tape
    one, zero = tape.constant(1), tape.constant(0)
    columns = []
    for chosen in inputs:
        seeds = {
            node: one if step[1] == chosen else zero for node, step in list(enumerate(tape.steps)) if step[0] == "input"
        }
        columns.append(tape.derivatives(outputs, seeds))
    return [column[row] for row in range(len(outputs)) for column in columns]


def _differentiated(
    program: Program, names: Sequence[str], outputs: list[Node], wrt: str | None, heading: str
) -> tuple[list[Node], tuple[int, ...], str]:
    """Outputs, their shape and their heading: as they are, or differentiated by the "state" or the "parameters"."""
    if wrt is None:
        return outputs, (len(outputs),), heading
    inputs = names if wrt == "state" else [f"parameter {s.name}" for s in program.parameters]
    heading += f": derivative by {'the state' if wrt == 'state' else 'the parameters'}, row by row"
    return _jacobian(program, outputs, inputs), (len(outputs), len(inputs)), heading


def slow_flow_routine(problem: Problem, computation: Computation, form: str, wrt: str | None) -> Routine:
    """The slow flow in one form, or its Jacobian."""
    program = Program(problem, computation)
    build = {"polar": _polar, "cartesian": _cartesian, "complex": _complex}[form]
    names, outputs = build(program, computation)
    heading = f"Slow flow of order {computation.order}, {form} form"
    outputs, shape, heading = _differentiated(program, names, outputs, wrt, heading)
    return Routine(program, tuple(names), tuple(outputs), shape, f"{heading}.", form == "complex")


def slow_flow_function(problem: Problem, computation: Computation, form: str, wrt: str | None) -> NumpyFunction:
    """The slow flow in one form, or its Jacobian, as a NumPy function."""
    return _function(problem, slow_flow_routine(problem, computation, form, wrt))


def _real_field(
    program: Program, computation: Computation
) -> tuple[list[str], Callable[[dict[tuple[int, ...], Complex]], Node]]:
    """Names of the state, and how a real field (coefficients of its monomials) is evaluated at the state and time."""
    modes, drives = computation.modes, len(computation.canonical.drives)
    names, state = _cartesian_state(program, modes)
    tape = program.tape
    moving = []
    for j, (p, q) in enumerate(state):
        cosine, sine = program.wave(tuple(int(k == j) for k in range(modes)) + (0,) * drives)
        moving.append(
            (tape.add(tape.mul(p, cosine), tape.mul(q, sine)), tape.sub(tape.mul(q, cosine), tape.mul(p, sine)))
        )

    def wave(key: tuple[int, ...]) -> Complex:
        return program.multiply(program.phase_factor(moving, key[:modes]), program.wave((0,) * modes + key[modes:]))

    return names, lambda series: program.summed(program.grouped(series, turns, half=True), moving, wave)[0]


def displacement_routine(problem: Problem, computation: Computation, derivative: int, wrt: str | None) -> Routine:
    """The unknowns (or a time derivative of them) at time t from a slow state, or the Jacobian of these."""
    program = Program(problem, computation)
    names, field = _real_field(program, computation)
    outputs = []
    for k in range(len(problem.unknowns)):
        series = program.series((n, computation.field(n, k, derivative)) for n in range(computation.order + 1))
        outputs.append(field(series))
    what = ("Unknowns", "Velocities", "Accelerations")[derivative]
    heading = f"{what} through order {computation.order}"
    outputs, shape, heading = _differentiated(program, names, outputs, wrt, heading)
    return Routine(program, tuple(names), tuple(outputs), shape, f"{heading}.")


def displacement_function(
    problem: Problem, computation: Computation, derivative: int, wrt: str | None = None
) -> NumpyFunction:
    """The unknowns (or a time derivative of them), or the Jacobian of these, as a NumPy function."""
    return _function(problem, displacement_routine(problem, computation, derivative, wrt))


def observable_function(
    problem: Problem, computation: Computation, terms: Sequence[tuple[sp.Expr, Sequence[tuple[int, Finished]]]]
) -> NumpyFunction:
    """Σ coefficient · product of fields, at time t from a slow state."""
    program = Program(problem, computation)
    names, field = _real_field(program, computation)
    tape = program.tape
    total = []
    for coefficient, products in terms:
        total.append(tape.mul(program.expression(coefficient), field(program.series(products))))
    heading = f"Quantity along the motion, through order {computation.order}."
    return _function(problem, Routine(program, tuple(names), (tape.total(total),), (), heading))


def frequency_routine(problem: Problem, computation: Computation, modes: Sequence[int]) -> Routine:
    """ω of each of `modes` at a slow state."""
    program = Program(problem, computation)
    tape = program.tape
    names, state = _cartesian_state(program, computation.modes)
    one = (tape.constant(1), tape.constant(0))
    outputs = []
    for mode in modes:
        series = {}
        for m, (_, imag) in _flow(program, computation, mode).items():
            lowered = (*m[: 2 * mode], m[2 * mode] - 1, *m[2 * mode + 1 :])
            series[lowered] = (imag, tape.constant(0))
        correction = program.summed(program.grouped(series, turns), state, lambda key: one)[0]
        outputs.append(tape.add(program.natural_frequency(mode), correction))
    shape = () if len(outputs) == 1 else (len(outputs),)
    return Routine(program, tuple(names), tuple(outputs), shape, f"Frequency through order {computation.order}.")


def frequency_function(problem: Problem, computation: Computation, mode: int) -> NumpyFunction:
    """ω of one mode at a slow state as a NumPy function."""
    return _function(problem, frequency_routine(problem, computation, [mode]))


def coefficient_function(
    problem: Problem, computation: Computation, at_amplitudes: bool = False
) -> tuple[tuple[Key, ...], NumpyFunction]:
    """The coefficients of an autonomous slow flow in complex form as functions of the parameters alone.

    dA_a/dt = Σ εⁿ c Π A_l^{p_l} Ā_l^{q_l}: the keys (n, a, (p_1, q_1, …)), and c at each as (real, imaginary).
    With `at_amplitudes` c may depend on the amplitudes a_l = 2|A_l|, which are then the state; averages over several
    phases are left out.
    """
    program = Program(problem, computation)
    names: tuple[str, ...] = ()
    if at_amplitudes:
        names, program.without_torus = tuple(f"state a{k + 1}" for k in range(computation.modes)), True
        program.set_amplitudes([program.tape.input(name) for name in names])
    keys: list[Key] = []
    outputs: list[Node] = []
    collected: dict[Key, list[Complex]] = {}
    for n in range(1, computation.order + 1):
        for a in range(computation.modes):
            for m, c in computation.flow(n, a).items():
                value = (program.quotient(c.real), program.quotient(c.imag))
                turned = program.multiply(value, program.wave(computation.frame.relative(m, a)))
                collected.setdefault((n, a, m[: 2 * computation.modes]), []).append(turned)
    for key, parts in collected.items():
        keys.append(key)
        outputs += [program.tape.total(x for x, _ in parts), program.tape.total(y for _, y in parts)]
    heading = "Coefficients of the slow flow, by level."
    return tuple(keys), _function(problem, Routine(program, names, tuple(outputs), (len(keys), 2), heading))


def field_coefficient_function(problem: Problem, computation: Computation) -> tuple[tuple[Key, ...], NumpyFunction]:
    """The coefficients of the fields: the keys (level, unknown, exponents), and c at each as (real, imaginary)."""
    program = Program(problem, computation)
    levels, unknowns = range(computation.order + 1), range(len(problem.unknowns))
    found = {(n, k, m): c for n in levels for k in unknowns for m, c in computation.field(n, k).items()}
    outputs = [node for c in found.values() for node in (program.quotient(c.real), program.quotient(c.imag))]
    heading = "Coefficients of the fields, by level."
    return tuple(found), _function(problem, Routine(program, (), tuple(outputs), (len(found), 2), heading))
