"""Declared resonances: relations with detuning that eliminate one frequency each.

    Ω = ω + εσ,   ω = Ω − εσ,   ω² = Ω² + εδ,   2Ω_1 + Ω_2 = ω + εσ,   ω_2 = 2ω_1 + εσ (the key may be the unknown)

The left side is eliminated, wherever it occurs. Where a relation is not polynomial in ε (a frequency given by its
square), what it is put into is expanded in ε to the order asked for.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import Any

import sympy as sp

from multiscale.errors import ProblemError, ResonanceError
from multiscale.problem.reading import decimals, given_expression

__all__ = ["Detuning", "Relations", "detuning_of", "relation_pairs", "relations_of", "taylor"]


@dataclass(frozen=True)
class Detuning:
    """How a detuning follows from the frequencies of its relation: detuning = formula.

    `eliminated` is the symbol that the relation replaced, None where it is the natural frequency of an unknown.
    """

    eliminated: sp.Symbol | None
    detuning: sp.Symbol | None
    formula: sp.Expr


@dataclass(frozen=True)
class Relations:
    """`stated` as the user gave them; `squares[symbol]` and `values[symbol]` replace eliminated symbols; `frequencies`
    replace the natural frequency of an unknown (by index), `modes` that of a mode of coupled equations (from 0)."""

    stated: tuple[tuple[sp.Expr, sp.Expr], ...] = ()
    values: tuple[tuple[sp.Symbol, sp.Expr], ...] = ()
    frequencies: tuple[tuple[int, sp.Expr], ...] = ()
    detunings: tuple[Detuning, ...] = ()
    modes: tuple[tuple[int, sp.Expr], ...] = ()

    def apply(self, x: sp.Expr, small: sp.Symbol, order: int) -> tuple[sp.Expr, bool]:
        """(x with eliminated symbols replaced, whether a series was cut at `order`)."""
        cut = False
        for symbol, value in self.values:
            if symbol not in x.free_symbols:
                continue
            x = _even_powers(x, symbol, value)
            polynomial = value.is_polynomial(small)
            replacements = {}
            for atom in sorted(_opaque(x, symbol), key=str):
                replacements[atom] = taylor(atom.subs(symbol, value), small, order)
                cut = True
            x = x.xreplace(replacements)
            if symbol in x.free_symbols:
                cut = cut or not polynomial
                x = x.subs(symbol, value if polynomial else taylor(value, small, order))
        return x, cut


def _even_powers(x: sp.Expr, symbol: sp.Symbol, value: sp.Expr) -> sp.Expr:
    """symbol**(2n) by an exact power where the value is a square root."""
    if not (isinstance(value, sp.Pow) and value.exp == sp.Rational(1, 2)):
        return x
    powers = {p: value.base ** (p.exp / 2) for p in x.atoms(sp.Pow) if p.base == symbol and p.exp.is_even and p.exp > 0}
    return x.xreplace(powers)


def _opaque(x: sp.Expr, symbol: sp.Symbol) -> set[sp.Expr]:
    """The largest subexpressions in which the symbol does not stand polynomially."""
    if symbol not in x.free_symbols or x == symbol:
        return set()
    if isinstance(x, sp.Add | sp.Mul):
        return set().union(*(_opaque(arg, symbol) for arg in x.args))
    if isinstance(x, sp.Pow) and x.exp.is_Integer and x.exp.is_positive:
        return _opaque(x.base, symbol)
    return {x}


def taylor(x: sp.Expr, small: sp.Symbol, order: int) -> sp.Expr:
    """Σ_{k ≤ order} of the Taylor series of x in the small parameter."""
    terms, derivative, factorial = [], x, sp.Integer(1)
    for k in range(order + 1):
        terms.append(derivative.subs(small, 0) * small**k / factorial)
        derivative = sp.diff(derivative, small)
        factorial *= k + 1
    return sp.Add(*terms)


def relations_of(
    given: Sequence[tuple[sp.Expr, sp.Expr]],
    unknowns: Sequence[sp.Expr],
    small: sp.Symbol,
    drives: set[sp.Symbol],
    known: set[sp.Symbol],
    carried: Mapping[sp.Symbol, sp.Expr],
    modes: Mapping[sp.Symbol, int],
) -> Relations:
    """Read the relations.

    `drives` are the symbols of drive frequencies, `known` all symbols of the equations (a detuning is likely not among
    them), `carried` puts orders into detunings, `modes` are the names of modes of coupled equations.
    """
    stated: list[tuple[sp.Expr, sp.Expr]] = []
    values: list[tuple[sp.Symbol, sp.Expr]] = []
    frequencies: list[tuple[int, sp.Expr]] = []
    detunings: list[Detuning] = []
    shifted: list[tuple[int, sp.Expr]] = []
    for key, value in given:
        stated.append((key, value))
        value = _replaced(value.subs(carried), values)
        if key in modes:
            shifted.append((modes[key], value))
            continue
        if key in unknowns:
            frequencies.append((unknowns.index(key), value))
            continue
        left = _replaced(key, values)
        symbol, solved = _solved(key, left, value, small, drives)
        values = [(s, v.subs(symbol, solved)) for s, v in values] + [(symbol, solved)]
        detunings.append(detuning_of(symbol, key, stated[-1][1].subs(carried), small, known))
    settled = tuple((k, _replaced(value, values)) for k, value in frequencies)
    named = tuple((a, _replaced(value, values)) for a, value in shifted)
    return Relations(tuple(stated), tuple(values), settled, tuple(detunings), named)


def _replaced(x: sp.Expr, values: Sequence[tuple[sp.Symbol, sp.Expr]]) -> sp.Expr:
    for symbol, value in values:
        x = x.subs(symbol, value)
    return x


def relation_pairs(given: Any) -> tuple[tuple[sp.Expr, sp.Expr], ...]:
    """Relations as (left side, value), from a mapping or a sequence of equations."""
    if isinstance(given, Mapping):
        pairs = list(given.items())
    else:
        pairs = []
        for relation in given:
            if not isinstance(relation, sp.Eq):
                raise ProblemError(
                    f"resonance {relation!r}: expected a mapping {{frequency: value}} or sympy.Eq(frequency, value)"
                )
            pairs.append((relation.lhs, relation.rhs))
    result = []
    for key, value in pairs:
        if isinstance(key, str) or isinstance(value, str):
            raise ProblemError(f"resonance {key!r}: {value!r} holds a string: use SymPy symbols")
        result.append((_expression(key), _expression(value)))
    return tuple(result)


def _expression(x: Any) -> sp.Expr:
    value = given_expression(x)
    if value is None:
        raise ProblemError(f"{x!r} in a resonance is a {type(x).__name__}: expected a SymPy expression or a number")
    return decimals(value)


def _solved(
    key: sp.Expr, left: sp.Expr, value: sp.Expr, small: sp.Symbol, drives: set[sp.Symbol]
) -> tuple[sp.Symbol, sp.Expr]:
    """(symbol to eliminate, its value): a drive frequency of the left side before any other symbol of it."""
    if isinstance(left, sp.Pow) and left.exp == 2 and left.base.is_Symbol:
        return left.base, sp.sqrt(value)
    candidates = sorted(left.free_symbols - value.free_symbols - {small}, key=lambda s: (s not in drives, str(s)))
    for symbol in candidates:
        slope = sp.diff(left, symbol)
        if slope.is_Rational:
            solved = sp.expand((value - (left - slope * symbol)) / slope)
            leading = solved.subs(small, 0)
            if leading.is_nonpositive:
                raise ResonanceError(
                    f"the relation {key} = {value} contradicts the others: at leading order {symbol} = {leading}"
                )
            return symbol, solved
    at_zero = sp.expand((left - value).subs(small, 0))
    if at_zero == 0:
        raise ResonanceError(f"the relation {key} = {value} holds already through the others: leave it out")
    raise ResonanceError(
        f"the relation {key} = {value} contradicts what is known: with the other relations it reads {left} = {value}, "
        f"which needs {at_zero} = 0. Remove one of them, or put on the left a frequency that can be eliminated"
    )


def detuning_of(
    symbol: sp.Symbol | None, key: sp.Expr, value: sp.Expr, small: sp.Symbol, known: set[sp.Symbol]
) -> Detuning:
    """The relation key = value solved for a symbol of its small part that enters it linearly.

    Symbols that the equations do not contain come first. Where there is none, the relation is solved for the eliminated
    symbol itself, whose value can then only be checked.
    """
    leading = value.subs(small, 0)
    weak = sp.expand(value - leading)
    candidates = weak.free_symbols - {small} - key.free_symbols - leading.free_symbols
    for s in sorted(candidates, key=lambda x: (x in known, str(x))):
        slope = sp.diff(value, s)
        if s not in slope.free_symbols:
            return Detuning(symbol, s, (key - value.subs(s, 0)) / slope)
    if symbol is not None and key == symbol**2:
        return Detuning(symbol, symbol, sp.sqrt(value))
    return Detuning(symbol, symbol, value)
