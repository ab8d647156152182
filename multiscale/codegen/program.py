"""Finished results as steps on a tape: coefficients from parameters, then polynomials in the state.

Parameters come first and the state last, each polynomial by a Horner scheme, so that in a call with scalar parameters
and an array of states nearly all array operations are the few that the state itself needs.
"""

from __future__ import annotations

from collections.abc import Callable, Iterable, Mapping, Sequence
from fractions import Fraction
from functools import cached_property

import sympy as sp

from multiscale.algebra.polynomial import Frozen
from multiscale.algebra.quotient import Coefficient, Quotient
from multiscale.algebra.ring import Exponents
from multiscale.codegen.calls import evaluate
from multiscale.codegen.tape import Node, Tape
from multiscale.computed import Computation, Finished
from multiscale.errors import EvaluationError
from multiscale.frame import turns
from multiscale.problem import Problem
from multiscale.problem.averaged.projection import TorusMean, amplitude_of
from multiscale.torus import Torus

__all__ = ["Complex", "Program"]

Complex = tuple[Node, Node]


def _amplitude_needed() -> EvaluationError:
    return EvaluationError(
        "the slow flow contains forces that are not polynomial: its coefficients depend on the amplitude, and what "
        "needs a polynomial slow flow cannot be applied to it; integrate or solve slow_flow.to_numpy()"
    )


class Program:
    """A tape on which the parameters of a problem are inputs, with the operations that results are made of."""

    def __init__(self, problem: Problem, computation: Computation) -> None:
        self.tape = Tape(problem.laws)
        self.amplitudes: dict[sp.Symbol, Node] = {}
        self.parameters = tuple(sorted((*problem.parameters, problem.small), key=lambda s: str(s.name)))
        self.time = self.tape.input("time t")
        self._time_symbol = problem.time
        self.small = self._parameter(problem.small)
        self._computation = computation
        self._meanings = dict(computation.canonical.meanings) | dict(computation.canonical.numeric)
        self._phase_name = str(problem.phase.name)
        self._state: list[Complex] = []
        self._torus: dict[TorusMean, Complex] = {}
        self._torus_parts = {
            name: (t, k) for t in computation.canonical.torus for k, name in enumerate((t.real, t.imag))
        }
        self.without_torus = False
        self._moduli = {m.name for m in computation.canonical.moduli}
        self._values: dict[str, Node] = {}
        self._inverses: dict[Frozen, Node] = {}

    @property
    def projected(self) -> bool:
        """Whether forces that are not polynomial stand in the results."""
        return bool(self._computation.canonical.numeric)

    def set_state(self, state: Sequence[Complex]) -> None:
        """The state (p_j, q_j) in the frame, which averages over several phases depend on."""
        self._state = list(state)

    def torus_mean(self, mean: TorusMean) -> Complex:
        """G, the mean of a force of several phases times e^{−iΦ}."""
        if not self._state:
            raise _amplitude_needed()
        if mean not in self._torus:
            pairs = [sp.symbols(f"@p{j} @q{j}", real=True) for j in range(self._computation.modes)]
            nodes = {s: n for pair, own in zip(pairs, self._state, strict=True) for s, n in zip(pair, own, strict=True)}
            parts = Torus(self._computation, self._phase_name).cartesian(mean, pairs)
            real, imag = (
                evaluate(self.tape, x, lambda s: nodes[s] if s in nodes else self._parameter(s)) for x in parts
            )
            self._torus[mean] = real, imag
        return self._torus[mean]

    def _torus_value(self, mean: TorusMean) -> Complex:
        """G/A with A = ½ (p − iq)."""
        value = self.torus_mean(mean)
        tape, (p, q) = self.tape, self._state[mean.mode]
        square = tape.add(tape.mul(p, p), tape.mul(q, q))
        inverse = tape.mul(tape.constant(2), tape.call("inverse_or_zero", square))
        return self.multiply(value, (tape.mul(inverse, p), tape.mul(inverse, q)))

    def set_amplitudes(self, nodes: Iterable[Node]) -> None:
        """The amplitudes a_k, which the Fourier coefficients of forces that are not polynomial depend on."""
        self.amplitudes = {amplitude_of(k): node for k, node in enumerate(nodes)}

    def _parameter(self, symbol: sp.Symbol) -> Node:
        if symbol in self.amplitudes:
            return self.amplitudes[symbol]
        if symbol.name.startswith("@a"):
            raise _amplitude_needed()
        return self.time if symbol == self._time_symbol else self.tape.input(f"parameter {symbol.name}")

    def expression(self, x: sp.Expr) -> Node:
        """A SymPy expression of parameters and time."""
        return evaluate(self.tape, x, self._parameter)

    def _value(self, generator: str) -> Node:
        if generator in self._torus_parts:
            mean, part = self._torus_parts[generator]
            return self.tape.constant(0) if self.without_torus else self._torus_value(mean)[part]
        if generator not in self._values:
            self._values[generator] = evaluate(self.tape, self._meanings[generator], self._parameter)
        return self._values[generator]

    @cached_property
    def _angles(self) -> list[Node]:
        """What the rows of the frame count: natural phases ω_f t and the exact angles of the drives."""
        canonical = self._computation.canonical
        natural = [self._phase(w) for w in canonical.frequencies]
        driven = [
            self._phase(d.reduced_frequency) if d.frequency != 0 else self.expression(d.angle) for d in canonical.drives
        ]
        return natural + driven

    def _phase(self, frequency: sp.Expr) -> Node:
        """∫ frequency dt from 0 to t."""
        t = self._time_symbol
        if t not in frequency.free_symbols:
            return self.tape.mul(self.expression(frequency), self.time)
        integral = sp.integrate(frequency, (t, 0, t))
        if integral.has(sp.Integral):
            raise EvaluationError(
                f"the fast phase, the integral of {frequency} over {t}, has no closed form: integrate it beside the "
                "slow flow, whose own functions do not need it"
            )
        return self.expression(integral)

    def angle(self, combination: tuple[int, ...]) -> Node:
        """The fast angle of a combination (turns with the modes, turns with the drives)."""
        row = self._computation.frame.fast(combination)
        tape = self.tape
        return tape.total(tape.mul(tape.constant(x), self._angles[k]) for k, x in enumerate(row) if x)

    def natural_frequency(self, mode: int) -> Node:
        return self.expression(self._computation.canonical.frequencies[mode])

    def horner(self, terms: Mapping[Exponents, Node], variables: Sequence[Node]) -> Node:
        """Σ coefficient · Π variable**exponent; the variable that most terms share is taken out first."""
        tape = self.tape
        if len(terms) == 1:
            ((exponents, node),) = terms.items()
            return tape.product([node, *(tape.power(x, e) for x, e in zip(variables, exponents, strict=True) if e)])
        counts = [sum(1 for m in terms if m[k]) for k in range(len(variables))]
        best = max(range(len(variables)), key=lambda k: (counts[k], -k))
        inside = {m: c for m, c in terms.items() if m[best]}
        lowest = min(m[best] for m in inside)
        lowered = {(*m[:best], m[best] - lowest, *m[best + 1 :]): c for m, c in inside.items()}
        result = tape.mul(self.horner(lowered, variables), tape.power(variables[best], lowest))
        outside = {m: c for m, c in terms.items() if not m[best]}
        return tape.add(self.horner(outside, variables), result) if outside else result

    def polynomial(self, terms: Frozen) -> Node:
        """A polynomial in generators."""
        if not terms:
            return self.tape.constant(0)
        names = sorted({name for m, _ in terms for name, _ in m})
        place = {name: k for k, name in enumerate(names)}
        table: dict[Exponents, Node] = {}
        for m, c in terms:
            exponents = [0] * len(names)
            for name, e in m:
                exponents[place[name]] = e
            table[tuple(exponents)] = self.tape.constant(c if isinstance(c, Fraction) else float(c))
        return self.horner(table, [self._value(name) for name in names])

    def quotient(self, q: Quotient) -> Node:
        result = self.polynomial(q.numerator)
        for p, e in q.denominator:
            if p not in self._inverses:
                below = self.polynomial(p)
                if p[0][0] and p[0][0][0][0] in self._moduli:
                    self._inverses[p] = self.tape.call("inverse_or_zero", below)
                else:
                    self._inverses[p] = self.tape.div(self.tape.constant(1), below)
            result = self.tape.mul(result, self.tape.power(self._inverses[p], e))
        return result

    def series(self, levels: Iterable[tuple[int, Finished]]) -> dict[Exponents, Complex]:
        """Σ εⁿ · finished_n, coefficient by coefficient: {exponents: (real, imaginary)}."""
        collected: dict[Exponents, dict[int, Coefficient]] = {}
        for n, finished in levels:
            for m, c in finished.items():
                collected.setdefault(m, {})[n] = c
        result = {}
        for m in sorted(collected):
            parts = collected[m]
            real: dict[Exponents, Node] = {(n,): self.quotient(c.real) for n, c in parts.items() if c.real}
            imag: dict[Exponents, Node] = {(n,): self.quotient(c.imag) for n, c in parts.items() if c.imag}
            zero = self.tape.constant(0)
            result[m] = (
                self.horner(real, [self.small]) if real else zero,
                self.horner(imag, [self.small]) if imag else zero,
            )
        return result

    def multiply(self, x: Complex, y: Complex) -> Complex:
        tape = self.tape
        return (
            tape.sub(tape.mul(x[0], y[0]), tape.mul(x[1], y[1])),
            tape.add(tape.mul(x[0], y[1]), tape.mul(x[1], y[0])),
        )

    def phase_factor(self, state: Sequence[Complex], turns: Sequence[int]) -> Complex:
        """Π ζ_k**turns_k with ζ_k = p_k − i q_k, its conjugate for negative turns."""
        result = (self.tape.constant(1), self.tape.constant(0))
        for (p, q), k in zip(state, turns, strict=True):
            factor = (p, self.tape.neg(q) if k > 0 else q)
            power = (self.tape.constant(1), self.tape.constant(0))
            for _ in range(abs(k)):
                power = self.multiply(power, factor)
            result = self.multiply(result, power)
        return result

    def grouped(
        self,
        series: Mapping[Exponents, Complex],
        key: Callable[[Exponents], tuple[int, ...]],
        half: bool = False,
        scale: int = 1,
    ) -> dict[tuple[int, ...], tuple[dict[Exponents, Node], dict[Exponents, Node]]]:
        """{key: {degrees in the ρ_k = p_k² + q_k²: node} for real and imaginary part}, z_k = ½ (p_k − i q_k).

        With `half` only one of each conjugate pair of terms is kept, doubled; everything is multiplied by `scale`.
        """
        tape, modes = self.tape, self._computation.modes
        groups: dict[tuple[int, ...], tuple[dict[Exponents, Node], dict[Exponents, Node]]] = {}
        for m, pair in series.items():
            own = turns(m)
            if half and own < tuple(-x for x in own):
                continue
            size = tape.constant(Fraction(scale * (2 if half and any(own) else 1), 2 ** sum(m[: 2 * modes])))
            radii = tuple(min(m[2 * k], m[2 * k + 1]) for k in range(modes))
            tables = groups.setdefault(key(m), ({}, {}))
            for table, node in zip(tables, pair, strict=True):
                if node != tape.constant(0):
                    table[radii] = tape.add(table.get(radii, tape.constant(0)), tape.mul(size, node))
        return groups

    def summed(
        self,
        groups: Mapping[tuple[int, ...], tuple[dict[Exponents, Node], dict[Exponents, Node]]],
        state: Sequence[Complex],
        wave: Callable[[tuple[int, ...]], Complex],
    ) -> Complex:
        """Σ (polynomial in ρ) · wave(key), real and imaginary part."""
        tape = self.tape
        squares = [tape.add(tape.mul(p, p), tape.mul(q, q)) for p, q in state]
        zero = tape.constant(0)
        products = []
        for key, (real, imag) in groups.items():
            value = (self.horner(real, squares) if real else zero, self.horner(imag, squares) if imag else zero)
            products.append(self.multiply(value, wave(key)))
        return tape.total(x for x, _ in products), tape.total(y for _, y in products)

    def wave(self, combination: tuple[int, ...]) -> Complex:
        """exp(i angle) of a fast angle."""
        tape = self.tape
        angle = self.angle(combination)
        if angle == tape.constant(0):
            return tape.constant(1), tape.constant(0)
        return tape.call("cos", angle), tape.call("sin", angle)
