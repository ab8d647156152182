"""The parts of a generated module beyond NumPy's functions: integrands of phase averages, and what they need."""

from __future__ import annotations

from collections.abc import Iterable

from multiscale.codegen.description import plain
from multiscale.codegen.python_kernel import LINE, integrand_function, quoted
from multiscale.codegen.statements import Integrands
from multiscale.codegen.travelling import NUMPY, Travelling

__all__ = ["about_kernels", "brought_along", "imported", "integrand_functions"]

LONGEST_TERM = 280
"""Characters of a force in the text of an error."""
PART = 60
"""Of these, characters on a line."""


def imported(namespace: str, names: Iterable[str]) -> list[str]:
    """The import of the functions called `names` that NumPy has."""
    words = sorted({NUMPY[name] for name in names if name in NUMPY})
    line = f"from {namespace} import {', '.join(words)}"
    if not words or len(line) <= LINE:
        return [line] if words else []
    return [f"from {namespace} import (", *(f"    {x}," for x in words), ")"]


def brought_along(brought: Travelling) -> list[list[str]]:
    """The definitions at the end of the file."""
    if not brought.lines:
        return []
    told = [
        "# What the kernels call beside NumPy: functions with a guard at zero, special",
        "# functions and averages over a phase, as far as they are needed here.",
    ]
    first = brought.lines[0].startswith(("def ", "class ", "@"))
    return [[*told, *(["", ""] if first else [""]), *brought.lines]]


def integrand_functions(integrands: Integrands) -> list[list[str]]:
    """What is averaged over a phase, each with what errors call it."""
    blocks = []
    for integrand, found in integrands.listings:
        name, force = integrands.names[integrand]
        text = plain(integrand.term)
        text = text if len(text) <= LONGEST_TERM else f"{text[:LONGEST_TERM]} ..."
        line = f"{force} = {quoted(text)}"
        if len(line) > LINE:
            whole = len(quoted(text)) + 4 <= LINE
            parts = [text] if whole else [text[k : k + PART] for k in range(0, len(text), PART)]
            blocks.append([f"{force} = (", *(f"    {quoted(part)}" for part in parts), ")"])
        else:
            blocks.append([line])
        blocks[-1] += ["", "", *integrand_function(name, integrand, found)]
    return blocks


def about_kernels(names: Iterable[str]) -> list[str]:
    """What the head of the file says about kernels that call the functions `names`."""
    kernels = (
        "The kernel of a function, such as rhs_kernel, takes and returns scalars (or arrays of one shape), without "
    )
    kernels += "branches or in-place writes"
    if not (own := sorted(set(names) - NUMPY.keys())):
        return [f"{kernels}: just-in-time compilers accept it."]
    rows = [
        f"{kernels}. Kernels call {', '.join(own)}, defined at the end: Python functions of numbers or arrays, which a "
        "just-in-time compiler does not take as they stand."
    ]
    if {"circle", "arcs"} & set(own):
        rows.append(
            "Averages over a phase are computed when a function is called, to about 1e-13 of the mean modulus of what "
            "is averaged; IntegralError (a ValueError) where they do not converge or are not finite."
        )
    return rows
