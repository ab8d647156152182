"""Pieces of Python source, laid out as the usual formatters leave them at a line length of 88."""

from __future__ import annotations

from collections.abc import Iterable, Mapping, Sequence

from multiscale.codegen.functions import Routine
from multiscale.codegen.printer import identifiers
from multiscale.codegen.statements import Listing, listing

__all__ = ["LINE", "call", "identifiers_of", "kernel", "quoted", "sequence", "signature", "words_for"]

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


def kernel(name: str, routine: Routine, words: Mapping[str, str], heading: str) -> tuple[list[str], Listing]:
    """The lines of ``name(t, state, parameters) -> tuple``, and the listing they were made from."""
    found = listing(routine.program.tape, routine.outputs, words, ("time t", *routine.state))
    lines = [*signature(name, [words[x] for x in routine.arguments]), f'    """{heading}"""']
    if found.coefficients:
        lines.append("    # From the parameters alone.")
        lines += [f"    {x.name} = {x.text}" for x in found.coefficients]
    if found.steps:
        lines.append("    # From time and state.")
        lines += [f"    {x.name} = {x.text}" for x in found.steps]
    return [*lines, *_returned(found.results)], found


def _returned(results: Sequence[str]) -> list[str]:
    if len(results) == 1:
        return [f"    return ({results[0]},)"]
    line = f"    return {', '.join(results)}"
    return [line] if len(line) <= LINE else ["    return (", *(f"        {x}," for x in results), "    )"]
