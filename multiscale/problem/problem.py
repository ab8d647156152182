"""What the user states: equations of motion, unknowns, and where the small parameter stands."""

from __future__ import annotations

import warnings
from collections.abc import Iterable, Mapping, Sequence
from functools import cached_property
from operator import index
from re import fullmatch
from typing import Any, SupportsIndex

import sympy as sp

from multiscale.errors import OrderingWarning, ProblemError
from multiscale.problem.canonical import Canonical, in_double
from multiscale.problem.coupled import form_of
from multiscale.problem.matrices import equations_of, size_of
from multiscale.problem.modes import Choice, modes_given, references_given
from multiscale.problem.preparation import Prepared, prepare
from multiscale.problem.reading import unsupported
from multiscale.problem.relations import Detuning, relation_pairs
from multiscale.problem.terms import Layout

__all__ = ["Problem"]


class Problem:
    """Equations of motion with weak nonlinearity, checked and ready to expand.

    Parameters
    ----------
    equations : Expr, Eq, or a sequence of them
        An expression means "= 0". At leading order the equations are linear with constant coefficients: one oscillator
        each, u'' + ω²u + … = 0, or coupled, gyroscopic, damped and of first or second order as they come, with at least
        one motion that neither grows nor decays. Everything else must be polynomial in the unknowns and their first and
        second time derivatives, and small. Any consistent units.
    unknowns : applied function, or a sequence of them
        ``u(t)``, as many as there are equations, all of the same time symbol.
    small : Symbol, optional
        The small parameter ε, with its powers written in the equations.
    ordering : mapping, optional
        Instead of `small`: integer orders carried by unknowns and parameters, ``{u: 1, mu: 2}``. The small parameter is
        then made by the library as a bookkeeping symbol whose value is 1, and results are in the user's own unknowns.
    resonances : mapping, or sequence of Eq, optional
        Relations with detuning, ``{Omega: w0 + eps*sigma}``; the left side is eliminated. It may be a symbol,
        its square, a combination (``2*Omega1 + Omega2``) or an unknown, which means its natural frequency. For coupled
        equations the symbols ``omega_1``, ``omega_2``, … mean the natural frequencies of the modes, on either side.
        Frequencies in exact rational ratio are resonant without a relation.
    time : Symbol, optional
        Needed only to check that it is the one meant.
    modes : sequence of int, optional
        The modes to carry, numbered from 0 by increasing frequency; default all. The others are taken to be at rest but
        for what the carried ones force on them; modes that decay at leading order are never carried.
    references : mapping, optional
        ``{mode: unknown}``: the coordinate in which the amplitude of a mode is measured, if not the first unknown that
        takes part in it.

    Raises
    ------
    ProblemError
        Wrong counts, colliding names, no oscillation, a missing or superfluous small parameter.
    UnsupportedTermError
        A term outside this class; the message names it and what to write instead.
    ResonanceError
        Relations that contradict each other; a drive at leading order that meets a natural frequency.

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
        resonances: Mapping[sp.Expr, sp.Expr] | Sequence[sp.Eq] = (),
        time: sp.Symbol | None = None,
        modes: Sequence[int] | None = None,
        references: Mapping[int, sp.Expr] | None = None,
    ) -> None:
        self.unknowns: tuple[sp.Expr, ...] = _unknowns(unknowns)
        self.time: sp.Symbol = _time(self.unknowns, time)
        self.equations: tuple[sp.Expr, ...] = _equations(equations)
        if len(self.equations) != len(self.unknowns):
            raise ProblemError(
                f"{len(self.equations)} equations for {len(self.unknowns)} unknowns: as many of each are needed"
            )
        self.ordering: dict[sp.Expr, int] | None = (
            _ordering(ordering, self.unknowns, self.time) if ordering is not None else None
        )
        self.resonances: tuple[tuple[sp.Expr, sp.Expr], ...] = relation_pairs(resonances)
        self.modes: tuple[int, ...] | None = modes_given(modes)
        self.references: dict[int, sp.Expr] = references_given(references, self.unknowns)
        beside = [x for x in (*(self.ordering or {}), small) if isinstance(x, sp.Symbol)]
        _check_names({*self._symbols, self.time, *beside}, self.unknowns)
        self._given_small = _small(small, self.ordering, self._symbols, self.time)
        self._canonical: dict[int | None, Canonical] = {}
        self.canonical(1)
        self._warn_of_finite_detunings()

    @classmethod
    def from_matrices(
        cls,
        M: Any = None,
        C: Any = None,
        G: Any = None,
        K: Any = None,
        *,
        quadratic: Any = None,
        cubic: Any = None,
        drive: Sequence[sp.Expr] | None = None,
        small: sp.Symbol | None = None,
        unknowns: Sequence[sp.Expr] | None = None,
        orders: Mapping[str, int] | None = None,
        **options: Any,
    ) -> Problem:
        """The problem M u'' + (ε^p C + G) u' + K u + ε^q Q(u, u) + ε^r T(u, u, u) = ε^s drive.

        Parameters
        ----------
        M, C, G, K : matrices (SymPy, NumPy or nested sequences)
            Inertia, weak damping, gyroscopic (or other leading) damping, stiffness, of shape (N, N); K need not be
            symmetric. Without M the equations are of first order, and C stands at leading order.
        quadratic, cubic : mapping or array, optional
            Coefficients Q_ijk and T_ijkl as ``{(i, j, k): c}``, ``{(i, j, k, l): c}`` with the equation first and every
            product of unknowns written once or as often as wished (entries add up), or arrays (N, N, N), (N, N, N, N).
        drive : sequence of N expressions, optional
            Forces on the right-hand side, such as ``f*cos(Omega*t)``.
        small : Symbol, optional
            Default: a positive ``epsilon``.
        unknowns : sequence of applied functions, optional
            Default: ``u_1(t)``, ``u_2(t)``, …
        orders : mapping, optional
            The powers of `small`, by default ``{"C": 2, "quadratic": 1, "cubic": 2, "drive": 2}``: amplitudes of order
            ε, damping of the size of the cubic terms. ``{"C": 0}`` puts damping at leading order.
        **options
            `resonances`, `modes`, `references` as for `Problem`.

        Raises
        ------
        ProblemError
            Shapes or indices that do not fit.

        Examples
        --------
        >>> import multiscale as ms
        >>> problem = ms.Problem.from_matrices([[1, 0], [0, 1]], K=[[3, -1], [-1, 3]], cubic={(0, 0, 0, 0): 1})
        >>> problem.natural_frequencies
        (sqrt(2), 2)
        """
        matrices = {"M": M, "C": C, "G": G, "K": K}
        time = sp.Symbol("t", real=True)
        if unknowns is None:
            unknowns = [sp.Function(f"u_{k + 1}")(time) for k in range(size_of(matrices))]
        else:
            unknowns = _unknowns(unknowns)
            time = _time(unknowns, None)
        small = sp.Symbol("epsilon", positive=True) if small is None else small
        tensors = {"quadratic": quadratic, "cubic": cubic}
        return cls(
            equations_of(matrices, tensors, drive, unknowns, time, small, orders), unknowns, small=small, **options
        )

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

    @cached_property
    def _symbols(self) -> set[sp.Symbol]:
        """Every symbol of equations and relations but time."""
        stated = [x for pair in self.resonances for x in pair if x not in self.unknowns]
        return set().union(*(x.free_symbols for x in (*self.equations, *stated))) - {self.time}

    @cached_property
    def parameters(self) -> tuple[sp.Symbol, ...]:
        """The symbols of the problem but time and the small parameter, after elimination by relations, by name."""
        gone = {symbol for symbol, _ in self._prepared(1).relations.values}
        form = self.canonical(1)
        named = [value for _, value in form.meanings] + list(form.frequencies)
        named += [x for d in form.drives for x in (d.angle, d.reduced_frequency)]
        used = set().union(*(x.free_symbols for x in named))
        # What only the natural frequency of an unknown contained is gone where a relation gives that frequency.
        natural = [d.formula.free_symbols for d in form.detunings if d.eliminated is None]
        gone |= set().union(*natural) - used - {self.small}
        if form.operator is not None:
            gone |= self._mode_symbols.keys()
        return tuple(sorted(self._symbols - {self._given_small} - gone, key=lambda s: str(s.name)))

    @property
    def names(self) -> frozenset[str]:
        """The names that the user has taken."""
        return frozenset(s.name for s in (*self._symbols, self.time, self.small)) | {
            u.func.__name__ for u in self.unknowns
        }

    @property
    def natural_frequencies(self) -> tuple[sp.Expr, ...]:
        """ω of each mode at leading order, in the user's symbols: of each unknown where the unknowns are uncoupled."""
        return tuple(map(in_double, self.canonical(1).frequencies))

    @property
    def frequency_names(self) -> tuple[str, ...]:
        """What the natural frequencies are called in messages: omega_u for an oscillator u, omega_1, … for modes."""
        form = self.canonical(1)
        if form.operator is None:
            return tuple(f"omega_{u.func.__name__}" for u in self.unknowns)
        return tuple(f"omega_{a + 1}" for a in range(len(form.frequencies)))

    @property
    def drives(self) -> tuple[sp.Expr, ...]:
        """The independent frequencies of the drives, in the user's symbols."""
        return tuple(d.frequency for d in self.canonical(1).drives if d.frequency != 0)

    @property
    def detunings(self) -> tuple[Detuning, ...]:
        """How each detuning follows from the frequency that its relation eliminates."""
        return self.canonical(1).detunings

    def with_relations(self, x: sp.Expr) -> sp.Expr:
        """An expression with the symbols that relations eliminate replaced by their values."""
        for symbol, value in self._prepared(1).relations.values:
            x = x.subs(symbol, value)
        named = self._mode_symbols
        if named and x.free_symbols & named.keys():
            frequencies = self.canonical(1).named_frequencies
            x = x.subs({s: frequencies[a] for s, a in named.items() if a < len(frequencies)})
        return x

    @property
    def mode_names(self) -> frozenset[sp.Symbol]:
        """The symbols of relations that name natural frequencies of coupled equations: omega_1, omega_2, …"""
        return frozenset(self._mode_symbols) if self.canonical(1).operator is not None else frozenset()

    @cached_property
    def _mode_symbols(self) -> dict[sp.Symbol, int]:
        """{omega_1: 0, …} for the symbols of relations that name natural frequencies of coupled equations."""
        stated = {s for pair in self.resonances for x in pair if x not in self.unknowns for s in x.free_symbols}
        apart = stated - set().union(*(x.free_symbols for x in self.equations))
        return {s: int(m[1]) - 1 for s in apart if (m := fullmatch(r"omega_([1-9]\d*)", s.name))}

    def canonical(self, order: int) -> Canonical:
        """The canonical form for an expansion to the given order; most problems have one form for all orders."""
        if None in self._canonical:
            return self._canonical[None]
        if order not in self._canonical:
            prepared = self._prepared(order)
            shown = _jets(self.unknowns, self.time) | prepared.shown
            if self.ordering is not None:
                shown[self.small] = sp.Integer(1)
            form = form_of(prepared, self._layout, shown, list(self.unknowns), self._choice, self._mode_symbols)
            self._canonical[order if form.truncated else None] = form
            return form
        return self._canonical[order]

    def _warn_of_finite_detunings(self) -> None:
        """A relation without ε whose value has a symbol of its own: most likely a detuning without its power of ε."""
        present = set().union(*(x.free_symbols for x in self.equations))
        for key, value in self.resonances:
            strange = value.free_symbols - present - {self.small}
            carried = self._given_small in value.free_symbols or any(s in (self.ordering or {}) for s in strange)
            if strange and not carried:
                s = min(strange, key=str)
                remedy = f"{self.small}*{s}" if self.ordering is None else f"an order for {s} in `ordering`"
                warnings.warn(
                    f"the relation {key} = {value} has no small part: it moves {key} away from resonance by a finite "
                    f"amount; if {s} is a detuning, write {remedy}",
                    OrderingWarning,
                    stacklevel=3,
                )

    @property
    def _choice(self) -> Choice:
        return Choice(self.modes, tuple((a, self.unknowns.index(u)) for a, u in sorted(self.references.items())))

    @cached_property
    def _layout(self) -> Layout:
        jets = {sp.Symbol(f"@{k}.{d}"): (k, d) for k in range(len(self.unknowns)) for d in (0, 1, 2)}
        return Layout(jets, self.small, self.ordering is not None)

    def _prepared(self, order: int) -> Prepared:
        jets = self._layout.jets
        hidden = self._hidden()
        for x, given in zip(hidden, self.equations, strict=True):
            self._check_hidden(x, given)
        for k, u in enumerate(self.unknowns):
            if not any(x.free_symbols & {s for s, jet in jets.items() if jet[0] == k} for x in hidden):
                raise ProblemError(f"the unknown {u} does not appear in the equations")
        orders = dict(self.ordering or {})
        powers = {s: orders[u] for s, (k, _) in jets.items() if (u := self.unknowns[k]) in orders}
        powers |= {s: q for s, q in orders.items() if isinstance(s, sp.Symbol)}
        shown = _jets(self.unknowns, self.time)
        return prepare(
            hidden, self._layout, self.time, powers, self.resonances, self.unknowns, shown, order, self._mode_symbols
        )

    def _hidden(self) -> list[sp.Expr]:
        """The equations with a symbol for each unknown and derivative."""
        names = {x: s for s, x in _jets(self.unknowns, self.time).items()}
        derivatives = {x: s for x, s in names.items() if x.is_Derivative}
        return [x.xreplace(derivatives).xreplace(names) for x in self.equations]

    def _check_hidden(self, x: sp.Expr, given: sp.Expr) -> None:
        own = {u.func for u in self.unknowns}
        if derivatives := [d for d in x.atoms(sp.Derivative) if d.expr.func in own]:
            term = min(derivatives, key=str).subs(_jets(self.unknowns, self.time))
            reason = "only first and second time derivatives of the unknowns are accepted"
            raise unsupported(term, reason, "Rewrite the equations as a system of second order")
        functions = {f for f in x.atoms(sp.core.function.AppliedUndef) if self.time in f.args}
        if functions:
            f = min(functions, key=str)
            raise ProblemError(
                f"{f} depends on time but is not among the unknowns {self.unknowns}: add it, or make it a parameter"
            )

    def _key(self) -> tuple[Any, ...]:
        ordering = None if self.ordering is None else tuple(sorted(self.ordering.items(), key=str))
        references = tuple(sorted(self.references.items()))
        return (self.equations, self.unknowns, self._given_small, ordering, self.resonances, self.modes, references)

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
        if self.modes is not None:
            options["modes"] = self.modes
        if self.references:
            options["references"] = {a: self.unknowns.index(u) for a, u in self.references.items()}
        options["resonances"] = [(self.unknowns.index(x) if x in self.unknowns else x, y) for x, y in self.resonances]
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
    named = {unknowns[x] if isinstance(x, int) else x: y for x, y in options["resonances"]}
    options = options | {"resonances": named}
    if "references" in options:
        options = options | {"references": {a: unknowns[k] for a, k in options["references"].items()}}
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
        result.append(x.doit().replace(_float_power, lambda p: p.base ** int(p.exp)))
    return tuple(result)


def _float_power(x: sp.Expr) -> bool:
    """u**3.0, which means u**3."""
    return isinstance(x, sp.Pow) and isinstance(x.exp, sp.Float) and float(x.exp).is_integer()


def _check_names(symbols: set[sp.Symbol], unknowns: tuple[sp.Expr, ...]) -> None:
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


def _ordering(given: Mapping[sp.Expr, int], unknowns: tuple[sp.Expr, ...], time: sp.Symbol) -> dict[sp.Expr, int]:
    result = {}
    for key, order in given.items():
        if key not in unknowns and not (isinstance(key, sp.Symbol) and key != time):
            raise ProblemError(f"ordering has the key {key!r}: expected an unknown or a parameter of the equations")
        if isinstance(order, bool) or not isinstance(order, SupportsIndex) or index(order) < 0:
            raise ProblemError(f"ordering gives {key} the order {order!r}: expected an integer ≥ 0")
        result[key] = index(order)
    return result


def _small(
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
