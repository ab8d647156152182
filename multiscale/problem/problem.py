"""What the user states: equations of motion, unknowns, and where the small parameter stands."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import replace
from functools import cached_property
from re import fullmatch
from typing import Any

import sympy as sp

from multiscale.errors import ProblemError
from multiscale.latex import shortened
from multiscale.problem.averaged.laws import Law, at_resonance, layout_with_laws, separated
from multiscale.problem.averaged.projected import with_projections
from multiscale.problem.canonical import Canonical, in_double
from multiscale.problem.coupled.form import form_of
from multiscale.problem.coupled.given_shapes import Shapes, check_symbols, given_shapes, shapes_given
from multiscale.problem.coupled.modes import Choice, modes_given, references_given
from multiscale.problem.force_law import ForceLaw, laws_of, with_calls, without_calls
from multiscale.problem.given import (
    check_names,
    check_read,
    equations_given,
    harmonics_given,
    jets_of,
    ordering_given,
    small_given,
    time_given,
    unknowns_given,
    warn_of_finite_detunings,
)
from multiscale.problem.matrices import equations_of, size_of
from multiscale.problem.ordering import with_orders
from multiscale.problem.preparation import Prepared, prepare
from multiscale.problem.reading import unsupported
from multiscale.problem.relations import Detuning, relation_pairs
from multiscale.problem.small.rest import about_rest, rest_positions
from multiscale.problem.small.taylor import with_taylor_polynomials
from multiscale.problem.terms import Layout

__all__ = ["Problem"]


class Problem:
    """Equations of motion with weak nonlinearity, checked and ready to expand.

    Parameters
    ----------
    equations : Expr, Eq, or a sequence of them
        An expression means "= 0". At leading order the equations are linear with constant coefficients: one oscillator
        each, u'' + ω²u + … = 0, or coupled, gyroscopic, damped and of first or second order as they come, with at least
        one motion that neither grows nor decays. Everything else must be small. Polynomials in the unknowns and their
        first and second time derivatives go to any order, and so do analytic functions of unknowns that are small
        (`ordering`): sin(u), 1/(g - u)**2, sin(u1 - u2), by their Taylor polynomials to the order that is asked for. Of
        unknowns that are not small, other forces, such as ``Abs(v)*v``, ``sign(v)``, ``sin(u)``, ``Max(u - g, 0)``, are
        averaged over a cycle at first order (homogeneous ones with a continuous derivative also at second), each of one
        unknown. Any consistent units.
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
    about : mapping, optional
        Positions of rest from which unknowns are measured: {u: u_s} puts u_s + u in the place of u, in `equations` and
        in every result. A new symbol u_s (or a number) eliminates a parameter by the equilibrium, preferably a load,
        one that acts at u = 0, where it stands linearly or by its square; to choose another, state the relation in
        `resonances`. An expression in the parameters must be a state of rest already. See `states_of_rest`.
    laws : mapping, optional
        What undefined functions of unknowns stand for, ``{F: function}``: a function of numbers, a table ``(x, y)`` or
        a `ForceLaw`, which also takes kinks and a derivative.
    harmonics : int, optional
        Of forces that are not polynomial, the highest harmonic kept in the corrections U_n; 21 at second order, at
        first order none beyond those that the slow flow needs.
    formal : bool
        Also carry forces with a kink, such as ``Abs(u)``, to second order, which is formal.
    time : Symbol, optional
        Needed only to check that it is the one meant.
    modes : sequence of int, optional
        The modes to carry, numbered from 0 by increasing frequency; default all. The others are taken to be at rest but
        for what the carried ones force on them; modes that decay at leading order are never carried.
    references : mapping, optional
        ``{mode: unknown}``: the coordinate in which the amplitude of a mode is measured, if not the first unknown that
        takes part in it.
    shapes : mapping, optional
        ``{frequency: shape}``, modes that you know, for linear parts whose frequencies have no closed form that a
        machine finds: shapes as sequences in the order of the unknowns or ``{unknown: component}``, up to a factor,
        several of one frequency as a sequence of them. They are verified exactly. The frequency is an expression in the
        parameters, or a symbol that a relation in `resonances` ties to them, ``{k: m*w**2}``. Modes that are not given
        are not looked for: they are taken to be at rest but for what the modes given force on them.
    left_shapes : mapping, optional
        ``{frequency: left vector}``, also verified; they follow from the matrices where they are not given.

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

    A plate at rest at u_s under a voltage V, which follows from u_s:

    >>> k, g, V, u_s = sp.symbols("k g V u_s", positive=True)
    >>> pulled = u.diff(t, 2) + k*u - V**2/(g - u)**2
    >>> problem = ms.Problem(pulled, u, ordering={u: 1}, about={u: u_s})
    >>> problem.resonances, problem.natural_frequencies
    (((V**2, k*u_s*(g - u_s)**2),), (sqrt(k)*sqrt((g - 3*u_s)/(g - u_s)),))
    """

    def __init__(
        self,
        equations: sp.Expr | sp.Eq | Sequence[sp.Expr | sp.Eq],
        unknowns: sp.Expr | Sequence[sp.Expr],
        *,
        small: sp.Symbol | None = None,
        ordering: Mapping[sp.Expr, int] | None = None,
        resonances: Mapping[sp.Expr, sp.Expr] | Sequence[sp.Eq] = (),
        about: Mapping[sp.Expr, sp.Expr] | None = None,
        time: sp.Symbol | None = None,
        laws: Mapping[Any, ForceLaw | Any] | None = None,
        harmonics: int | None = None,
        formal: bool = False,
        modes: Sequence[int] | None = None,
        references: Mapping[int, sp.Expr] | None = None,
        shapes: Mapping[sp.Expr, Any] | None = None,
        left_shapes: Mapping[sp.Expr, Any] | None = None,
    ) -> None:
        self.unknowns: tuple[sp.Expr, ...] = unknowns_given(unknowns)
        self.time: sp.Symbol = time_given(self.unknowns, time)
        self.equations: tuple[sp.Expr, ...] = equations_given(equations)
        self.laws: dict[str, ForceLaw] = laws_of(laws or {})
        self.harmonics: int | None = harmonics_given(harmonics)
        self.formal = bool(formal)
        if len(self.equations) != len(self.unknowns):
            raise ProblemError(
                f"{len(self.equations)} equations for {len(self.unknowns)} unknowns: as many of each are needed"
            )
        self.ordering: dict[sp.Expr, int] | None = (
            ordering_given(ordering, self.unknowns, self.time) if ordering is not None else None
        )
        self.resonances: tuple[tuple[sp.Expr, sp.Expr], ...] = relation_pairs(resonances)
        self.modes: tuple[int, ...] | None = modes_given(modes)
        self.references: dict[int, sp.Expr] = references_given(references, self.unknowns)
        self.shapes: Shapes = shapes_given(shapes, self.unknowns, "shapes")
        self.left_shapes: Shapes = shapes_given(left_shapes, self.unknowns, "left_shapes")
        self._given_shapes = given_shapes(self.shapes, self.left_shapes)
        if about is not None:
            self._measure_from(rest_positions(about, self.unknowns, self.time, small), small)
        beside = [x for x in (*(self.ordering or {}), small) if isinstance(x, sp.Symbol)]
        check_names({*self._symbols, self.time, *beside}, self.unknowns)
        check_symbols(self._given_shapes, self._symbols)
        self._given_small = small_given(small, self.ordering, self._symbols, self.time)
        self._canonical: dict[int | None, Canonical] = {}
        self.canonical(1)
        # A relation that gives a frequency of `shapes` its symbol, {k: m*w**2}, detunes nothing.
        present = (*self.equations, *self.shapes)
        warn_of_finite_detunings(present, self.resonances, self.small, self.ordering)

    def _measure_from(self, about: dict[sp.Expr, sp.Expr], small: Any) -> None:
        """Put the deviation from rest in the place of each unknown, and the equilibrium among the relations."""
        jets = jets_of(self.unknowns, self.time)
        vanishing = {s for s, q in (self.ordering or {}).items() if isinstance(s, sp.Symbol) and q}
        vanishing |= {small} if isinstance(small, sp.Symbol) else set()
        stated = [pair for pair in self.resonances if pair[0] not in self.unknowns]
        shifted, relations = about_rest(self._hidden(), jets, about, vanishing, stated, self.time)
        self.equations = tuple(x.xreplace(jets) for x in shifted)
        self.resonances = (*self.resonances, *relations)

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
            `resonances`, `modes`, `references`, `shapes`, `left_shapes` as for `Problem`.

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
            unknowns = unknowns_given(unknowns)
            time = time_given(unknowns, None)
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
        return x.subs(self.mode_frequencies)

    @cached_property
    def mode_frequencies(self) -> dict[sp.Symbol, sp.Expr]:
        """What the symbols omega_1, omega_2, … of relations stand for where the equations are coupled."""
        if not self._mode_symbols:
            return {}
        frequencies = self.canonical(1).named_frequencies
        return {s: frequencies[a] for s, a in self._mode_symbols.items() if a < len(frequencies)}

    @property
    def mode_names(self) -> frozenset[sp.Symbol]:
        """The symbols of relations that name natural frequencies of coupled equations: omega_1, omega_2, …"""
        return frozenset(self._mode_symbols) if self.canonical(1).operator is not None else frozenset()

    @cached_property
    def _mode_symbols(self) -> dict[sp.Symbol, int]:
        """{omega_1: 0, …} for the symbols of relations that name natural frequencies of coupled equations."""
        stated = {s for pair in self.resonances for x in pair if x not in self.unknowns for s in x.free_symbols}
        apart = stated - set().union(*(x.free_symbols for x in (*self.equations, *self.shapes)))
        return {s: int(m[1]) - 1 for s in apart if (m := fullmatch(r"omega_([1-9]\d*)", s.name))}

    def canonical(self, order: int) -> Canonical:
        """The canonical form for an expansion to the given order; most problems have one form for all orders."""
        if None in self._canonical:
            return self._canonical[None]
        if order not in self._canonical:
            prepared = self._prepared(order)
            shown = jets_of(self.unknowns, self.time) | prepared.shown
            if self.ordering is not None:
                shown[self.small] = sp.Integer(1)
            layout, shown = layout_with_laws(self._layout, shown, prepared.laws)
            names = list(self.unknowns)
            form = form_of(prepared, layout, shown, names, self._choice, self._mode_symbols)
            if prepared.laws and form.operator is not None:
                force = prepared.laws[0].force.xreplace({sp.Symbol(s.name, real=True): x for s, x in shown.items()})
                raise unsupported(
                    force,
                    "forces that are not polynomial are averaged for oscillators that are uncoupled at leading order",
                    "Write the equations in modal coordinates",
                )
            if prepared.laws:
                form = with_projections(
                    form, prepared.laws, layout, shown, self.phase, order, self.harmonics, self.formal
                )
            self._canonical[order if form.truncated or prepared.laws else None] = form
            return form
        return self._canonical[order]

    @property
    def phase(self) -> sp.Symbol:
        """The phase that averages integrate over."""
        name = "theta"
        while name in self.names:
            name += "_u"
        return sp.Symbol(name, real=True)

    @property
    def _choice(self) -> Choice:
        references = tuple((a, self.unknowns.index(u)) for a, u in sorted(self.references.items()))
        return Choice(self.modes, references, self._given_shapes)

    @cached_property
    def _layout(self) -> Layout:
        jets = {sp.Symbol(f"@{k}.{d}"): (k, d) for k in range(len(self.unknowns)) for d in (0, 1, 2)}
        return Layout(jets, self.small, self.ordering is not None)

    def _prepared(self, order: int) -> Prepared:
        jets = self._layout.jets
        hidden = self._hidden()
        for x in hidden:
            check_read(x, self.unknowns, self.time)
        for k, u in enumerate(self.unknowns):
            if not any(x.free_symbols & {s for s, jet in jets.items() if jet[0] == k} for x in hidden):
                raise ProblemError(f"the unknown {u} does not appear in the equations")
        shown = jets_of(self.unknowns, self.time)
        laws: tuple[Law, ...] = ()
        if self.ordering is None:
            hidden, laws = separated(hidden, self._layout, self.time, shown, self.laws)
        prepared = prepare(
            hidden,
            self._layout,
            self.time,
            self._powers,
            self.resonances,
            self.unknowns,
            shown,
            order,
            self._mode_symbols,
        )
        return replace(prepared, laws=at_resonance(laws, prepared.relations.values, self.small))

    @property
    def _powers(self) -> dict[sp.Symbol, int]:
        """The orders of jets and parameters."""
        orders = dict(self.ordering or {})
        powers = {s: orders[u] for s, (k, _) in self._layout.jets.items() if (u := self.unknowns[k]) in orders}
        return powers | {s: q for s, q in orders.items() if isinstance(s, sp.Symbol)}

    def polynomials(self, order: int) -> tuple[sp.Expr, ...]:
        """The equations with Taylor polynomials for their analytic forces, as far as an expansion to `order` uses them.

        Examples
        --------
        >>> import sympy as sp, multiscale as ms
        >>> t = sp.Symbol("t")
        >>> u = sp.Function("u")(t)
        >>> ms.Problem(u.diff(t, 2) + sp.sin(u), u, ordering={u: 1}).polynomials(order=4)
        (u(t)**5/120 - u(t)**3/6 + u(t) + Derivative(u(t), (t, 2)),)
        """
        shown = jets_of(self.unknowns, self.time)
        ordered = with_orders(self._hidden(), self._powers, self.small)
        found, _ = with_taylor_polynomials(ordered, self._layout, self.time, self._powers, shown, order)
        spelled = shown | ({self.small: sp.Integer(1)} if self.ordering is not None else {})
        return tuple(x.xreplace(spelled) for x in found)

    def _hidden(self) -> list[sp.Expr]:
        """The equations with a symbol for each unknown and derivative."""
        names = {x: s for s, x in jets_of(self.unknowns, self.time).items()}
        derivatives = {x: s for x, s in names.items() if x.is_Derivative}
        return [x.xreplace(derivatives).xreplace(names) for x in self.equations]

    def _key(self) -> tuple[Any, ...]:
        ordering = None if self.ordering is None else tuple(sorted(self.ordering.items(), key=str))
        laws = tuple(sorted(self.laws.items(), key=lambda item: item[0]))
        references = tuple(sorted(self.references.items()))
        shapes = (frozenset(self.shapes.items()), frozenset(self.left_shapes.items()))
        kept = (laws, self.harmonics, self.formal, self.modes, references, shapes)
        return (self.equations, self.unknowns, self._given_small, ordering, self.resonances, kept)

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
        options |= {"laws": self.laws, "harmonics": self.harmonics, "formal": self.formal}
        if self.modes is not None:
            options["modes"] = self.modes
        if self.references:
            options["references"] = {a: self.unknowns.index(u) for a, u in self.references.items()}
        options |= {name: x for name, x in (("shapes", self.shapes), ("left_shapes", self.left_shapes)) if x}
        options["resonances"] = [(self.unknowns.index(x) if x in self.unknowns else x, y) for x, y in self.resonances]
        return _rebuilt, ([with_calls(x, self.laws) for x in self._hidden()], functions, options)

    def __repr__(self) -> str:
        names = ", ".join(str(u) for u in self.unknowns)
        text = f"Problem in {names}: " + "; ".join(f"{x} = 0" for x in self.equations)
        return text if len(text) < 200 else text[:190] + " …"

    def _repr_latex_(self) -> str:
        rows = r" \\ ".join(f"{shortened(x)} &= 0" for x in self.equations)
        return rf"$\displaystyle \begin{{aligned}}{rows}\end{{aligned}}$"


def _rebuilt(
    hidden: list[sp.Expr], functions: Sequence[tuple[str, dict[str, Any]]], options: dict[str, Any]
) -> Problem:
    unknowns = [sp.Function(name, **assumptions)(options["time"]) for name, assumptions in functions]
    if "ordering" in options:
        named = {unknowns[x] if isinstance(x, int) else x: q for x, q in options["ordering"].items()}
        options = options | {"ordering": named}
    named = {unknowns[x] if isinstance(x, int) else x: y for x, y in options["resonances"]}
    laws = {sp.Function(name): law for name, law in options["laws"].items()}
    options = options | {"resonances": named, "laws": laws}
    if "references" in options:
        options = options | {"references": {a: unknowns[k] for a, k in options["references"].items()}}
    jets = jets_of(unknowns, options["time"])
    return Problem([without_calls(x).xreplace(jets) for x in hidden], unknowns, **options)
