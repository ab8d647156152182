"""The canonical form  u_k'' + ω_k² u_k = f_k(u, u', u''; ε),  f_k = O(ε), as data for the hierarchy.

`canonical_form` finds the oscillator of each equation, refuses anything else at leading order by name, determines the
natural frequencies and their base frequencies, and eliminates the parameters that the frequencies define.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from fractions import Fraction

import sympy as sp

from multiscale.algebra.quotient import Quotient, reduced
from multiscale.algebra.ring import RingSpec
from multiscale.errors import ProblemError
from multiscale.forces.polynomial import Term
from multiscale.problem.frequencies import Bases, bases_of, eliminated, number_field_bases, square_root
from multiscale.problem.reading import Reader, unsupported
from multiscale.problem.terms import Entry, Layout, match, show, tabulate

__all__ = ["Canonical", "canonical_form"]

ONE = (((), Fraction(1)),)


@dataclass(frozen=True)
class Canonical:
    """The problem as the engine sees it.

    `spec` holds every generator (amplitude pairs ``@zk``, ``@zk~`` included), `meanings` what each coefficient
    generator stands for in the user's symbols, `force` the right-hand sides, `bases` the frequencies as rates.
    """

    spec: RingSpec
    meanings: tuple[tuple[str, sp.Expr], ...]
    force: tuple[tuple[Term, ...], ...]
    bases: Bases
    frequencies: tuple[sp.Expr, ...]
    powers: tuple[int, ...]


def canonical_form(
    equations: Sequence[sp.Expr], layout: Layout, shown: Mapping[sp.Symbol, sp.Expr], names: list[sp.Expr]
) -> Canonical:
    """Raises `ProblemError` or `UnsupportedTermError`, naming the equation or the term."""
    dynamic = (*layout.jets, *((layout.small,) if layout.small is not None else ()))
    hidden: dict[sp.Symbol, sp.Expr] = {}
    current = [with_exact_oscillators(x, layout) for x in equations]
    while True:
        reader = Reader(current, dynamic, shown)
        tables = [tabulate(reader, equation, layout) for equation in current]
        leaders = match(tables, reader, layout, names)
        order = [leaders.index(k) for k in range(len(names))]
        current, tables = [current[j] for j in order], [tables[j] for j in order]
        masses = [_inertia(table, k) for k, table in enumerate(tables)]
        if any(mass.coefficient != ONE for mass in masses):
            current = [x / reader.expression(m.coefficient) for x, m in zip(current, masses, strict=True)]
            continue
        squares = [_stiffness(table, k, reader, layout, masses[k].power) for k, table in enumerate(tables)]
        frequencies, replacement = _frequencies(reader, squares, names, frozenset(layout.orders), hidden)
        if replacement is None:
            break
        current = [x.subs(*replacement) for x in current]
    return _assembled(current, dynamic, shown, layout, frequencies, hidden)


def _inertia(table: list[Entry], k: int) -> Entry:
    return min((e for e in table if e.factors == ((k, 2),)), key=lambda e: e.power)


def _stiffness(table: list[Entry], k: int, reader: Reader, layout: Layout, power: int) -> Quotient:
    """ω_k² of an equation u_k'' + ω_k² u_k + … = 0, everything else at its leading power refused by name."""
    own = [e for e in table if e.factors == ((k, 0),) and e.power == power]
    for e in table:
        if e.power > power or e.factors == ((k, 2),) or e in own:
            continue
        raise _misplaced(show(e, reader, layout), e, k, power, layout)
    if not own:
        raise ProblemError(
            f"the oscillator of {reader.show(_jet(layout, (k, 0)))} has zero frequency: "
            "its equation needs a restoring term omega**2*u at leading order"
        )
    return reduced(reader.ring, reader.ring.read(dict(own[0].coefficient)))


def _jet(layout: Layout, jet: tuple[int, int]) -> sp.Symbol:
    return next(s for s, j in layout.jets.items() if j == jet)


def _misplaced(term: sp.Expr, entry: Entry, k: int, power: int, layout: Layout) -> Exception:
    small = layout.small
    remedy = f"Give it a factor {small}" if small is not None else f"Raise its order above {power} through `ordering`"
    if entry.power < power:
        reason = f"its order {entry.power} is below the order {power} of the unknown its equation belongs to"
    elif not entry.factors:
        reason = "a constant force stands at leading order"
        remedy += ", or measure the unknown from its equilibrium"
    elif len(entry.factors) > 1:
        reason = "a nonlinear term stands at leading order"
    elif entry.factors[0] == (k, 1):
        reason = "damping stands at leading order, where the oscillators must be undamped"
    else:
        reason = "it couples the unknowns at leading order, where the oscillators must be uncoupled"
        remedy += ", or use modal coordinates"
    return unsupported(term, reason, remedy)


def _frequencies(
    reader: Reader,
    squares: list[Quotient],
    names: list[sp.Expr],
    forbidden: frozenset[sp.Symbol],
    hidden: dict[sp.Symbol, sp.Expr],
) -> tuple[list[sp.Expr], tuple[sp.Symbol, sp.Expr] | None]:
    """The natural frequencies, or the parameter to eliminate before they can be written down."""
    roots = []
    for square, name in zip(squares, names, strict=True):
        value = reader.expression(square.numerator) / sp.Mul(
            *(reader.expression(p) ** e for p, e in square.denominator)
        )
        if value.is_nonpositive:
            raise ProblemError(
                f"the squared frequency of {name} is {value}, not positive: {name} does not oscillate at leading order"
            )
        root = square_root(reader, square)
        radical = sp.sqrt(root.radicand)
        if root.radicand.free_symbols:
            radical = sp.Symbol(f"sqrt({root.radicand})", positive=True)
            replacement = (
                eliminated(root.radicand, radical, forbidden | hidden.keys()) if radical not in hidden else None
            )
            hidden.setdefault(radical, sp.sqrt(root.radicand.subs(hidden)))
            if replacement is not None:
                return [], replacement
        roots.append(root.outside * radical)
    nested = [
        r
        for r in roots
        if not r.free_symbols and r.is_algebraic and any(not x.base.is_Integer for x in r.atoms(sp.Pow))
    ]
    if nested:
        numeric = [r for r in roots if not r.free_symbols and r.is_algebraic]
        replaced = dict(zip(numeric, number_field_bases(numeric), strict=True))
        roots = [replaced.get(r, r) for r in roots]
    return roots, None


def _assembled(
    equations: list[sp.Expr],
    dynamic: tuple[sp.Symbol, ...],
    shown: Mapping[sp.Symbol, sp.Expr],
    layout: Layout,
    frequencies: list[sp.Expr],
    hidden: Mapping[sp.Symbol, sp.Expr],
) -> Canonical:
    reader = Reader([*equations, *frequencies], dynamic, shown)
    bases = bases_of(reader, frequencies)
    force, powers = [], []
    for k, equation in enumerate(equations):
        table = tabulate(reader, equation, layout)
        lead = _inertia(table, k).power
        powers.append(lead)
        force.append(
            tuple(
                Term(e.power - lead, e.factors, tuple((m, -c) for m, c in e.coefficient))
                for e in table
                if e.power > lead
            )
        )
    spec = _pruned(reader.ring.spec, force, bases)
    meanings = tuple(
        (name, value.subs(hidden)) for name, value in sorted(reader.meanings.items()) if name in spec.index
    )
    return Canonical(spec, meanings, tuple(force), bases, tuple(f.subs(hidden) for f in frequencies), tuple(powers))


def _pruned(spec: RingSpec, force: list[tuple[Term, ...]], bases: Bases) -> RingSpec:
    """The generators that the canonical form uses, and the amplitude pairs."""
    polynomials = [term.coefficient for terms in force for term in terms] + list(bases.values)
    used = {name for p in polynomials for monomial, _ in p for name, _ in monomial}
    reciprocals = tuple((h, p) for h, p in spec.reciprocals if h in used)
    used |= {name for _, p in reciprocals for monomial, _ in p for name, _ in monomial}
    pairs = tuple((f"@z{k}", f"@z{k}~") for k in range(len(force)))
    return RingSpec(
        pairs, tuple(r for r in spec.reals if r in used), tuple((g, p) for g, p in spec.roots if g in used), reciprocals
    )


def _decimal(x: sp.Float) -> sp.Rational:
    return sp.Rational(repr(float(x)) if x._prec <= 53 else str(x))


def with_exact_oscillators(equation: sp.Expr, layout: Layout) -> sp.Expr:
    """Floats in mass and leading stiffness become the decimals they print as, so that resonance is decided exactly."""
    if not equation.atoms(sp.Float):
        return equation
    weak = set(layout.orders) | ({layout.small} if layout.small is not None else set())
    terms = []
    for term in sp.Add.make_args(sp.expand(equation)):
        jets = [s for s in term.free_symbols if s in layout.jets]
        oscillator = (
            len(jets) == 1
            and layout.jets[jets[0]][1] != 1
            and sp.degree(term, jets[0]) == 1
            and not term.free_symbols & weak
        )
        terms.append(term.xreplace({x: _decimal(x) for x in term.atoms(sp.Float)}) if oscillator else term)
    return sp.Add(*terms)
