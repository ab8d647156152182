"""SymPy expressions as a table of nodes, each referring to earlier ones only.

    ["int", n]   ["rat", p, q]   ["float", sign, mantissa, exponent, precision]   ["const", name]
    ["sym", name, {assumption: true | false}]      ["fun", name, {assumption: …}, *arguments]
    ["add", *arguments]   ["mul", …]   ["pow", base, exponent]   ["diff", expression, symbol, count, …]
    ["call", name, *arguments]                     a function of the list `KNOWN`, and nothing else

Equal parts are written once. Reading builds every node by its constructor; no text is parsed or evaluated, and the size
of a node is bounded before it is made: bits of numbers, depth, length when written out without sharing, and number of
terms when multiplied out.
"""

from __future__ import annotations

from collections.abc import Sequence
from math import comb, prod
from typing import Any

import sympy as sp
from sympy.core.function import AppliedUndef
from sympy.functions.elementary.piecewise import ExprCondPair

from multiscale.errors import StorageError
from multiscale.storage.limits import (
    BITS,
    DEPTH,
    NODES,
    checked_name,
    integer,
    read_float,
    refuse,
    sequence,
    shown,
    spelled,
    spelled_float,
)

__all__ = ["Reader", "Writer"]

_CONSTANTS = {
    "pi": sp.pi,
    "e": sp.E,
    "i": sp.I,
    "true": sp.true,
    "false": sp.false,
    "infinity": sp.oo,
    "-infinity": -sp.oo,
}
_FUNCTIONS = [
    *(sp.sin, sp.cos, sp.tan, sp.cot, sp.sec, sp.csc, sp.asin, sp.acos, sp.atan, sp.atan2),
    *(sp.sinh, sp.cosh, sp.tanh, sp.coth, sp.asinh, sp.acosh, sp.atanh, sp.exp, sp.log),
    *(sp.Abs, sp.sign, sp.Heaviside, sp.Max, sp.Min, sp.conjugate, sp.re, sp.im, sp.erf),
    *(sp.besselj, sp.besseli, sp.gamma, sp.Integral, sp.Tuple, sp.Piecewise, ExprCondPair),
    *(sp.Gt, sp.Ge, sp.Lt, sp.Le, sp.And, sp.Or, sp.Not),
]
KNOWN: dict[str, Any] = {f.__name__: f for f in _FUNCTIONS}
_CLASSES = {"add": sp.Add, "mul": sp.Mul, "pow": sp.Pow}
_GROWING = {"gamma": 1000, "besselj": 1000, "besseli": 1000}  # SymPy evaluates these at numbers
_SEVERAL = {"Max": 64, "Min": 64, "And": 64, "Or": 64, "Piecewise": 64}  # SymPy compares the arguments pairwise
_MULTIPLIED_OUT = ("re", "im", "conjugate", "Abs", "sign")
_PARTS = 128  # terms of what SymPy takes apart into real and imaginary parts
TERMS = 20_000
"""Terms of an expression when its products and powers of sums are multiplied out."""
_ROOT = 2000  # bits of a number whose root SymPy looks for
_DEGREE = 300, 10_000  # of a power of a sum, and of anything else that is no number
_EXPONENT = 2**20  # of a power of or with a floating-point number


class Writer:
    """Collects the nodes of expressions; `node` gives the index of one."""

    def __init__(self) -> None:
        self.nodes: list[list[Any]] = []
        self._index: dict[Any, int] = {}

    def node(self, x: sp.Basic) -> int:
        if x not in self._index:
            row = self._row(x)
            self._index[x] = len(self.nodes)
            self.nodes.append(row)
        return self._index[x]

    def _row(self, x: sp.Basic) -> list[Any]:
        if isinstance(x, sp.Integer):
            return ["int", spelled(int(x))]
        if isinstance(x, sp.Rational):
            return ["rat", spelled(int(x.p)), spelled(int(x.q))]
        if isinstance(x, sp.Float):
            return ["float", *spelled_float(x)]
        for name, constant in _CONSTANTS.items():
            if x == constant:
                return ["const", name]
        if type(x) is sp.Symbol:
            return ["sym", _storable(x.name), _assumptions(x._assumptions_orig)]
        if isinstance(x, AppliedUndef):
            return ["fun", _storable(x.func.__name__), _assumptions(x.func._kwargs), *map(self.node, x.args)]
        if isinstance(x, sp.Derivative):
            steps = [part for symbol, count in x.variable_count for part in (self.node(symbol), int(count))]
            return ["diff", self.node(x.expr), *steps]
        for word, cls in _CLASSES.items():
            if type(x) is cls:
                return [word, *map(self.node, x.args)]
        if KNOWN.get(type(x).__name__) is type(x):
            return ["call", type(x).__name__, *map(self.node, x.args)]
        raise StorageError(f"{x} is a {type(x).__name__}, which cannot be stored: replace it before expanding")


def _storable(name: str) -> str:
    try:
        return checked_name(name)
    except StorageError:
        raise StorageError(f"the name {name!r} cannot be stored: use letters, digits, _, ^, \\ and braces") from None


def _assumptions(given: dict[str, Any]) -> dict[str, bool]:
    return {name: bool(value) for name, value in sorted(given.items()) if value is not None}


class Reader:
    """The expressions of a table of nodes; raises `StorageError` for anything that `Writer` would not write."""

    def __init__(self, nodes: Any) -> None:
        if len(sequence(nodes, "the table of expressions")) > NODES:
            raise refuse(f"{len(nodes)} expressions, more than {NODES}")
        self._made: list[sp.Basic] = []
        self._sizes: list[tuple[int, int, int]] = []  # depth, length written out, terms multiplied out
        self._clean: set[sp.Basic] = set()
        for row in nodes:
            self._add(sequence(row, "an expression"))

    def expression(self, index: Any) -> sp.Basic:
        return self._made[integer(index, "a reference", 0, len(self._made) - 1)]

    def scalar(self, index: Any) -> sp.Expr:
        """An expression in the narrow sense, neither a condition nor a tuple."""
        x = self.expression(index)
        if not isinstance(x, sp.Expr) or isinstance(x, ExprCondPair):
            raise refuse(f"{shown(x)!r} where an expression was expected")
        return x

    def _add(self, row: Sequence[Any]) -> None:
        if not row or not isinstance(row[0], str) or (reading := getattr(self, f"_{row[0]}_node", None)) is None:
            raise refuse(f"unknown kind of expression {shown(row[:1])}")
        below = list(self._references(row))
        depth = 1 + max((self._sizes[k][0] for k in below), default=0)
        length = 1 + sum(self._sizes[k][1] for k in below)
        if depth > DEPTH or length > NODES:
            raise refuse(f"an expression of depth {depth} and length {length}, more than {DEPTH} and {NODES}")
        terms = self._terms(row, below)
        if terms > TERMS:
            raise refuse(f"an expression of more than {TERMS} terms when multiplied out")
        try:
            made = reading(*row[1:])
        except StorageError:
            raise
        except Exception as error:
            raise refuse(f"the expression {shown(row)} cannot be made ({type(error).__name__})") from None
        if not isinstance(made, sp.Basic) or not self._has_value(made):
            raise refuse(f"the expression {shown(row)} has no value")
        self._made.append(made)
        self._sizes.append((depth, length, terms))

    def _has_value(self, made: sp.Basic) -> bool:
        """Whether nothing in an expression is undefined; what was looked at before is not looked at again."""
        waiting = [made]
        while waiting:
            x = waiting.pop()
            if x in (sp.nan, sp.zoo):
                return False
            if x not in self._clean:
                self._clean.add(x)
                waiting += x.args
        return True

    def _terms(self, row: Sequence[Any], below: Sequence[int]) -> int:
        """An upper bound for the terms of a node that is multiplied out; no more than is needed to refuse it."""
        counts = [self._sizes[k][2] for k in below]
        if row[0] == "add":
            return sum(counts)
        if row[0] == "mul":
            return min(prod(counts), TERMS + 1)
        if row[0] == "pow" and len(below) == 2 and counts[0] > 1:
            n = self._made[below[1]]
            # (x_1 + … + x_T)^n has binomial(n + T − 1, n) terms, at least n + 1.
            if n.is_Integer and n.is_positive:
                if n > _DEGREE[0]:
                    raise refuse(f"a sum to a power above {_DEGREE[0]}")
                return min(comb(int(n) + counts[0] - 1, int(n)), TERMS + 1)
        if row[0] == "call" and row[1] in _MULTIPLIED_OUT and max(counts, default=0) > _PARTS:
            raise refuse(f"{row[1]} of a sum of more than {_PARTS} terms")
        return 1

    def _references(self, row: Sequence[Any]) -> Sequence[int]:
        start = {"add": 1, "mul": 1, "pow": 1, "diff": 1, "call": 2, "fun": 3}.get(row[0], len(row))
        numbers = [integer(k, "a reference", 0) for k in row[start:]]
        if row[0] == "diff":
            numbers = numbers[:1] + numbers[1::2]
        if any(k >= len(self._made) for k in numbers):
            raise refuse("a reference to a later expression")
        return numbers

    def _int_node(self, n: Any) -> sp.Basic:
        return sp.Integer(integer(n, "an integer"))

    def _rat_node(self, p: Any, q: Any) -> sp.Basic:
        return sp.Rational(integer(p, "a numerator"), integer(q, "a denominator", 1))

    def _float_node(self, *parts: Any) -> sp.Basic:
        return read_float(list(parts))

    def _const_node(self, name: Any) -> sp.Basic:
        return _CONSTANTS[name]

    def _sym_node(self, name: Any, assumptions: Any) -> sp.Basic:
        return sp.Symbol(checked_name(name), **_read_assumptions(assumptions))

    def _fun_node(self, name: Any, assumptions: Any, *arguments: Any) -> sp.Basic:
        function = sp.Function(checked_name(name), **_read_assumptions(assumptions))
        return function(*map(self.scalar, arguments))

    def _add_node(self, *arguments: Any) -> sp.Basic:
        return sp.Add(*map(self.scalar, arguments))

    def _mul_node(self, *arguments: Any) -> sp.Basic:
        factors = [self.scalar(k) for k in arguments]
        if sum(map(_bits, factors)) > BITS:
            raise refuse("a product of numbers of excessive size")
        return sp.Mul(*factors)

    def _pow_node(self, base: Any, exponent: Any) -> sp.Basic:
        x, n = self.scalar(base), self.scalar(exponent)
        if n.is_Rational and (_bits(n) > 64 or max(1, _bits(x)) * abs(n.p) > BITS):
            raise refuse("a power of excessive size")
        if n.is_Integer and not x.is_number and abs(n) > _DEGREE[1]:
            raise refuse(f"a power above {_DEGREE[1]}")
        if n.is_Integer is not True and any(
            max(int(r.p).bit_length(), int(r.q).bit_length()) > _ROOT for r in x.atoms(sp.Rational)
        ):
            raise refuse(f"a root of a number of more than {_ROOT} bits")
        if any(abs(r) > _EXPONENT for r in n.atoms(sp.Float)) or (
            x.has(sp.Float) and n.is_number and abs(n) > _EXPONENT
        ):
            raise refuse(f"a power above {_EXPONENT} with floating-point numbers")
        return sp.Pow(x, n)

    def _diff_node(self, expression: Any, *steps: Any) -> sp.Basic:
        pairs = [
            (self.scalar(s), integer(n, "an order of derivative", 1, 10))
            for s, n in zip(steps[::2], steps[1::2], strict=True)
        ]
        return sp.Derivative(self.scalar(expression), *pairs)

    def _call_node(self, name: Any, *arguments: Any) -> sp.Basic:
        function = KNOWN[name]
        given = [self.expression(k) for k in arguments]
        for x in given if name in _GROWING else ():
            if any(_bits(n) > 32 or abs(n) > _GROWING[name] for n in x.atoms(sp.Rational, sp.Float)):
                raise refuse(f"{name} of a number above {_GROWING[name]}")
        if len(given) > _SEVERAL.get(name, NODES):
            raise refuse(f"{name} of {len(given)} expressions, more than {_SEVERAL[name]}")
        return function(*given)


def _bits(x: sp.Basic) -> int:
    """An upper bound for the bits of the rational numbers in an expression that SymPy would multiply out."""
    return sum(int(n.p).bit_length() + int(n.q).bit_length() for n in x.atoms(sp.Rational) if n not in (1, -1))


def _read_assumptions(given: Any) -> dict[str, bool]:
    if not isinstance(given, dict) or len(given) > 50 or not all(isinstance(v, bool) for v in given.values()):
        raise refuse(f"{shown(given)!r} where the assumptions of a symbol were expected")
    from sympy.core.assumptions import _assume_defined

    if not set(given) <= set(_assume_defined):
        raise refuse(f"unknown assumption {min(set(given) - set(_assume_defined))[:40]!r}")
    return dict(given)
