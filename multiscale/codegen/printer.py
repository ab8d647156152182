"""A tape as Python source: one function of short assignments, with no in-place writes and no branching on values.

A node used once is written where it is used, as long as the line stays short; everything else is assigned once. NumPy,
other array namespaces and just-in-time compilers can run the same function.
"""

from __future__ import annotations

import keyword
from collections.abc import Iterable, Sequence
from fractions import Fraction
from typing import Any

from multiscale.codegen.runtime import RUNTIME
from multiscale.codegen.tape import Integrand, Node, Tape

__all__ = ["identifiers", "source"]

LINE = 88
_STRENGTH = {"+": 1, "-": 1, "neg": 2, "*": 3, "/": 3}


def identifiers(names: Iterable[str], taken: Iterable[str] = ()) -> list[str]:
    """ASCII identifiers for arbitrary names, in order, all different: nothing else of a name reaches the source."""
    used = set(taken) | {"sin", "cos", "exp", "log", "sqrt", "conj", *RUNTIME}
    result = []
    for name in names:
        word = "".join(c if c.isascii() and (c.isalnum() or c == "_") else "_" for c in name)
        if not word or word[0].isdigit() or keyword.iskeyword(word):
            word = f"_{word}"
        while word in used:
            word += "_"
        used.add(word)
        result.append(word)
    return result


def _number(value: Any) -> str:
    if isinstance(value, Fraction):
        return repr(float(value))
    return repr(value)


class _Integrands:
    """The integrands of phase averages, each a function of its own in front of the kernel."""

    def __init__(self) -> None:
        self._names: dict[Integrand, str] = {}
        self.functions: set[str] = set()
        self.lines: list[str] = []

    def named(self, integrand: Integrand) -> str:
        if integrand not in self._names:
            inputs = ["theta", *(f"x{k}" for k in range(integrand.count))]
            printer = _Printer(integrand.tape, [integrand.output], dict(zip(inputs, inputs, strict=True)), self)
            name = f"_integrand{len(self._names)}"
            self._names[integrand] = name
            self.functions |= printer.functions
            self.lines += [f"def {name}({', '.join(inputs)}):", *(f"    {line}" for line in printer.lines)]
            self.lines += [f"    return {printer.result(integrand.output)}", "", ""]
        return self._names[integrand]


class _Printer:
    def __init__(self, tape: Tape, outputs: Sequence[Node], names: dict[str, str], integrands: _Integrands) -> None:
        self._tape, self._outputs, self._names, self._integrands = tape, outputs, names, integrands
        self.lines: list[str] = []
        self.functions: set[str] = set()
        live = tape.live(outputs)
        self._uses: dict[Node, int] = dict.fromkeys(live, 0)
        for node in live:
            for argument in tape.arguments(node):
                self._uses[argument] += 1
        self._text: dict[Node, tuple[str, int]] = {}
        prefix = "v"
        while any(name.startswith(prefix) and name[len(prefix) :].isdigit() for name in names.values()):
            prefix += "v"
        for node in live:
            self._place(node, prefix)

    def _place(self, node: Node, prefix: str) -> None:
        text, strength = self._spell(node)
        trivial = self._tape.steps[node][0] in ("const", "input")
        if not trivial and (self._uses[node] > 1 or len(text) > LINE):
            name = f"{prefix}{len(self.lines)}"
            self.lines.append(f"{name} = {text}")
            text, strength = name, 4
        self._text[node] = text, strength

    def _operand(self, node: Node, strength: int) -> str:
        text, own = self._text[node]
        return text if own >= strength else f"({text})"

    def _spell(self, node: Node) -> tuple[str, int]:
        step = self._tape.steps[node]
        operation = step[0]
        if operation == "const":
            text = _number(step[2])
            return text, 4 if text[0] != "-" else 2
        if operation == "input":
            return self._names[step[1]], 4
        if operation == "call":
            self.functions.add(step[1])
            return f"{step[1]}({', '.join([self._text[step[2]][0], *map(repr, step[3:])])})", 4
        if operation == "apply":
            self.functions.add(step[1])
            return f"{step[1]}({self._listed(step[2:])})", 4
        if operation in ("quad", "jump"):
            return self._phase_average(step), 4
        strength = _STRENGTH[operation]
        if operation == "neg":
            return f"-{self._operand(step[1], 3)}", strength
        right = strength + 1 if operation in "-/" else strength
        return f"{self._operand(step[1], strength)} {operation} {self._operand(step[2], right)}", strength

    def _listed(self, nodes: Sequence[Node]) -> str:
        return ", ".join(self._text[node][0] for node in nodes)

    def _phase_average(self, step: tuple[Any, ...]) -> str:
        integrand = step[1]
        name = self._integrands.named(integrand)
        self.functions |= self._integrands.functions
        if step[0] == "jump":
            self.functions.add("jump")
            return f"jump({name}, {self._listed(step[2:])})"
        count = step[2]
        kinks, rest = step[3 : 3 + count], step[3 + count :]
        arguments = [name, repr(integrand.term), *([f"({self._listed(kinks)},)"] if count else [])]
        arguments += [self._text[node][0] for node in rest]
        self.functions.add("arcs" if count else "circle")
        return f"{'arcs' if count else 'circle'}({', '.join(arguments)})"

    def result(self, node: Node) -> str:
        return self._text[node][0]


def source(tape: Tape, outputs: Sequence[Node], arguments: Sequence[str], heading: str) -> tuple[str, tuple[str, ...]]:
    """(text, functions it needs) of ``kernel(*arguments) -> tuple``; arguments are the names of inputs of the tape."""
    words = identifiers([a.partition(" ")[2] or a for a in arguments], [f"_integrand{k}" for k in range(99)])
    integrands = _Integrands()
    printer = _Printer(tape, outputs, dict(zip(arguments, words, strict=True)), integrands)
    lines = [*integrands.lines, f"def kernel({', '.join(words)}):", f'    """{heading}"""']
    lines += [f"    {line}" for line in printer.lines]
    lines.append(
        f"    return ({', '.join(printer.result(node) for node in outputs)}{',' if len(outputs) == 1 else ''})"
    )
    return "\n".join(lines) + "\n", tuple(sorted(printer.functions))
