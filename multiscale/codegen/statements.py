"""A tape as assignments that each fit a line: the form that Python modules and C sources share.

Every assignment is ``name = text`` with `text` of at most `WIDTH` characters. Values that depend on parameters alone
come first and are called c0, c1, …; the rest, called v0, v1, …, depends on time or state. A value is assigned when it
is used more than once, when it passes from the first part to the second, or when the line would be too long.
"""

from __future__ import annotations

import re
from collections.abc import Iterable, Mapping, Sequence
from dataclasses import dataclass
from fractions import Fraction
from typing import Any

from multiscale.codegen.tape import Node, Tape

__all__ = ["WIDTH", "Assignment", "Listing", "listing", "names_in"]

WIDTH = 72
"""With indentation and a name such as ``c12345 = `` the line stays within 88 characters."""
_NAME = re.compile(r"(?<![\w.])[A-Za-z_]\w*")


@dataclass(frozen=True)
class Assignment:
    """``name = text``."""

    name: str
    text: str


@dataclass(frozen=True)
class Listing:
    """The assignments of a computation, its `results` as texts, and the `functions` it calls.

    `coefficients` depend on parameters alone; `steps` on time and state too.
    """

    coefficients: tuple[Assignment, ...]
    steps: tuple[Assignment, ...]
    results: tuple[str, ...]
    functions: tuple[str, ...]


def names_in(text: str) -> list[str]:
    """The identifiers in a text, without repetition."""
    return list(dict.fromkeys(_NAME.findall(text)))


def listing(tape: Tape, outputs: Sequence[Node], words: Mapping[str, str], moving: Iterable[str] = ()) -> Listing:
    """The listing of `outputs`; `words` names the inputs, `moving` are the inputs that are no parameters."""
    return _Lister(tape, outputs, words, frozenset(moving)).listing()


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


class _Lister:
    def __init__(self, tape: Tape, outputs: Sequence[Node], words: Mapping[str, str], moving: frozenset[str]) -> None:
        self._tape, self._outputs, self._words, self._moving = tape, outputs, words, moving
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
            if counts[node] > 1:
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
        lines.append(Assignment(name, value.text))
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
        text, strength = self._spell(step)
        while len(text) > WIDTH:
            longest = max((x for x in arguments), key=lambda x: (not self._values[x].simple, len(self._values[x].text)))
            if not self._assign(longest):
                break
            text, strength = self._spell(step)
        return _Value(text, strength, moves, False)

    def _operand(self, node: Node, strength: int) -> str:
        value = self._values[node]
        return value.text if value.strength >= strength else f"({value.text})"

    def _spell(self, step: tuple[Any, ...]) -> tuple[str, int]:
        operation = step[0]
        if operation == "call":
            self._functions.add(step[1])
            return f"{step[1]}({self._values[step[2]].text})", 4
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
