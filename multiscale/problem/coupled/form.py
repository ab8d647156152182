"""The canonical form of problems whose leading order is not one oscillator for each equation.

    L_0(d/dt) u = f,     L_0(s) = M s² + C s + K

Row k of L_0 holds the terms of equation k that are linear in the unknowns and of the lowest power of ε among these;
everything else is f. The purely imaginary roots of det L_0 are the modes; they must be semi-simple.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import replace

import sympy as sp

from multiscale.errors import ProblemError
from multiscale.forces.polynomial import Term
from multiscale.problem.canonical import Canonical, Working, canonical_form, completed, hide, working_copy
from multiscale.problem.coupled.given_shapes import roots_given
from multiscale.problem.coupled.mode_relations import with_mode_relations
from multiscale.problem.coupled.modes import Choice, positive, roots_of
from multiscale.problem.coupled.radicals import EliminatedError, Radicals
from multiscale.problem.coupled.rows import leading_terms, linear_part, matrix
from multiscale.problem.coupled.spectrum import DIGITS, Found, imaginary_roots, roots_at_most
from multiscale.problem.frequencies import Bases
from multiscale.problem.leading import misplaced, refuse_resonant_drives
from multiscale.problem.preparation import Prepared
from multiscale.problem.reading import Reader, decimals
from multiscale.problem.terms import Entry, Layout, show, tabulate

__all__ = ["form_of"]


def form_of(
    prepared: Prepared,
    layout: Layout,
    shown: Mapping[sp.Symbol, sp.Expr],
    names: list[sp.Expr],
    choice: Choice,
    modes: Mapping[sp.Symbol, int],
) -> Canonical:
    """The canonical form: oscillators where each equation is one, else the general form."""
    reader = Reader(prepared.equations, (*layout.jets, layout.small), shown)
    tables = [tabulate(reader, x, layout) for x in prepared.equations]
    if not choice and _are_oscillators(tables):
        return canonical_form(prepared, layout, shown, names, (reader, tables))
    return coupled_form(prepared, layout, shown, names, choice, modes)


def _are_oscillators(tables: list[list[Entry]]) -> bool:
    """Whether every equation has the leading terms u'' and u of one unknown, or fewer (which is refused there)."""
    owners = []
    for table in tables:
        jets = {e.factors[0] for e in leading_terms(table)[1]}
        owners.append({k for k, _ in jets})
        if len(owners[-1]) != 1 or not any(d == 2 for _, d in jets) or any(d == 1 for _, d in jets):
            return False
    return len(set().union(*owners)) == len(tables)


def coupled_form(
    prepared: Prepared,
    layout: Layout,
    shown: Mapping[sp.Symbol, sp.Expr],
    names: list[sp.Expr],
    choice: Choice,
    modes: Mapping[sp.Symbol, int],
) -> Canonical:
    """Raises `ProblemError`, `ResonanceError` or `UnsupportedTermError`, naming the equation or the term."""
    working = working_copy(prepared, layout)
    while True:
        reader = Reader(working.equations, (*layout.jets, layout.small), shown)
        tables = [tabulate(reader, x, layout) for x in working.equations]
        for k, table in enumerate(tables):
            _refuse_misplaced(table, k, reader, layout, names)
        scales = [_denominator(leading_terms(table)[1], reader) for table in tables]
        if any(scale != 1 for scale in scales):
            working.equations = [
                sp.expand(scale) * x if scale != 1 else x for scale, x in zip(scales, working.equations, strict=True)
            ]
            continue
        exact = [_with_exact_terms(x, table, layout) for x, table in zip(working.equations, tables, strict=True)]
        if exact != working.equations:
            working.equations = exact
            continue
        mass, damping, stiffness = (matrix(tables, reader, order) for order in (2, 1, 0))
        _refuse_circular(modes, (mass, damping, stiffness))
        radicals, weak = _radicals(working, layout.small), _remedy(layout)
        try:
            radicals.settle([*mass, *damping, *stiffness])
            if choice.shapes:
                related = [g.mapped(lambda x: _at_leading_order(x, prepared, layout)) for g in choice.shapes]
                meanings = prepared.leaves.meanings
                found = roots_given(related, (mass, damping, stiffness), working, radicals, meanings)
                others = roots_at_most(mass, damping, stiffness) - 2 * sum(f.multiplicity for f in found)
            else:
                found, others = imaginary_roots(mass, damping, stiffness, radicals, names, weak)
        except EliminatedError:
            continue
        found = [positive(f, working.hidden) for f in found]
        found = with_mode_relations(working, prepared, layout, shown, found, modes)
        return _assembled(working, prepared, layout, shown, found, others, choice)


def _at_leading_order(x: sp.Expr, prepared: Prepared, layout: Layout) -> sp.Expr:
    """What a user's expression means there with the relations in force."""
    for symbol, value in prepared.relations.values:
        x = x.subs(symbol, value)
    return x.subs({meaning: leaf for leaf, meaning in prepared.leaves.meanings.items()}).subs(layout.small, 0)


def _refuse_circular(modes: Mapping[sp.Symbol, int], matrices: Sequence[sp.Matrix]) -> None:
    """A frequency that a relation names cannot stand in the matrices that determine it."""
    used = set().union(*(m.free_symbols for m in matrices))
    if found := sorted(used & modes.keys(), key=str):
        raise ProblemError(
            f"a relation puts {found[0]} into the linear terms at leading order, whose natural frequency it means: "
            "give the frequency there a symbol of its own, or the relation an explicit value"
        )


def _remedy(layout: Layout) -> str:
    if layout.ordered:
        return "Give a symbol for the damping an order in `ordering`"
    return f"Give damping a factor {layout.small}"


def _refuse_misplaced(table: list[Entry], k: int, reader: Reader, layout: Layout, names: list[sp.Expr]) -> None:
    power, leading = leading_terms(table)
    if not leading:
        raise ProblemError(
            f"equation {k + 1} has no linear term: at leading order it must be linear in the unknowns {tuple(names)}"
        )
    for e in table:
        if e not in leading and (e.power < power or (e.power == power and e.factors)):
            raise misplaced(show(e, reader, layout), e, None, power, layout)


def _denominator(entries: list[Entry], reader: Reader) -> sp.Expr:
    """What makes the leading coefficients of an equation polynomials."""
    powers: dict[str, int] = {}
    for e in entries:
        for monomial, _ in e.coefficient:
            for name, n in monomial:
                powers[name] = max(n, powers.get(name, 0))
    below = {h: p for h, p in reader.ring.spec.reciprocals if h in powers}
    return sp.Mul(*(reader.expression(p) ** powers[h] for h, p in below.items()))


def _with_exact_terms(x: sp.Expr, table: list[Entry], layout: Layout) -> sp.Expr:
    """Floats in L_0 become the decimals they print as, so that resonance is decided exactly."""
    power, leading = leading_terms(table)
    if not x.atoms(sp.Float):
        return x
    jets = {jet: s for s, jet in layout.jets.items()}
    own = {jets[e.factors[0]] for e in leading}
    terms = []
    for term in sp.Add.make_args(sp.expand(x)):
        found = term.free_symbols & set(layout.jets)
        linear = len(found) == 1 and found <= own and sp.degree(term, min(found, key=str)) == 1
        at_power = sp.degree(term, layout.small) == power if layout.small in term.free_symbols else power == 0
        terms.append(decimals(term) if linear and at_power else term)
    return sp.Add(*terms)


def _radicals(working: Working, small: sp.Symbol) -> Radicals:
    for symbol, _ in working.relations:
        working.hidden.pop(symbol, None)
        working.slow.pop(symbol, None)
    for symbol in working.numbers:
        working.hidden.pop(symbol, None)
    working.relations.clear()
    working.numbers.clear()
    written = {sp.expand(p.base) for x in working.equations for p in x.atoms(sp.Pow) if p.exp == 2 and p.base.is_Add}

    def eliminate(symbol: sp.Symbol, square: sp.Expr) -> bool:
        known = dict(working.hidden), dict(working.slow)
        if hide(symbol, square, working):
            return True
        working.hidden, working.slow = known
        return False

    def adjoin(symbol: sp.Symbol, square: sp.Expr) -> None:
        change = sp.Add(*(sp.diff(square, s) * rate for s, rate in working.slow.items())) / (2 * symbol)
        working.hidden[symbol] = sp.sqrt(square.subs(working.hidden))
        if change != 0:
            working.slow[symbol] = change
        working.relations.insert(0, (symbol, square))

    def name(value: sp.Expr) -> sp.Symbol:
        symbol = sp.Symbol(f"@w{len(working.numbers)}", positive=True)
        working.numbers.append(symbol)
        working.hidden[symbol] = sp.Float(value, DIGITS)
        return symbol

    return Radicals(eliminate, adjoin, working.relations, name, {b.subs(small, 0) for b in written})


def _assembled(
    working: Working,
    prepared: Prepared,
    layout: Layout,
    shown: Mapping[sp.Symbol, sp.Expr],
    found: list[Found],
    others: int,
    choice: Choice,
) -> Canonical:
    reader, tables, bases, linear = linear_part(working, layout, shown, found)
    written = [f.shown or f.frequency for f in found]
    meant = [w.subs(working.hidden).subs(prepared.leaves.meanings) for w in written]
    roots = roots_of(linear, bases, reader, found, meant, choice)
    operator = replace(linear.operator, roots=tuple(roots), others=others, given=bool(choice.shapes) and others > 0)
    force = []
    for table in tables:
        power, leading = leading_terms(table)
        weak = [e for e in table if e not in leading]
        force.append(tuple(Term(e.power - power, e.factors, tuple((m, -c) for m, c in e.coefficient)) for e in weak))
    own = [written[bases.rates.index(root.rate)] for root, _ in operator.carried]
    rates = tuple(root.rate for root, _ in operator.carried) + bases.rates[len(found) :]
    named = [meant[bases.rates.index(root.rate)] for root in roots for _ in root.shapes]
    bases = Bases(bases.values, rates, bases.unit, bases.assumed)
    canonical = completed(working, prepared, reader, bases, force, own, operator, named)
    every = [root.rate for root in roots]
    refuse_resonant_drives(canonical.force, every, canonical.drives, [r.name for r in roots], None, layout)
    return canonical
