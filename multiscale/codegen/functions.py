"""The functions that results offer: slow flow, its Jacobians, frequency, displacement."""

from __future__ import annotations

from collections.abc import Sequence
from fractions import Fraction

from multiscale.codegen.numpy_function import NumpyFunction
from multiscale.codegen.printer import source
from multiscale.codegen.program import Complex, Program
from multiscale.codegen.tape import Node
from multiscale.computed import Computation
from multiscale.phases import PhaseBasis
from multiscale.problem import Problem
from multiscale.slow_flow import relative

__all__ = ["displacement_function", "frequency_function", "slow_flow_function"]


def _function(
    problem: Problem,
    program: Program,
    state: Sequence[str],
    outputs: Sequence[Node],
    shape: tuple[int, ...],
    heading: str,
    is_complex: bool = False,
) -> NumpyFunction:
    parameters = [str(s.name) for s in program.parameters]
    arguments = ["time t", *state, *(f"parameter {name}" for name in parameters)]
    text, functions = source(program.tape, outputs, arguments, heading)
    defaults = {} if problem.ordering is None else {str(problem.small.name): 1.0}
    return NumpyFunction(text, functions, tuple(parameters), len(state), shape, is_complex, tuple(defaults.items()))


def _cartesian_state(program: Program, modes: int) -> tuple[list[str], list[Complex]]:
    names = [f"state {letter}{k + 1 if modes > 1 else ''}" for k in range(modes) for letter in "pq"]
    nodes = [program.tape.input(name) for name in names]
    return names, list(zip(nodes[::2], nodes[1::2], strict=True))


def _changes(program: Program, computation: Computation, mode: int) -> dict[tuple[int, ...], Complex]:
    return program.series((n, computation.change(n, mode)) for n in range(1, computation.order + 1))


def _combined(program: Program, groups: dict[tuple[int, ...], Complex], state: Sequence[Complex]) -> Complex:
    """Σ polynomial · phase factor, real and imaginary part."""
    tape = program.tape
    products = [program.multiply(value, program.phase_factor(state, turns)) for turns, value in groups.items()]
    return tape.total(x for x, _ in products), tape.total(y for _, y in products)


def _cartesian(program: Program, computation: Computation) -> tuple[list[str], list[Node]]:
    names, state = _cartesian_state(program, computation.modes)
    tape = program.tape
    outputs = []
    for a in range(computation.modes):
        real, imag = _combined(program, program.by_turns(_changes(program, computation, a), state, half=False), state)
        two = tape.constant(2)
        outputs += [tape.mul(two, real), tape.neg(tape.mul(two, imag))]
    return names, outputs


def _polar(program: Program, computation: Computation, basis: PhaseBasis) -> tuple[list[str], list[Node]]:
    tape, modes = program.tape, range(computation.modes)
    names = (
        [f"state a{k + 1}" for k in modes]
        + [f"state gamma{k + 1}" for k in range(len(basis.resonant))]
        + [f"state beta{j + 1}" for j in basis.cyclic]
    )
    nodes = [tape.input(name) for name in names]
    size, phases = nodes[: computation.modes], nodes[computation.modes :][: len(basis.resonant)]
    rates, turns = [], []
    for a in modes:
        rate, turn = _polar_mode(program, computation, basis, a, size, phases)
        rates.append(rate)
        turns.append(turn)
    combined = [
        tape.total(tape.mul(tape.constant(n), b) for n, b in zip(row, turns, strict=True)) for row in basis.resonant
    ]
    return names, [*rates, *combined, *(turns[j] for j in basis.cyclic)]


def _polar_mode(
    program: Program, computation: Computation, basis: PhaseBasis, a: int, size: list[Node], phases: list[Node]
) -> Complex:
    """(da/dt, dβ/dt) of one mode: the terms of dA/dt, grouped by their phase."""
    tape = program.tape
    groups: dict[tuple[int, ...], tuple[dict[tuple[int, ...], Node], dict[tuple[int, ...], Node]]] = {}
    for m, (real, imag) in _changes(program, computation, a).items():
        powers = tuple(m[2 * k] + m[2 * k + 1] for k in range(computation.modes))
        scale = tape.constant(Fraction(2, 2 ** sum(m)))
        pair = groups.setdefault(basis.coordinates(relative(m, a)), ({}, {}))
        for table, node in zip(pair, (real, imag), strict=True):
            if node != tape.constant(0):
                table[powers] = tape.mul(scale, node)
    regular = all(m[a] for pair in groups.values() for table in pair for m in table)
    zero = tape.constant(0)
    rate, turn = [], []
    for combination, (real_table, imag_table) in groups.items():
        angle = tape.total(tape.mul(tape.constant(n), g) for n, g in zip(combination, phases, strict=True))
        cosine, sine = (
            (tape.call("cos", angle), tape.call("sin", angle)) if any(combination) else (tape.constant(1), zero)
        )
        lower = (lambda t: {(*m[:a], m[a] - 1, *m[a + 1 :]): c for m, c in t.items()}) if regular else dict
        tables = [program.horner(lower(t), size) if t else zero for t in (real_table, imag_table)]
        rate.append(tape.sub(tape.mul(tables[0], cosine), tape.mul(tables[1], sine)))
        turn.append(tape.add(tape.mul(tables[1], cosine), tape.mul(tables[0], sine)))
    total_rate, total_turn = tape.total(rate), tape.total(turn)
    if regular:
        return tape.mul(size[a], total_rate), total_turn
    return total_rate, tape.div(total_turn, size[a])


def _complex(program: Program, computation: Computation) -> tuple[list[str], list[Node]]:
    tape, modes = program.tape, range(computation.modes)
    names = [f"state A{k + 1 if computation.modes > 1 else ''}" for k in modes]
    amplitudes = [tape.input(name) for name in names]
    variables = [x for A in amplitudes for x in (A, tape.call("conj", A))]
    outputs = []
    for a in modes:
        table = {
            m: tape.add(real, tape.mul(tape.constant(1j), imag))
            for m, (real, imag) in _changes(program, computation, a).items()
        }
        outputs.append(program.horner(table, variables) if table else tape.constant(0))
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


def slow_flow_function(
    problem: Problem, computation: Computation, basis: PhaseBasis, form: str, wrt: str | None
) -> NumpyFunction:
    """The slow flow in one form, or its Jacobian."""
    program = Program(problem, computation)
    if form == "polar":
        names, outputs = _polar(program, computation, basis)
    else:
        names, outputs = (_cartesian if form == "cartesian" else _complex)(program, computation)
    heading = f"Slow flow of order {computation.order}, {form} form"
    shape: tuple[int, ...] = (len(outputs),)
    if wrt is not None:
        inputs = names if wrt == "state" else [f"parameter {s.name}" for s in program.parameters]
        shape = (len(outputs), len(inputs))
        outputs = _jacobian(program, outputs, inputs)
        heading += f": derivative by {'the state' if wrt == 'state' else 'the parameters'}, row by row"
    return _function(problem, program, names, outputs, shape, f"{heading}.", is_complex=form == "complex")


def displacement_function(problem: Problem, computation: Computation, derivative: int) -> NumpyFunction:
    """The unknowns (or a time derivative of them) at time t from a slow state."""
    program = Program(problem, computation)
    tape = program.tape
    names, state = _cartesian_state(program, computation.modes)
    time = tape.input("time t")
    moving = []
    for (p, q), mode in zip(state, computation.hierarchy.linear_part.modes, strict=True):
        angle = tape.mul(program.frequency(mode.rate), time)
        cosine, sine = tape.call("cos", angle), tape.call("sin", angle)
        moving.append(
            (tape.add(tape.mul(p, cosine), tape.mul(q, sine)), tape.sub(tape.mul(q, cosine), tape.mul(p, sine)))
        )
    outputs = []
    for k in range(len(problem.unknowns)):
        series = program.series((n, computation.field(n, k, derivative)) for n in range(computation.order + 1))
        outputs.append(_combined(program, program.by_turns(series, moving, half=True), moving)[0])
    what = ("Unknowns", "Velocities", "Accelerations")[derivative]
    return _function(problem, program, names, outputs, (len(outputs),), f"{what} through order {computation.order}.")


def frequency_function(problem: Problem, computation: Computation, mode: int) -> NumpyFunction:
    """ω of one mode at a slow state."""
    program = Program(problem, computation)
    tape = program.tape
    names, state = _cartesian_state(program, computation.modes)
    series = {}
    for m, (_, imag) in _changes(program, computation, mode).items():
        lowered = (*m[: 2 * mode], m[2 * mode] - 1, *m[2 * mode + 1 :])
        series[lowered] = (imag, tape.constant(0))
    groups = program.by_turns(series, state, half=False)
    correction = groups.get((0,) * computation.modes, (tape.constant(0),))[0]
    rate = computation.hierarchy.linear_part.modes[mode].rate
    return _function(
        problem,
        program,
        names,
        [tape.add(program.frequency(rate), correction)],
        (),
        f"Frequency through order {computation.order}.",
    )
