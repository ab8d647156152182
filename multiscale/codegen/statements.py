"""A tape as assignments that each fit a line: the form that Python modules and C sources share.

Every assignment is ``name = text`` with `text` of at most `WIDTH` characters. Values that depend on parameters alone
come first and are called c0, c1, …; the rest, called v0, v1, …, depends on time or state. A value is assigned when it
is used more than once, when it passes from the first part to the second, or when the line would be too long. A call
that is too long for a line although all its arguments are names comes with them one by one.

An average over a phase is a call of the quadrature with an integrand, a function of its own (`Integrands`).
"""

from __future__ import annotations

import re
from collections.abc import Iterable, Mapping, Sequence
from dataclasses import dataclass, field
from fractions import Fraction
from typing import Any

from multiscale.codegen.tape import Integrand, Node, Tape

__all__ = ["WIDTH", "Assignment", "Integrands", "Listing", "listing", "names_in"]

WIDTH = 72
"""With indentation and a name such as ``c12345 = `` the line stays within 88 characters."""
_NAME = re.compile(r"(?<![\w.])[A-Za-z_]\w*")


@dataclass(frozen=True)
class Assignment:
    """``name = text``; where `call` is given, the text calls it with `arguments`, one of which may be several."""

    name: str
    text: str
    call: str = ""
    arguments: tuple[str | tuple[str, ...], ...] = ()


@dataclass(frozen=True)
class Listing:
    """The assignments of a computation, its `results` as texts, and the `functions` it calls.

    `coefficients` depend on parameters alone; `steps` on time and state too.
    """

    coefficients: tuple[Assignment, ...]
    steps: tuple[Assignment, ...]
    results: tuple[str, ...]
    functions: tuple[str, ...]


@dataclass
class Integrands:
    """The integrands of a file, each listed once: {integrand: (its name, the name of what errors call it)}."""

    names: dict[Integrand, tuple[str, str]] = field(default_factory=dict)
    listings: list[tuple[Integrand, Listing]] = field(default_factory=list)

    def named(self, integrand: Integrand, spelling: Mapping[str, str]) -> tuple[str, str]:
        if integrand not in self.names:
            inputs = {name: name for name in ("theta", *(f"x{k}" for k in range(integrand.count)))}
            # Integrands within this one come first.
            found = _Lister(integrand.tape, [integrand.output], inputs, frozenset(["theta"]), spelling, self).listing()
            number = len(self.names) + 1
            self.names[integrand] = f"_integrand_{number}", f"_FORCE_{number}"
            self.listings.append((integrand, found))
        return self.names[integrand]


def names_in(text: str) -> list[str]:
    """The identifiers in a text, without repetition."""
    return list(dict.fromkeys(_NAME.findall(text)))


def listing(
    tape: Tape,
    outputs: Sequence[Node],
    words: Mapping[str, str],
    moving: Iterable[str] = (),
    spelling: Mapping[str, str] | None = None,
    integrands: Integrands | None = None,
) -> Listing:
    """The listing of `outputs`.

    `words` names the inputs, `moving` are the inputs that are no parameters. `spelling` is what the language calls a
    function, itself where it is not there; `integrands` takes up those of phase averages.
    """
    return _Lister(tape, outputs, words, frozenset(moving), spelling or {}, integrands or Integrands()).listing()


def _number(value: Any) -> str:
    return repr(float(value) if isinstance(value, Fraction) else value)


def _prefix(letter: str, words: Iterable[str]) -> str:
    """The letter, repeated until no word looks like one of the names made with it."""
    prefix = letter
    while any(word.startswith(prefix) and word[len(prefix) :].isdigit() for word in words):
        prefix += letter
    return prefix


@dataclass
class _Value:
    """A text and how strongly it binds: 1 a sum, 2 with a minus sign in front, 3 a product, 4 an atom."""

    text: str
    strength: int
    moves: bool
    simple: bool
    call: str = ""
    arguments: tuple[str | tuple[str, ...], ...] = ()


class _Lister:
    def __init__(
        self,
        tape: Tape,
        outputs: Sequence[Node],
        words: Mapping[str, str],
        moving: frozenset[str],
        spelling: Mapping[str, str],
        integrands: Integrands,
    ) -> None:
        self._tape, self._outputs, self._words, self._moving = tape, outputs, words, moving
        self._spelling, self._integrands = spelling, integrands
        self._assigned: dict[bool, list[Assignment]] = {False: [], True: []}
        self._prefix = {moves: _prefix("v" if moves else "c", words.values()) for moves in (False, True)}
        self._functions: set[str] = set()
        self._values: dict[Node, _Value] = {}
        live = tape.live(outputs)
        counts = dict.fromkeys(live, 0)
        for node in live:
            for argument in tape.arguments(node):
                counts[argument] += 1
        for node in live:
            self._values[node] = self._placed(node)
            if counts[node] > 1 or tape.steps[node][0] in ("quad", "jump"):
                self._assign(node)

    def listing(self) -> Listing:
        results = tuple(self._values[node].text for node in self._outputs)
        first, second = self._assigned[False], self._assigned[True]
        return Listing(tuple(first), tuple(second), results, tuple(sorted(self._functions)))

    def _assign(self, node: Node) -> bool:
        """Give the value of a node a name, unless it has one or is as good as one."""
        value = self._values[node]
        if value.simple:
            return False
        lines = self._assigned[value.moves]
        name = f"{self._prefix[value.moves]}{len(lines)}"
        lines.append(Assignment(name, value.text, value.call, value.arguments))
        self._values[node] = _Value(name, 4, value.moves, True)
        return True

    def _placed(self, node: Node) -> _Value:
        step = self._tape.steps[node]
        if step[0] == "const":
            text = _number(step[2])
            return _Value(text, 2 if text[0] == "-" else 4, False, True)
        if step[0] == "input":
            return _Value(self._words[step[1]], 4, step[1] in self._moving, True)
        arguments = self._tape.arguments(node)
        moves = any(self._values[x].moves for x in arguments)
        for x in arguments if moves else ():
            if not self._values[x].moves:
                self._assign(x)
        if step[0] in ("apply", "quad", "jump") or (len(step) > 3 and step[0] == "call"):
            return self._called(step, arguments, moves)
        text, strength = self._spell(step)
        while len(text) > WIDTH:
            longest = max((x for x in arguments), key=lambda x: (not self._values[x].simple, len(self._values[x].text)))
            if not self._assign(longest):
                break
            text, strength = self._spell(step)
        return _Value(text, strength, moves, False)

    def _called(self, step: tuple[Any, ...], nodes: Sequence[Node], moves: bool) -> _Value:
        """A call with several arguments: values longer than a word have names of their own."""
        for x in nodes:
            if step[0] in ("quad", "jump") or len(self._values[x].text) > WIDTH // 4:
                self._assign(x)
        texts = [self._values[x].text for x in nodes]
        rest: list[str | tuple[str, ...]] = [*texts]
        if step[0] == "quad":
            count = step[2]
            name, function = self._integrands.named(step[1], self._spelling), "arcs" if count else "circle"
            rest = [*name, *([tuple(texts[:count])] if count else []), *texts[count:]]
        elif step[0] == "jump":
            function, rest = "jump", [self._integrands.named(step[1], self._spelling)[0], *texts]
        else:
            function, rest = step[1], [*texts, *(map(repr, step[3:]) if step[0] == "call" else ())]
        self._functions.add(function)
        function = self._spelling.get(function, function)
        spelled = [x if isinstance(x, str) else f"({', '.join(x)}{',' if len(x) == 1 else ''})" for x in rest]
        return _Value(f"{function}({', '.join(spelled)})", 4, moves, False, function, tuple(rest))

    def _operand(self, node: Node, strength: int) -> str:
        value = self._values[node]
        return value.text if value.strength >= strength else f"({value.text})"

    def _spell(self, step: tuple[Any, ...]) -> tuple[str, int]:
        operation = step[0]
        if operation == "call":
            self._functions.add(step[1])
            return f"{self._spelling.get(step[1], step[1])}({self._values[step[2]].text})", 4
        if operation == "neg":
            return f"-{self._operand(step[1], 3)}", 2
        left, right = self._values[step[1]], self._values[step[2]]
        if operation in "+-":
            # A minus sign in front of the second operand goes into the operation.
            if right.text[0] == "-" and right.strength == 2:
                return f"{left.text} {'-' if operation == '+' else '+'} {right.text[1:]}", 1
            return f"{left.text} {operation} {self._operand(step[2], 1 if operation == '+' else 2)}", 1
        if left.text[0] == "-" and self._tape.steps[step[1]][0] == "const":
            return f"{left.text} {operation} {self._operand(step[2], 3 if operation == '*' else 4)}", 2
        return f"{self._operand(step[1], 3)} {operation} {self._operand(step[2], 3 if operation == '*' else 4)}", 3
