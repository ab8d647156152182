"""A kernel in two stages: what depends on the parameters alone is worked out once, when they are fixed.

The same operations are done in the same order, so results are the same to the last bit. Used for long kernels, most of
whose steps make coefficients out of parameters.
"""

from __future__ import annotations

import ast
from collections.abc import Callable, Mapping, Sequence
from functools import lru_cache
from types import CodeType
from typing import Any

__all__ = ["staged"]


def staged(
    source: str, functions: Mapping[str, Any], parameters: Sequence[float]
) -> Callable[..., tuple[Any, ...]] | None:
    """``kernel(t, *state)`` at fixed parameters, the last arguments of ``kernel`` in `source`.

    None where the parameters are singular for Python numbers, which raise where arrays give infinity.
    """
    prepare, kernel = _split(source, len(parameters))
    scope = dict(functions)
    exec(prepare, scope)
    try:
        coefficients = scope["kernel"](*parameters)
    except (ArithmeticError, ValueError):
        return None
    scope = dict(functions) | coefficients
    exec(kernel, scope)
    return scope["kernel"]  # type: ignore[no-any-return]


@lru_cache(maxsize=8)
def _split(source: str, count: int) -> tuple[CodeType, CodeType]:
    """Code of ``kernel(*parameters) -> {name: value}``, and of ``kernel(t, *state)`` with these as globals."""
    tree = ast.parse(source)
    whole = tree.body[0]
    assert isinstance(whole, ast.FunctionDef)
    arguments = [a.arg for a in whole.args.args]
    first, last = arguments[: len(arguments) - count], arguments[len(arguments) - count :]
    prefix = "fixed_"
    while prefix in source:
        prefix += "_"
    stage = _Stage(first, prefix)
    later: list[ast.stmt] = []
    for step in whole.body:
        if isinstance(step, ast.Assign):
            (target,) = step.targets
            assert isinstance(target, ast.Name)
            if stage.moves(step.value):
                stage.moving.add(target.id)
                later.append(ast.Assign([target], stage.visit(step.value)))
            else:
                stage.before.append(step)
        elif isinstance(step, ast.Return) and step.value is not None:
            later.append(ast.Return(stage.visit(step.value)))
    kept = sorted(stage.kept)
    table = ast.Dict([ast.Constant(name) for name in kept], [ast.Name(name, ast.Load()) for name in kept])
    return _function(last, [*stage.before, ast.Return(table)]), _function(first, later)


def _function(arguments: Sequence[str], body: list[ast.stmt]) -> CodeType:
    tree = ast.parse(f"def kernel({', '.join(arguments)}): pass")
    function = tree.body[0]
    assert isinstance(function, ast.FunctionDef)
    function.body = body
    return compile(ast.fix_missing_locations(tree), "<multiscale kernel>", "exec")


class _Stage(ast.NodeTransformer):
    """Replaces the parts of an expression that do not move by names, whose values are worked out `before`."""

    def __init__(self, moving: Sequence[str], prefix: str) -> None:
        self.moving = set(moving)
        self._prefix = prefix
        self.before: list[ast.stmt] = []
        self.kept: set[str] = set()
        self._count = 0

    def moves(self, node: ast.AST) -> bool:
        return any(isinstance(x, ast.Name) and x.id in self.moving for x in ast.walk(node))

    def visit(self, node: ast.AST) -> Any:
        if isinstance(node, ast.Name):
            if node.id not in self.moving:
                self.kept.add(node.id)
            return node
        if isinstance(node, ast.Constant) or not isinstance(node, ast.expr):
            return node
        if self.moves(node):
            if isinstance(node, ast.Call):
                node.args = [self.visit(x) for x in node.args]
                return node
            return self.generic_visit(node)
        name = f"{self._prefix}{self._count}"
        self._count += 1
        self.before.append(ast.Assign([ast.Name(name, ast.Store())], node))
        self.kept.add(name)
        return ast.Name(name, ast.Load())
