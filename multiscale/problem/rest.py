"""Unknowns measured from a state of rest that is not zero: u → u_s + u.

    f(u_s) = 0   eliminates a parameter where u_s is a symbol:   k u_s = V²/(g − u_s)²   gives   V² = k u_s (g − u_s)²

Solved for a load, the equilibrium is rational although the position as a function of the load is not, so that every
coefficient stays exact. The relation joins those that the user declares.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from typing import Any

import sympy as sp

from multiscale.errors import ProblemError
from multiscale.problem.reading import decimals, given_expression

__all__ = ["about_rest", "rest_positions"]

Pair = tuple[sp.Expr, sp.Expr]


def rest_positions(
    given: Any, unknowns: Sequence[sp.Expr], time: sp.Symbol, small: sp.Symbol | None
) -> dict[sp.Expr, sp.Expr]:
    """{unknown: position of rest}, checked."""
    if not isinstance(given, Mapping):
        raise ProblemError(f"about={given!r}: expected a mapping {{unknown: position of rest}}")
    result = {}
    for u, value in given.items():
        position = given_expression(value)
        if u not in unknowns:
            raise ProblemError(f"about has the key {u!r}: expected one of the unknowns {unknowns}")
        if position is None:
            raise ProblemError(f"about gives {u} the position {value!r}: expected a SymPy expression or a number")
        position = decimals(position)
        if time in position.free_symbols or small in position.free_symbols:
            raise ProblemError(f"about gives {u} the position {position}: a state of rest is constant")
        result[u] = position
    return result


def about_rest(
    hidden: Sequence[sp.Expr],
    jets: Mapping[sp.Symbol, sp.Expr],
    about: Mapping[sp.Expr, sp.Expr],
    vanishing: set[sp.Symbol],
    stated: Sequence[Pair],
    time: sp.Symbol,
) -> tuple[list[sp.Expr], list[Pair]]:
    """(equations in the deviation from rest, the relations between parameters that make it a state of rest).

    `hidden` are the equations in jets, `jets` what these stand for; `vanishing` symbols are zero at leading order,
    `stated` are the relations that the user declares, whose symbols are not to be eliminated.
    """
    shift = {s: s + about[x] for s, x in jets.items() if x in about}
    known = set().union(*(x.free_symbols for x in hidden))
    placed = set().union(*(x.free_symbols for x in about.values()))
    free = all(not x.free_symbols or x.free_symbols - known for x in about.values())
    rest = dict.fromkeys([*jets, *vanishing], 0)
    shifted = [x.subs(shift, simultaneous=True) for x in hidden]
    fixed = placed.union(*(x.free_symbols for pair in stated for x in pair))
    relations: list[Pair] = []
    balanced = []
    for given, equation in zip(hidden, shifted, strict=True):
        force = _static(equation, rest, time)
        for key, value in (*stated, *relations):
            force = force.subs(key, value.subs(rest))
        static = sp.cancel(sp.together(force))
        if static != 0 and not static.equals(0):
            if not free:
                raise ProblemError(
                    f"about={about} is no state of rest: the force {sp.factor(static)} is left there. Give the exact "
                    "position, or a new symbol for it"
                )
            relations.append(_relation(static, _static(given, rest, time).free_symbols, fixed, about))
            force = force.subs(*relations[-1])
            static = sp.cancel(sp.together(force))
        # What is left is zero, but roots and functions may hide that from polynomial arithmetic.
        balanced.append(equation if static == 0 and not _has_roots(force) else equation - force)
    return balanced, relations


def _static(equation: sp.Expr, rest: Mapping[sp.Symbol, int], time: sp.Symbol) -> sp.Expr:
    """The constant force at rest; drives are left out."""
    value = equation.subs(rest)
    if value.has(sp.zoo, sp.nan):
        return sp.Integer(0)
    return sp.Add(*(x for x in sp.Add.make_args(sp.expand(value)) if time not in x.free_symbols))


def _has_roots(x: sp.Expr) -> bool:
    return any(not p.exp.is_Integer for p in x.atoms(sp.Pow)) or bool(x.atoms(sp.Function))


def _relation(static: sp.Expr, loads: set[sp.Symbol], fixed: set[sp.Symbol], about: Mapping[sp.Expr, sp.Expr]) -> Pair:
    """(s, value) or (s**2, value) from static = 0, s a load (present at the unshifted zero) if one can be taken."""
    above = sp.numer(static)
    candidates = []
    for s in sorted(above.free_symbols - fixed, key=lambda x: str(x.name)):
        for power in (1, 2):
            slope = sp.diff(above, s, power) / power
            if slope != 0 and s not in slope.free_symbols and (power == 1 or sp.diff(above, s).subs(s, 0) == 0):
                value = sp.factor(-above.subs(s, 0) / slope)
                candidates.append(((s not in loads, power), s**power, value))
    if not candidates:
        raise ProblemError(
            f"about={about}: at that position the force {static} is left, and no parameter enters it linearly or by "
            "its square, so that none can be eliminated. Put a symbol in place of a number of the load"
        )
    _, key, value = min(candidates, key=lambda c: c[0])
    if value.is_nonpositive:
        raise ProblemError(f"about={about}: rest there needs {key} = {value}, which is not positive")
    return key, value
