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
ROUNDING = 1e-12
"""By how much a position given by floats may be off, relative to itself."""


def rest_positions(
    given: Any, unknowns: Sequence[sp.Expr], time: sp.Symbol, small: sp.Symbol | None
) -> dict[sp.Expr, sp.Expr]:
    """{unknown: position of rest}, checked; floats are left in them."""
    if not isinstance(given, Mapping):
        raise ProblemError(f"about={given!r}: expected a mapping {{unknown: position of rest}}")
    result = {}
    for u, value in given.items():
        position = given_expression(value)
        if u not in unknowns:
            raise ProblemError(f"about has the key {u!r}: expected one of the unknowns {unknowns}")
        if position is None:
            raise ProblemError(f"about gives {u} the position {value!r}: expected a SymPy expression or a number")
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
    `stated` are the relations that the user declares, whose symbols are not to be eliminated. Floats stand for the
    decimals they print as, those of a position in double precision; a position that has floats is right to their digits
    only, and what force they leave is dropped.
    """
    rounded = any(x.has(sp.Float) for x in about.values())
    about = {u: decimals(x.xreplace({f: sp.Float(f, 15) for f in x.atoms(sp.Float)})) for u, x in about.items()}
    hidden = [decimals(x) for x in hidden]
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
        if static != 0 and not static.equals(0) and not (rounded and _is_rounding(force, equation, shift, rest)):
            if not free:
                raise ProblemError(
                    f"about={about} is no state of rest: the force {sp.factor(static)} is left there. Give the exact "
                    "position, or a new symbol for it"
                )
            relations.append(_relation(static, _static(given, rest, time).free_symbols, fixed, about))
            force = force.subs(*relations[-1])
            static = sp.cancel(sp.together(force))
        # What is left is zero, but roots and functions may hide that from polynomial arithmetic.
        left = equation if static == 0 and not _has_roots(force) else equation - force
        balanced.append(_without_constant(left, rest, time) if any(map(_has_roots, about.values())) else left)
    return balanced, relations


def _static(equation: sp.Expr, rest: Mapping[sp.Symbol, int], time: sp.Symbol) -> sp.Expr:
    """The constant force at rest; drives are left out."""
    value = equation.subs(rest)
    if value.has(sp.zoo, sp.nan):
        return sp.Integer(0)
    return sp.Add(*(x for x in sp.Add.make_args(sp.expand(value)) if time not in x.free_symbols))


def _without_constant(equation: sp.Expr, rest: Mapping[sp.Symbol, int], time: sp.Symbol) -> sp.Expr:
    """An equation whose constant force is known to vanish, with its powers of the deviation multiplied out.

    Roots in the position are leaves of their own where products are read, and would not cancel there.
    """
    if not equation.is_polynomial(*rest):
        return equation
    kept = {time, *rest}
    return sp.Add(*(x for x in sp.Add.make_args(sp.expand(equation)) if x.free_symbols & kept))


def _is_rounding(
    force: sp.Expr, equation: sp.Expr, shift: Mapping[sp.Symbol, sp.Expr], rest: Mapping[sp.Symbol, int]
) -> bool:
    """Whether the force left is no more than what the rounding of the positions makes, by the stiffness there."""
    if force.free_symbols:
        return False
    sizes = [abs((sp.diff(equation, s).subs(rest) * (x - s)).evalf(30)) for s, x in shift.items()]
    return all(x.is_number for x in sizes) and bool(abs(force.evalf(30)) <= ROUNDING * sp.Add(*sizes))


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
