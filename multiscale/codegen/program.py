"""Finished results as steps on a tape: coefficients from parameters, then polynomials in the state.

Parameters come first and the state last, each polynomial by a Horner scheme, so that in a call with scalar parameters
and an array of states nearly all array operations are the few that the state itself needs.
"""

from __future__ import annotations

from collections.abc import Iterable, Mapping, Sequence
from fractions import Fraction

import sympy as sp

from multiscale.algebra.polynomial import Frozen
from multiscale.algebra.quotient import Coefficient, Quotient
from multiscale.algebra.ring import Exponents
from multiscale.codegen.calls import evaluate
from multiscale.codegen.tape import Node, Tape
from multiscale.computed import Computation, Finished
from multiscale.problem import Problem

__all__ = ["Complex", "Program"]

Complex = tuple[Node, Node]


class Program:
    """A tape on which the parameters of a problem are inputs, with the operations that results are made of."""

    def __init__(self, problem: Problem, computation: Computation) -> None:
        self.tape = Tape()
        self.parameters = tuple(sorted((*problem.parameters, problem.small), key=lambda s: str(s.name)))
        self.small = self._parameter(problem.small)
        self._meanings = dict(computation.canonical.meanings)
        self._values: dict[str, Node] = {}
        self._inverses: dict[Frozen, Node] = {}
        self.bases = [self.polynomial(b) for b in computation.canonical.bases.values]
        self.unit = computation.canonical.bases.unit

    def _parameter(self, symbol: sp.Symbol) -> Node:
        return self.tape.input(f"parameter {symbol.name}")

    def _value(self, generator: str) -> Node:
        if generator not in self._values:
            self._values[generator] = evaluate(self.tape, self._meanings[generator], self._parameter)
        return self._values[generator]

    def frequency(self, rate: Sequence[int]) -> Node:
        tape = self.tape
        return tape.total(
            tape.mul(tape.constant(Fraction(r, self.unit)), base) for r, base in zip(rate, self.bases, strict=True)
        )

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
            table[tuple(exponents)] = self.tape.constant(c)
        return self.horner(table, [self._value(name) for name in names])

    def quotient(self, q: Quotient) -> Node:
        result = self.polynomial(q.numerator)
        for p, e in q.denominator:
            if p not in self._inverses:
                self._inverses[p] = self.tape.div(self.tape.constant(1), self.polynomial(p))
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

    def by_turns(
        self, series: Mapping[Exponents, Complex], state: Sequence[Complex], half: bool
    ) -> dict[tuple[int, ...], Complex]:
        """{turns: polynomial in the ρ_k = p_k² + q_k²} for z_k = ½ (p_k − i q_k).

        With `half` only one of each conjugate pair of terms is kept, doubled.
        """
        tape = self.tape
        groups: dict[tuple[int, ...], tuple[dict[Exponents, Node], dict[Exponents, Node]]] = {}
        for m, (real, imag) in series.items():
            turns = tuple(m[2 * k] - m[2 * k + 1] for k in range(len(state)))
            if half and turns < tuple(-x for x in turns):
                continue
            size = tape.constant(Fraction(2 if half and any(turns) else 1, 2 ** sum(m)))
            radii = tuple(min(m[2 * k], m[2 * k + 1]) for k in range(len(state)))
            pair = groups.setdefault(turns, ({}, {}))
            for table, node in zip(pair, (real, imag), strict=True):
                if node != tape.constant(0):
                    table[radii] = tape.mul(size, node)
        squares = [tape.add(tape.mul(p, p), tape.mul(q, q)) for p, q in state]
        zero = tape.constant(0)
        return {
            turns: (self.horner(real, squares) if real else zero, self.horner(imag, squares) if imag else zero)
            for turns, (real, imag) in groups.items()
        }
