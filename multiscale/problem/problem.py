"""What the user states: equations of motion, unknowns, and where the small parameter stands."""

from __future__ import annotations

from collections.abc import Iterable, Mapping, Sequence
from functools import cached_property
from typing import Any

import sympy as sp

from multiscale.errors import ProblemError
from multiscale.problem.canonical import Canonical, canonical_form
from multiscale.problem.terms import Layout

__all__ = ["Problem"]


class Problem:
    """Equations of motion with weak nonlinearity, checked and ready to expand.

    Parameters
    ----------
    equations : Expr, Eq, or a sequence of them
        An expression means "= 0". Each equation describes one oscillator, u'' + ω²u + … = 0, where ω² is any positive
        expression; everything else must be polynomial in the unknowns and their first and second time derivatives, and
        small. Any consistent units.
    unknowns : applied function, or a sequence of them
        ``u(t)``, as many as there are equations, all of the same time symbol.
    small : Symbol, optional
        The small parameter ε, with its powers written in the equations.
    ordering : mapping, optional
        Instead of `small`: integer orders carried by unknowns and parameters, ``{u: 1, mu: 2}``. The small parameter is
        then made by the library as a bookkeeping symbol whose value is 1, and results are in the user's own unknowns.
    time : Symbol, optional
        Needed only to check that it is the one meant.

    Raises
    ------
    ProblemError
        Wrong counts, colliding names, no oscillation, a missing or superfluous small parameter.
    UnsupportedTermError
        A term outside this class; the message names it and what to write instead.

    Examples
    --------
    >>> import sympy as sp, multiscale as ms
    >>> t = sp.Symbol("t", real=True)
    >>> eps, w0 = sp.symbols("epsilon omega_0", positive=True)
    >>> u = sp.Function("u")(t)
    >>> problem = ms.Problem(u.diff(t, 2) + w0**2*u + eps*u**3, u, small=eps)
    >>> problem.natural_frequencies
    (omega_0,)
    """

    def __init__(
        self,
        equations: sp.Expr | sp.Eq | Sequence[sp.Expr | sp.Eq],
        unknowns: sp.Expr | Sequence[sp.Expr],
        *,
        small: sp.Symbol | None = None,
        ordering: Mapping[sp.Expr, int] | None = None,
        time: sp.Symbol | None = None,
    ) -> None:
        self.unknowns: tuple[sp.Expr, ...] = _unknowns(unknowns)
        self.time: sp.Symbol = _time(self.unknowns, time)
        self.equations: tuple[sp.Expr, ...] = _equations(equations)
        if len(self.equations) != len(self.unknowns):
            raise ProblemError(
                f"{len(self.equations)} equations for {len(self.unknowns)} unknowns: as many of each are needed"
            )
        _check_names(self.equations, self.unknowns)
        self.ordering: dict[sp.Expr, int] | None = (
            _ordering(ordering, self.unknowns, self.time) if ordering is not None else None
        )
        self._given_small = _small(small, self.ordering, self.equations, self.time)
        self.canonical: Canonical = self._canonical()

    @cached_property
    def small(self) -> sp.Symbol:
        """The small parameter; with `ordering`, the library's bookkeeping symbol."""
        if self._given_small is not None:
            return self._given_small
        taken = {s.name for s in self._symbols} | {u.func.__name__ for u in self.unknowns}
        name = "epsilon"
        while name in taken:
            name += "_u"
        return sp.Symbol(name, positive=True)

    @property
    def _symbols(self) -> set[sp.Symbol]:
        return set().union(*(x.free_symbols for x in self.equations)) - {self.time}

    @cached_property
    def parameters(self) -> tuple[sp.Symbol, ...]:
        """Every symbol of the equations but time and the small parameter, sorted by name."""
        return tuple(sorted(self._symbols - {self._given_small}, key=lambda s: str(s.name)))

    @property
    def natural_frequencies(self) -> tuple[sp.Expr, ...]:
        """ω of each unknown, in the user's symbols."""
        return self.canonical.frequencies

    def _canonical(self) -> Canonical:
        jets = {sp.Symbol(f"@{k}.{d}"): (k, d) for k in range(len(self.unknowns)) for d in (0, 1, 2)}
        shown = _jets(self.unknowns, self.time)
        hidden = self._hidden()
        for x, given in zip(hidden, self.equations, strict=True):
            self._check_hidden(x, given)
        for s, u in zip((s for s, (_, d) in jets.items() if d == 0), self.unknowns, strict=True):
            if not any(x.free_symbols & {j for j, (k, _) in jets.items() if k == jets[s][0]} for x in hidden):
                raise ProblemError(f"the unknown {u} does not appear in the equations")
        orders = dict(self.ordering or {})
        unknown_orders = tuple(orders.pop(u, 0) for u in self.unknowns)
        layout = Layout(jets, self._given_small, orders, unknown_orders)
        return canonical_form(hidden, layout, shown, list(self.unknowns))

    def _hidden(self) -> list[sp.Expr]:
        """The equations with a symbol for each unknown and derivative."""
        names = {x: s for s, x in _jets(self.unknowns, self.time).items()}
        derivatives = {x: s for x, s in names.items() if x.is_Derivative}
        return [x.xreplace(derivatives).xreplace(names) for x in self.equations]

    def _check_hidden(self, x: sp.Expr, given: sp.Expr) -> None:
        from multiscale.problem.reading import unsupported

        if derivatives := x.atoms(sp.Derivative):
            term = min(derivatives, key=str)
            raise unsupported(
                self._shown(term),
                "only first and second time derivatives of the unknowns are accepted",
                "Rewrite the equations as a system of second order",
            )
        functions = {f for f in x.atoms(sp.core.function.AppliedUndef) if f.free_symbols & {self.time}}
        if functions:
            f = min(functions, key=str)
            raise ProblemError(
                f"{f} depends on time but is not among the unknowns {self.unknowns}: add it, or make it a parameter"
            )
        if self.time in x.free_symbols:
            terms = [a for a in sp.Add.make_args(x) if self.time in a.free_symbols]
            raise unsupported(
                self._shown(terms[0]), f"it depends on {self.time} explicitly", "State an autonomous system"
            )

    def _shown(self, x: sp.Expr) -> sp.Expr:
        return x.subs(_jets(self.unknowns, self.time))

    def _key(self) -> tuple[Any, ...]:
        ordering = None if self.ordering is None else tuple(sorted(self.ordering.items(), key=str))
        return (self.equations, self.unknowns, self._given_small, ordering)

    def __eq__(self, other: object) -> bool:
        return isinstance(other, Problem) and self._key() == other._key()

    def __hash__(self) -> int:
        return hash(self._key())

    def __reduce__(self) -> tuple[Any, ...]:
        # Undefined functions do not pickle with every SymPy, so they travel by name and the jets stand in for them.
        functions = tuple((u.func.__name__, dict(getattr(u.func, "_kwargs", {}))) for u in self.unknowns)
        options = {"small": self._given_small, "time": self.time}
        if self.ordering is not None:
            indexed = {self.unknowns.index(x) if x in self.unknowns else x: q for x, q in self.ordering.items()}
            options["ordering"] = indexed
        return _rebuilt, (self._hidden(), functions, options)

    def __repr__(self) -> str:
        names = ", ".join(str(u) for u in self.unknowns)
        text = f"Problem in {names}: " + "; ".join(f"{x} = 0" for x in self.equations)
        return text if len(text) < 200 else text[:190] + " …"

    def _repr_latex_(self) -> str:
        rows = r" \\ ".join(f"{sp.latex(x)} &= 0" for x in self.equations)
        return rf"$\displaystyle \begin{{aligned}}{rows}\end{{aligned}}$"


def _jets(unknowns: Sequence[sp.Expr], time: sp.Symbol) -> dict[sp.Symbol, sp.Expr]:
    """{symbol that stands in for it: unknown or derivative}."""
    return {sp.Symbol(f"@{k}.{d}"): u.diff(time, d) if d else u for k, u in enumerate(unknowns) for d in (0, 1, 2)}


def _rebuilt(
    hidden: list[sp.Expr], functions: Sequence[tuple[str, dict[str, Any]]], options: dict[str, Any]
) -> Problem:
    unknowns = [sp.Function(name, **assumptions)(options["time"]) for name, assumptions in functions]
    if "ordering" in options:
        named = {unknowns[x] if isinstance(x, int) else x: q for x, q in options["ordering"].items()}
        options = options | {"ordering": named}
    jets = _jets(unknowns, options["time"])
    return Problem([x.xreplace(jets) for x in hidden], unknowns, **options)


def _unknowns(given: Any) -> tuple[sp.Expr, ...]:
    unknowns = tuple(given) if isinstance(given, Iterable) and not isinstance(given, str | sp.Basic) else (given,)
    for u in unknowns:
        if not isinstance(u, sp.core.function.AppliedUndef) or len(u.args) != 1:
            raise ProblemError(f"unknown {u!r} is not a function of time: write u = sympy.Function('u')(t) and pass u")
    if not unknowns:
        raise ProblemError("no unknowns were given: pass the functions of time to solve for")
    if len(set(unknowns)) != len(unknowns):
        raise ProblemError(f"the unknowns {unknowns} repeat: name each once")
    return unknowns


def _time(unknowns: tuple[sp.Expr, ...], given: sp.Symbol | None) -> sp.Symbol:
    times = {u.args[0] for u in unknowns}
    if len(times) > 1 or not all(isinstance(x, sp.Symbol) for x in times):
        raise ProblemError(f"the unknowns {unknowns} must all be functions of one time symbol")
    time = times.pop()
    if given is not None and given != time:
        raise ProblemError(f"time={given}, but the unknowns are functions of {time}: use the same symbol")
    return time


def _equations(given: Any) -> tuple[sp.Expr, ...]:
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
        result.append(x.doit())
    return tuple(result)


def _check_names(equations: tuple[sp.Expr, ...], unknowns: tuple[sp.Expr, ...]) -> None:
    by_name: dict[str, sp.Symbol] = {}
    for s in sorted(set().union(*(x.free_symbols for x in equations)) | {u.args[0] for u in unknowns}, key=str):
        if by_name.setdefault(s.name, s) != s:
            raise ProblemError(
                f"two different symbols are both called {s.name!r}: rename one, or give both the same assumptions"
            )
    for u in unknowns:
        if u.func.__name__ in by_name:
            raise ProblemError(f"the unknown {u} and a symbol are both called {u.func.__name__!r}: rename one")


def _ordering(given: Mapping[sp.Expr, int], unknowns: tuple[sp.Expr, ...], time: sp.Symbol) -> dict[sp.Expr, int]:
    result = {}
    for key, order in given.items():
        if key not in unknowns and not (isinstance(key, sp.Symbol) and key != time):
            raise ProblemError(f"ordering has the key {key!r}: expected an unknown or a parameter of the equations")
        if isinstance(order, bool) or int(order) != order or order < 0:
            raise ProblemError(f"ordering gives {key} the order {order!r}: expected an integer ≥ 0")
        result[key] = int(order)
    return result


def _small(
    small: Any, ordering: Mapping[sp.Expr, int] | None, equations: tuple[sp.Expr, ...], time: sp.Symbol
) -> sp.Symbol | None:
    symbols = set().union(*(x.free_symbols for x in equations))
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
