"""Pieces of Python source, laid out as the usual formatters leave them at a line length of 88."""

from __future__ import annotations

from collections.abc import Iterable, Mapping, Sequence

from multiscale.codegen.functions import Routine
from multiscale.codegen.printer import identifiers
from multiscale.codegen.statements import Assignment, Integrands, Listing, listing
from multiscale.codegen.tape import Integrand
from multiscale.codegen.travelling import NUMPY

__all__ = [
    "LINE",
    "assigned",
    "call",
    "identifiers_of",
    "integrand_function",
    "kernel",
    "quoted",
    "sequence",
    "signature",
    "words_for",
]

LINE = 88
LONGEST = 32
"""Longer names are shortened, so that an operation on two of them fits a line."""


def identifiers_of(names: Iterable[str], taken: Iterable[str]) -> list[str]:
    """An identifier for each name, none of them among `taken`."""
    return identifiers([name[:LONGEST] for name in names], taken)


def words_for(routine: Routine, state: Iterable[str], taken: Iterable[str]) -> dict[str, str]:
    """An identifier for each input of a routine; `state` are the names to use for the state."""
    names = ["t", *state, *(str(s.name) for s in routine.program.parameters)]
    return dict(zip(routine.arguments, identifiers_of(names, taken), strict=True))


def quoted(text: str) -> str:
    """A string literal, in double quotes unless that needs more escapes."""
    plain = ascii(text)
    return plain if '"' in plain else f'"{plain[1:-1]}"'


def call(head: str, arguments: Sequence[str], tail: str = "", indent: int = 0) -> list[str]:
    """``head(arguments)tail`` on one line where it fits, otherwise one argument a line."""
    space = " " * indent
    line = f"{space}{head}({', '.join(arguments)}){tail}"
    if len(line) <= LINE:
        return [line]
    return [f"{space}{head}(", *(f"{space}    {x}," for x in arguments), f"{space}){tail}"]


def signature(name: str, arguments: Sequence[str]) -> list[str]:
    return call(f"def {name}", arguments, ":")


def sequence(name: str, items: Sequence[str], brackets: str = "()", indent: int = 0) -> list[str]:
    """``name = (items)`` on one line where it fits, otherwise one item a line."""
    space, left, right = " " * indent, brackets[0], brackets[1]
    comma = "," if len(items) == 1 and brackets == "()" else ""
    line = f"{space}{name} = {left}{', '.join(items)}{comma}{right}"
    return (
        [line]
        if len(line) <= LINE
        else [f"{space}{name} = {left}", *(f"{space}    {x}," for x in items), f"{space}{right}"]
    )


def assigned(x: Assignment, start: str = "") -> list[str]:
    """An assignment in the body of a function, one argument a line where a call does not fit.

    `start` replaces ``name =``.
    """
    start = start or f"{x.name} ="
    line = f"    {start} {x.text}"
    if len(line) <= LINE or not x.call:
        return [line]
    lines = [f"    {start} {x.call}("]
    for argument in x.arguments:
        if isinstance(argument, str):
            lines.append(f"        {argument},")
            continue
        several = f"        ({', '.join(argument)}{',' if len(argument) == 1 else ''}),"
        fits = len(several) <= LINE
        lines += [several] if fits else ["        (", *(f"            {y}," for y in argument), "        ),"]
    return [*lines, "    )"]


def kernel(
    name: str, routine: Routine, words: Mapping[str, str], heading: str, integrands: Integrands
) -> tuple[list[str], Listing]:
    """The lines of ``name(t, state, parameters) -> tuple``, and the listing they were made from."""
    moving = ("time t", *routine.state)
    found = listing(routine.program.tape, routine.outputs, words, moving, NUMPY, integrands)
    lines = [*signature(name, [words[x] for x in routine.arguments]), f'    """{heading}"""']
    if found.coefficients:
        lines.append("    # From the parameters alone.")
        lines += [line for x in found.coefficients for line in assigned(x)]
    if found.steps:
        lines.append("    # From time and state.")
        lines += [line for x in found.steps for line in assigned(x)]
    return [*lines, *_returned(found.results)], found


def integrand_function(name: str, integrand: Integrand, found: Listing) -> list[str]:
    """The lines of ``name(theta, x0, …)``."""
    lines = signature(name, ["theta", *(f"x{k}" for k in range(integrand.count))])
    lines.append('    """What is averaged over the phase theta."""')
    steps, result = [*found.coefficients, *found.steps], found.results[0]
    last = steps.pop() if steps and steps[-1].name == result else None
    lines += [line for x in steps for line in assigned(x)]
    return [*lines, *(assigned(last, "return") if last else [f"    return {result}"])]


def _returned(results: Sequence[str]) -> list[str]:
    if len(results) == 1:
        return [f"    return ({results[0]},)"]
    line = f"    return {', '.join(results)}"
    return [line] if len(line) <= LINE else ["    return (", *(f"        {x}," for x in results), "    )"]
