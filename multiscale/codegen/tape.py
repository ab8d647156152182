"""A computation as a list of elementary steps, each written once: the form between finished results and source code.

A node is (operation, arguments); arguments are numbers of earlier nodes, so the list is in order of evaluation. Equal
nodes are one node, which is how powers and products come to be shared, and arithmetic between exact constants is
carried out at once. Operations: ``const input + - * / neg call apply quad jump``, where ``call`` is a function of one
node, ``apply`` one of several, and ``quad`` and ``jump`` belong to an average over a phase (`Integrand`).
"""

from __future__ import annotations

from collections.abc import Iterable, Mapping, Sequence
from dataclasses import dataclass, field
from fractions import Fraction
from typing import Any, TypeAlias

from multiscale.codegen.slopes import slope, slope_of_several

__all__ = ["Integrand", "Node", "Tape"]

Node: TypeAlias = int


@dataclass(frozen=True)
class Integrand:
    """f(θ, x_0, …, x_{count−1}), a tape of its own with inputs ``theta``, ``x0``, …; equal when `key` is.

    `term` is how an error spells the force.
    """

    tape: Tape = field(compare=False)
    output: Node = field(compare=False)
    count: int
    key: str
    term: str = field(compare=False)

    def derivative(self, k: int) -> Integrand:
        """∂f/∂x_k."""
        zero, one = self.tape.constant(0), self.tape.constant(1)
        inputs = [n for n, step in enumerate(self.tape.steps) if step[0] == "input"]
        seeds = {n: one if self.tape.steps[n][1] == f"x{k}" else zero for n in inputs}
        (output,) = self.tape.derivatives([self.output], seeds)
        return Integrand(self.tape, output, self.count, f"{self.key}'{k}", self.term)

    @property
    def vanishes(self) -> bool:
        return self.output == self.tape.constant(0)


class Tape:
    """Steps are appended through the methods below, which return the node that holds the result.

    `laws` says what undefined functions stand for.
    """

    def __init__(self, laws: Mapping[str, Any] | None = None) -> None:
        self.laws = dict(laws or {})
        self.steps: list[tuple[Any, ...]] = []
        self._known: dict[tuple[Any, ...], Node] = {}

    def _node(self, *step: Any) -> Node:
        node = self._known.get(step)
        if node is None:
            node = self._known[step] = len(self.steps)
            self.steps.append(step)
        return node

    def constant(self, value: Fraction | float | complex) -> Node:
        if isinstance(value, int):
            value = Fraction(value)
        return self._node("const", type(value).__name__, value)

    def input(self, name: str) -> Node:
        return self._node("input", name)

    def _exact(self, node: Node) -> Fraction | None:
        step = self.steps[node]
        return step[2] if step[0] == "const" and isinstance(step[2], Fraction) else None

    def add(self, x: Node, y: Node) -> Node:
        a, b = self._exact(x), self._exact(y)
        if a is not None and b is not None:
            return self.constant(a + b)
        if a == 0:
            return y
        if b == 0:
            return x
        if self.steps[y][0] == "neg":
            return self._node("-", x, self.steps[y][1])
        if self.steps[x][0] == "neg":
            return self._node("-", y, self.steps[x][1])
        return self._node("+", x, y)

    def neg(self, x: Node) -> Node:
        a = self._exact(x)
        if a is not None:
            return self.constant(-a)
        step = self.steps[x]
        if step[0] == "neg":
            return int(step[1])
        if step[0] == "-":
            return self._node("-", step[2], step[1])
        if step[0] == "*" and (factor := self._exact(step[1])) is not None:
            return self._node("*", self.constant(-factor), step[2])
        return self._node("neg", x)

    def sub(self, x: Node, y: Node) -> Node:
        return self.add(x, self.neg(y))

    def mul(self, x: Node, y: Node) -> Node:
        a, b = self._exact(x), self._exact(y)
        if a is not None and b is not None:
            return self.constant(a * b)
        if b is not None:
            x, y, a = y, x, b
        if a is not None:
            return self._scaled(a, x, y)
        for first, other in ((x, y), (y, x)):
            step = self.steps[first]
            if step[0] == "neg":
                return self.neg(self.mul(step[1], other))
            if step[0] == "*" and self._exact(step[1]) is not None:
                return self.mul(step[1], self.mul(step[2], other))
        if y < x:
            x, y = y, x
        return self._node("*", x, y)

    def _scaled(self, factor: Fraction, constant: Node, x: Node) -> Node:
        if factor == 0:
            return constant
        if factor == 1:
            return x
        if factor == -1:
            return self.neg(x)
        step = self.steps[x]
        if step[0] == "neg":
            return self.mul(self.constant(-factor), step[1])
        if step[0] == "*" and (inner := self._exact(step[1])) is not None:
            return self.mul(self.constant(factor * inner), step[2])
        return self._node("*", constant, x)

    def div(self, x: Node, y: Node) -> Node:
        a, b = self._exact(x), self._exact(y)
        if a == 0:
            return x
        if b is not None and b:
            return self.mul(self.constant(1 / b), x)
        return self._node("/", x, y)

    def power(self, x: Node, n: int) -> Node:
        """x**n for n ≥ 0, every lower power shared."""
        result = self.constant(1)
        for _ in range(n):
            result = self.mul(result, x)
        return result

    def call(self, function: str, x: Node, *literals: int) -> Node:
        return self._node("call", function, x, *literals)

    def apply(self, function: str, *nodes: Node) -> Node:
        return self._node("apply", function, *nodes)

    def quadrature(self, integrand: Integrand, kinks: Sequence[Node], arguments: Sequence[Node]) -> Node:
        """∫_0^{2π} f(θ, *arguments) dθ, with the angles at which f is not smooth."""
        if integrand.vanishes:
            return self.constant(0)
        return self._node("quad", integrand, len(kinks), *kinks, *arguments)

    def total(self, nodes: Iterable[Node]) -> Node:
        result = self.constant(0)
        for node in nodes:
            result = self.add(result, node)
        return result

    def product(self, nodes: Iterable[Node]) -> Node:
        result = self.constant(1)
        for node in nodes:
            result = self.mul(result, node)
        return result

    def live(self, outputs: Sequence[Node]) -> list[Node]:
        """The nodes that the outputs depend on, in order of evaluation."""
        needed = set(outputs)
        for node in range(max(outputs, default=-1), -1, -1):
            if node in needed:
                needed.update(self.arguments(node))
        return sorted(needed)

    def arguments(self, node: Node) -> tuple[Node, ...]:
        step = self.steps[node]
        if step[0] in ("const", "input"):
            return ()
        if step[0] == "call":
            return (step[2],)
        return step[{"apply": 2, "quad": 3, "jump": 2}.get(step[0], 1) :]

    def derivatives(self, outputs: Sequence[Node], seeds: Mapping[Node, Node]) -> list[Node]:
        """d outputs/ds, where `seeds` gives d input/ds for the inputs that depend on s (forward differentiation)."""
        zero = self.constant(0)
        rates: dict[Node, Node] = {}
        for node in self.live(outputs):
            rates[node] = seeds[node] if node in seeds else self._rate(node, rates, zero)
        return [rates[node] for node in outputs]

    def _rate(self, node: Node, rates: Mapping[Node, Node], zero: Node) -> Node:
        step = self.steps[node]
        arguments = self.arguments(node)
        if all(rates[x] == zero for x in arguments):
            return zero
        if step[0] == "+":
            return self.add(rates[step[1]], rates[step[2]])
        if step[0] == "-":
            return self.sub(rates[step[1]], rates[step[2]])
        if step[0] == "neg":
            return self.neg(rates[step[1]])
        if step[0] == "*":
            return self.add(self.mul(rates[step[1]], step[2]), self.mul(step[1], rates[step[2]]))
        if step[0] == "/":
            return self.div(self.sub(rates[step[1]], self.mul(node, rates[step[2]])), step[2])
        if step[0] == "apply":
            return slope_of_several(self, step[1], arguments, rates)
        if step[0] == "quad":
            return self._rate_of_integral(step, rates)
        return self.mul(slope(self, step, node), rates[step[2]])

    def _rate_of_integral(self, step: tuple[Any, ...], rates: Mapping[Node, Node]) -> Node:
        """Through the arguments, and through angles at which the integrand jumps."""
        integrand, count = step[1], step[2]
        kinks, arguments = step[3 : 3 + count], step[3 + count :]
        zero, parts = self.constant(0), []
        for k, x in enumerate(arguments):
            if rates[x] != zero:
                parts.append(self.mul(self.quadrature(integrand.derivative(k), kinks, arguments), rates[x]))
        for kink in kinks:
            if rates[kink] != zero:
                parts.append(self.mul(self._node("jump", integrand, kink, *arguments), rates[kink]))
        return self.total(parts)
