"""What the user stated, as the certificate reads it: equations, orders, and relations solved for one symbol each.

    Ω = ω + εσ, ω² = Ω² + εδ, 2Ω_1 + Ω_2 = ω + εσ     a symbol of the left side has the value that follows
    u_2: ω_2 = 2ω_1 + εσ                              the stiffness of u_2 is put equal to (2ω_1 + εσ)²

A residual is compared with max |∂R/∂x| ω^d ε^q over the unknowns and derivatives x in its equation, d the order of the
derivative, ω the largest natural frequency and q the order that the unknown carries, so that units, and powers of ε
common to a whole equation, as `ordering` makes them, divide out.
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property

import sympy as sp

from multiscale.errors import EvaluationError
from multiscale.problem import Problem

__all__ = ["Statement", "stated"]


@dataclass(frozen=True)
class Statement:
    """Equations (= 0) in the unknowns and their derivatives; `orders` are powers of ε carried by unknowns and symbols,
    `relations` give eliminated symbols in terms of others, in order."""

    equations: tuple[sp.Expr, ...]
    unknowns: tuple[sp.Expr, ...]
    time: sp.Symbol
    small: sp.Symbol
    orders: tuple[tuple[sp.Expr, int], ...] = ()
    relations: tuple[tuple[sp.Symbol, sp.Expr], ...] = ()

    @cached_property
    def jets(self) -> tuple[tuple[int, int, sp.Expr], ...]:
        """(unknown, order of its derivative, how it stands in the equations)."""
        found = [(k, 0, u) for k, u in enumerate(self.unknowns)]
        derivatives = set().union(*(x.atoms(sp.Derivative) for x in self.equations))
        for d in sorted(derivatives, key=str):
            if d.expr in self.unknowns:
                found.append((self.unknowns.index(d.expr), d.derivative_count, d))
        return tuple(found)

    @cached_property
    def depth(self) -> int:
        """The highest derivative."""
        return max(d for _, d, _ in self.jets)

    @cached_property
    def slopes(self) -> tuple[tuple[tuple[int, sp.Expr], ...], ...]:
        """For each equation (order of the derivative, ∂R/∂x · ε^q) for all jets x in it."""
        orders = dict(self.orders)
        return tuple(
            tuple(
                (d, sp.diff(r, x) * self.small ** orders.get(self.unknowns[k], 0)) for k, d, x in self.jets if r.has(x)
            )
            for r in self.equations
        )

    @cached_property
    def parameters(self) -> tuple[sp.Symbol, ...]:
        """The symbols that may be chosen, by name."""
        expressions = (*self.equations, *(value for _, value in self.relations))
        found = set().union(*(x.free_symbols for x in expressions))
        gone = {self.time, self.small, *(s for s, _ in self.relations)}
        return tuple(sorted(found - gone, key=lambda s: str(s.name)))


def stated(problem: Problem) -> Statement:
    """The statement of a problem; floats stand for the decimals they print as."""
    equations = [_decimals(x) for x in problem.equations]
    relations: list[tuple[sp.Symbol, sp.Expr]] = []
    modes = problem.mode_frequencies
    for key, value in problem.resonances:
        if key in modes:
            raise EvaluationError(
                f"the relation {key} = {value} changes the stiffness along a mode of coupled equations, which the "
                "certificate cannot redo: state the equations in modal coordinates, with a symbol for that frequency"
            )
        value = _decimals(value.subs(modes))
        if key in problem.unknowns:
            equations = _with_frequency(equations, problem, key, value)
            continue
        for symbol, known in relations:
            key, value = key.subs(symbol, known), value.subs(symbol, known)
        symbol, solved = _solved(key, value, problem)
        relations = [(s, x.subs(symbol, solved)) for s, x in relations]
        relations.append((symbol, solved))
    orders = tuple((problem.ordering or {}).items())
    return Statement(tuple(equations), problem.unknowns, problem.time, problem.small, orders, tuple(relations))


def _decimals(x: sp.Expr) -> sp.Expr:
    return x.xreplace({f: sp.Rational(repr(float(f)) if f._prec <= 53 else str(f)) for f in x.atoms(sp.Float)})


def _solved(key: sp.Expr, value: sp.Expr, problem: Problem) -> tuple[sp.Symbol, sp.Expr]:
    """A symbol of the left side that the right side does not contain, and its value."""
    candidates = key.free_symbols - value.free_symbols - {problem.small, problem.time}
    for symbol in sorted(candidates, key=lambda s: (s in problem.parameters, str(s.name))):
        slope = key.diff(symbol)
        if symbol not in slope.free_symbols:
            return symbol, (value - key.subs(symbol, 0)) / slope
        if key == symbol**2:
            return symbol, sp.sqrt(value)
    raise EvaluationError(f"the relation {key} = {value} was not solved for a symbol of its left side")


def _with_frequency(equations: list[sp.Expr], problem: Problem, unknown: sp.Expr, value: sp.Expr) -> list[sp.Expr]:
    """The equation of an oscillator with its leading stiffness put equal to mass times the square of `value`."""
    small, acceleration = problem.small, unknown.diff(problem.time, 2)
    rest = {u.diff(problem.time, d): 0 for u in problem.unknowns for d in (2, 1)}
    rest |= dict.fromkeys(problem.unknowns, 0)

    def leading(equation: sp.Expr, x: sp.Expr) -> sp.Expr:
        slope = sp.diff(equation, x)
        derivatives = {y: z for y, z in rest.items() if y.is_Derivative}
        return slope.subs(derivatives).subs(rest).subs(dict.fromkeys(_ordered(problem), 0)).subs(small, 0)

    masses = [leading(x, acceleration) for x in equations]
    k = next(k for k, mass in enumerate(masses) if mass != 0)
    changed = masses[k] * value**2 - leading(equations[k], unknown)
    return [x + changed * unknown if j == k else x for j, x in enumerate(equations)]


def _ordered(problem: Problem) -> list[sp.Symbol]:
    return [s for s, q in (problem.ordering or {}).items() if isinstance(s, sp.Symbol) and q > 0]
