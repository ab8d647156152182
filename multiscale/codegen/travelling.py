"""The definitions of `multiscale.codegen.runtime` that a file of its own needs, as text.

A definition is taken as it stands, together with all those that it mentions, in the order of the runtime. Names that
NumPy has too (`NUMPY`) are imported instead.
"""

from __future__ import annotations

import ast
import inspect
from collections.abc import Iterable
from dataclasses import dataclass
from functools import cache

from multiscale.codegen import runtime

__all__ = ["ELEMENTARY", "NUMPY", "QUADRATURE", "Travelling", "travelling"]

ELEMENTARY = {"sin": "sin", "cos": "cos", "exp": "exp", "log": "log", "sqrt": "sqrt"}
NUMPY = {name: name for name in ("absolute", "sign", "where", "arcsin", "arccos", "arctan", "arcsinh", "tanh")}
NUMPY |= ELEMENTARY | {"root": "sqrt"}
"""What NumPy calls a function of generated source."""
QUADRATURE = frozenset(["circle", "arcs", "jump", "besselj", "besseli", "gamma_function", "digamma"])
"""The functions whose number of nodes or steps depends on values: they need NumPy itself."""


@dataclass(frozen=True)
class Travelling:
    """Lines of `imports` (without NumPy's own), and of the definitions."""

    imports: tuple[str, ...]
    lines: tuple[str, ...]


@dataclass(frozen=True)
class _Definition:
    name: str
    mentions: frozenset[str]
    lines: tuple[str, ...]
    first: int
    last: int
    is_block: bool


def travelling(names: Iterable[str]) -> Travelling:
    """What the functions called `names` need."""
    table = {d.name: d for d in _definitions()}
    needed: set[str] = set()
    waiting = [name for name in names if name in table]
    while waiting:
        name = waiting.pop()
        if name not in needed:
            needed.add(name)
            waiting += [x for x in table[name].mentions if x in table]
    kept = [d for d in table.values() if d.name in needed]
    lines: list[str] = []
    for before, d in zip([None, *kept], kept, strict=False):
        if before is not None:
            lines += ["", ""] if before.is_block or d.is_block else [""] * (d.first > before.last + 1)
        lines += d.lines
    mentioned = {x for d in kept for x in d.mentions}
    return Travelling(tuple(_imports(mentioned)), tuple(lines))


def _imports(mentioned: set[str]) -> list[str]:
    found = []
    for step in _tree().body:
        if isinstance(step, ast.Import):
            found += [f"import {x.name}" for x in step.names if x.name in mentioned]
        elif isinstance(step, ast.ImportFrom) and step.module != "__future__":
            names = [x.name for x in step.names if x.name in mentioned]
            found += [f"from {step.module} import {', '.join(names)}"] if names else []
    return found


@cache
def _text() -> str:
    return inspect.getsource(runtime)


@cache
def _tree() -> ast.Module:
    return ast.parse(_text())


@cache
def _definitions() -> tuple[_Definition, ...]:
    """Functions, classes and constants, each constant with the text that says what it is."""
    rows, body = _text().splitlines(), _tree().body
    found = []
    for step, after in zip(body, [*body[1:], None], strict=True):
        if isinstance(step, ast.FunctionDef | ast.ClassDef):
            name, is_block = step.name, True
            first = min([step.lineno, *(x.lineno for x in step.decorator_list)])
        elif isinstance(step, ast.Assign) and isinstance(step.targets[0], ast.Name):
            name, is_block, first = step.targets[0].id, False, step.lineno
        else:
            continue
        told = not is_block and isinstance(after, ast.Expr) and isinstance(after.value, ast.Constant)
        last = after.end_lineno if told and after is not None else step.end_lineno
        assert last is not None
        mentions = frozenset(x.id for x in ast.walk(step) if isinstance(x, ast.Name)) - {name}
        found.append(_Definition(name, mentions, tuple(rows[first - 1 : last]), first, last, is_block))
    return tuple(found)
