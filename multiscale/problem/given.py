"""What `Problem` is given, checked for what it is: kinds, counts, names. What it means is read elsewhere."""

from __future__ import annotations

import warnings
from collections.abc import Iterable, Mapping, Sequence
from operator import index
from typing import Any, SupportsIndex

import sympy as sp

from multiscale.errors import OrderingWarning, ProblemError
from multiscale.problem.reading import unsupported

__all__ = [
    "check_names",
    "check_read",
    "equations_given",
    "harmonics_given",
    "jets_of",
    "ordering_given",
    "read_statement",
    "small_given",
    "time_given",
    "unknowns_given",
    "warn_of_finite_detunings",
]


def jets_of(unknowns: Sequence[sp.Expr], time: sp.Symbol) -> dict[sp.Symbol, sp.Expr]:
    """{symbol that stands in for it: unknown or derivative}."""
    return {sp.Symbol(f"@{k}.{d}"): u.diff(time, d) if d else u for k, u in enumerate(unknowns) for d in (0, 1, 2)}


def read_statement(equations: Any, unknowns: Any) -> tuple[tuple[sp.Expr, ...], tuple[sp.Expr, ...], sp.Symbol]:
    """(equations as expressions, unknowns, time), checked for what they are but not for what they mean."""
    names = unknowns_given(unknowns)
    return equations_given(equations), names, time_given(names, None)


def unknowns_given(given: Any) -> tuple[sp.Expr, ...]:
    unknowns = tuple(given) if isinstance(given, Iterable) and not isinstance(given, str | sp.Basic) else (given,)
    for u in unknowns:
        if not isinstance(u, sp.core.function.AppliedUndef) or len(u.args) != 1:
            raise ProblemError(f"unknown {u!r} is not a function of time: write u = sympy.Function('u')(t) and pass u")
    if not unknowns:
        raise ProblemError("no unknowns were given: pass the functions of time to solve for")
    if len(set(unknowns)) != len(unknowns):
        raise ProblemError(f"the unknowns {unknowns} repeat: name each once")
    return unknowns


def time_given(unknowns: tuple[sp.Expr, ...], given: sp.Symbol | None) -> sp.Symbol:
    times = {u.args[0] for u in unknowns}
    if len(times) > 1 or not all(isinstance(x, sp.Symbol) for x in times):
        raise ProblemError(f"the unknowns {unknowns} must all be functions of one time symbol")
    time = times.pop()
    if given is not None and given != time:
        raise ProblemError(f"time={given}, but the unknowns are functions of {time}: use the same symbol")
    return time


def equations_given(given: Any) -> tuple[sp.Expr, ...]:
    if isinstance(given, str):
        raise ProblemError("the equations are a string: build them from SymPy symbols and functions")
    several = isinstance(given, Iterable) and not isinstance(given, sp.Basic)
    result = []
    for x in given if several else (given,):
        if isinstance(x, sp.Eq):
            x = x.lhs - x.rhs
        if not isinstance(x, sp.Expr):
            raise ProblemError(
                f"equation {x!r} of type {type(x).__name__}: expected a SymPy expression (meaning = 0) or an Eq"
            )
        if x.has(sp.nan, sp.oo, -sp.oo, sp.zoo):
            raise ProblemError(
                f"equation {x} contains an infinite or undefined number: every coefficient must be finite"
            )
        # `doit` carries out derivatives of products and the like that the user left unevaluated.
        result.append(x.doit().replace(_float_power, lambda p: p.base ** int(p.exp)))
    return tuple(result)


def _float_power(x: sp.Expr) -> bool:
    """u**3.0, which means u**3."""
    return isinstance(x, sp.Pow) and isinstance(x.exp, sp.Float) and float(x.exp).is_integer()


def check_names(symbols: set[sp.Symbol], unknowns: tuple[sp.Expr, ...]) -> None:
    by_name: dict[str, sp.Symbol] = {}
    for s in sorted(symbols, key=lambda x: (str(x.name), str(x.assumptions0))):
        if by_name.setdefault(s.name, s) != s:
            raise ProblemError(
                f"two different symbols are both called {s.name!r}: rename one, or give both the same assumptions"
            )
        if s.name.startswith("@"):
            raise ProblemError(f"the symbol {s.name!r} begins with '@', which the library keeps for itself: rename it")
        if s.is_real is False:
            raise ProblemError(f"the symbol {s} is assumed not to be real: parameters and time are real")
    for u in unknowns:
        if u.func.__name__ in by_name:
            raise ProblemError(f"the unknown {u} and a symbol are both called {u.func.__name__!r}: rename one")


def ordering_given(given: Mapping[sp.Expr, int], unknowns: tuple[sp.Expr, ...], time: sp.Symbol) -> dict[sp.Expr, int]:
    result = {}
    for key, order in given.items():
        if key not in unknowns and not (isinstance(key, sp.Symbol) and key != time):
            raise ProblemError(f"ordering has the key {key!r}: expected an unknown or a parameter of the equations")
        if isinstance(order, bool) or not isinstance(order, SupportsIndex) or index(order) < 0:
            raise ProblemError(f"ordering gives {key} the order {order!r}: expected an integer ≥ 0")
        result[key] = index(order)
    return result


def small_given(
    small: Any, ordering: Mapping[sp.Expr, int] | None, symbols: set[sp.Symbol], time: sp.Symbol
) -> sp.Symbol | None:
    if (small is None) == (ordering is None):
        which = "neither was" if small is None else "both were"
        raise ProblemError(
            f"exactly one of `small` and `ordering` is needed, {which} given: pass small=eps, or ordering={{u: 1, …}}"
        )
    if ordering is not None:
        if lost := [s for s in ordering if isinstance(s, sp.Symbol) and s not in symbols]:
            raise ProblemError(f"ordering names {lost[0]}, which does not appear in the equations")
        return None
    if not isinstance(small, sp.Symbol) or small == time:
        raise ProblemError(f"small={small!r}: expected the SymPy symbol of the small parameter")
    if small not in symbols:
        raise ProblemError(
            f"the small parameter {small} does not appear in the equations: multiply weak terms by it, or use ordering"
        )
    return small


def harmonics_given(given: Any) -> int | None:
    if given is not None and (isinstance(given, bool) or not isinstance(given, SupportsIndex) or index(given) < 1):
        raise ProblemError(f"harmonics is {given!r}: expected an integer ≥ 1, the highest harmonic to keep")
    return None if given is None else index(given)


def check_read(x: sp.Expr, unknowns: tuple[sp.Expr, ...], time: sp.Symbol) -> None:
    """Refuse what is left of unknowns and functions of time when every jet has its symbol."""
    own = {u.func for u in unknowns}
    if derivatives := [d for d in x.atoms(sp.Derivative) if d.expr.func in own]:
        term = min(derivatives, key=str).subs(jets_of(unknowns, time))
        reason = "only first and second time derivatives of the unknowns are accepted"
        raise unsupported(term, reason, "Rewrite the equations as a system of second order")
    functions = {f for f in x.atoms(sp.core.function.AppliedUndef) if time in f.args}
    if functions:
        f = min(functions, key=str)
        raise ProblemError(
            f"{f} depends on time but is not among the unknowns {unknowns}: add it, or make it a parameter"
        )


def warn_of_finite_detunings(
    equations: Iterable[sp.Expr],
    relations: Iterable[tuple[sp.Expr, sp.Expr]],
    small: sp.Symbol,
    ordering: Mapping[sp.Expr, int] | None,
) -> None:
    """A relation without ε whose value has a symbol of its own: most likely a detuning without its power of ε."""
    present = set().union(*(x.free_symbols for x in equations))
    for key, value in relations:
        strange = value.free_symbols - present - {small}
        carried = (ordering is None and small in value.free_symbols) or any(s in (ordering or {}) for s in strange)
        if strange and not carried:
            s = min(strange, key=str)
            remedy = f"{small}*{s}" if ordering is None else f"an order for {s} in `ordering`"
            warnings.warn(
                f"the relation {key} = {value} has no small part: it moves {key} away from resonance by a finite "
                f"amount; if {s} is a detuning, write {remedy}",
                OrderingWarning,
                stacklevel=4,
            )
