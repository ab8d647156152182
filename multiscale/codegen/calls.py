"""SymPy expressions of parameters as steps on a tape: the meanings of generators, such as sqrt(k/m)."""

from __future__ import annotations

from collections.abc import Callable
from fractions import Fraction

import sympy as sp

from multiscale.codegen.special import special
from multiscale.codegen.tape import Node, Tape
from multiscale.errors import EvaluationError

__all__ = ["evaluate"]

FUNCTIONS = {sp.sin: "sin", sp.cos: "cos", sp.exp: "exp", sp.log: "log"}


def evaluate(tape: Tape, x: sp.Expr, symbol: Callable[[sp.Symbol], Node]) -> Node:
    """The node of an expression; `symbol` supplies the nodes of its symbols.

    Raises EvaluationError for a function that has no NumPy counterpart here.
    """
    if isinstance(x, sp.Rational):
        return tape.constant(Fraction(int(x.p), int(x.q)))
    if not x.free_symbols and not x.has(sp.Integral, sp.core.function.AppliedUndef):
        return tape.constant(float(x))
    if isinstance(x, sp.Symbol):
        return symbol(x)
    if isinstance(x, sp.Add):
        return tape.total(evaluate(tape, arg, symbol) for arg in x.args)
    if isinstance(x, sp.Mul):
        return tape.product(evaluate(tape, arg, symbol) for arg in x.args)
    if isinstance(x, sp.Pow) and x.exp.is_Rational and x.exp.q <= 2:
        base = evaluate(tape, x.base, symbol)
        if x.exp.q == 2:
            base = tape.call("sqrt", base)
        result = tape.power(base, abs(int(x.exp.p)))
        return result if x.exp.p > 0 else tape.div(tape.constant(1), result)
    if isinstance(x, sp.Pow):
        return tape.call(
            "exp", tape.mul(evaluate(tape, x.exp, symbol), tape.call("log", evaluate(tape, x.base, symbol)))
        )
    if isinstance(x, sp.tan):
        return tape.div(evaluate(tape, sp.sin(x.args[0]), symbol), evaluate(tape, sp.cos(x.args[0]), symbol))
    if x.func in FUNCTIONS:
        return tape.call(FUNCTIONS[x.func], evaluate(tape, x.args[0], symbol))
    if isinstance(x, sp.sinh | sp.cosh):
        return evaluate(tape, x.rewrite(sp.exp), symbol)
    if (node := special(tape, x, symbol, evaluate)) is not None:
        return node
    raise EvaluationError(
        f"{x} cannot be evaluated in generated code: replace {x.func.__name__} by a symbol and give that a value"
    )
