"""The canonical form  u_k'' + ω_k² u_k = f_k(u, u', u''; ε)  as data for the hierarchy, f_k = O(ε) but for drives.

`canonical_form` finds the oscillator of each equation, refuses anything else at leading order by name, determines the
natural frequencies and their base frequencies, and eliminates the parameters that the frequencies define.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field
from fractions import Fraction

import sympy as sp

from multiscale.algebra.polynomial import Frozen, freeze
from multiscale.algebra.quotient import Quotient
from multiscale.algebra.ring import RingSpec
from multiscale.clock import Modulus
from multiscale.errors import ProblemError
from multiscale.forces.polynomial import Term
from multiscale.linear_part.general import Operator
from multiscale.problem.averaged.projection import Harmonic, TorusMean
from multiscale.problem.drives import Drive
from multiscale.problem.frequencies import Bases, bases_of, denested, eliminated, square_root
from multiscale.problem.leading import inertia, own_stiffness, refuse_resonant_drives
from multiscale.problem.preparation import Prepared
from multiscale.problem.reading import Reader, decimals
from multiscale.problem.relations import Detuning, detuning_of
from multiscale.problem.terms import Entry, Layout, match, tabulate

__all__ = ["Canonical", "Working", "canonical_form", "completed", "hide", "in_double", "working_copy"]

ONE = (((), Fraction(1)),)


@dataclass(frozen=True)
class Canonical:
    """The problem as the engine sees it.

    `spec` holds every generator (amplitude pairs ``@zk``, ``@zk~`` first), `meanings` what each coefficient generator
    stands for in the user's symbols, `force` the right-hand sides, `bases` the natural frequencies as rates, `drives`
    the phasors, `slow` the time derivative (in εt) of each slow generator, `detunings` how detunings follow from the
    frequencies of their relations, `operator` the matrices of L_0 where it is not diag(s² + ω_k²). `truncated` says
    that a statement exact in ε was expanded, so that a higher order needs the canonical form anew.
    `named_frequencies` are those of all modes of coupled equations, carried or not. `harmonics` are the Fourier
    coefficients of forces that are not polynomial, `numeric` their spelling for evaluation, `moduli` the moduli of
    amplitudes among the generators, and `left_out` says in words which harmonics are not there. `torus` are the
    averages of forces that depend on several phases.
    """

    spec: RingSpec
    meanings: tuple[tuple[str, sp.Expr], ...]
    force: tuple[tuple[Term, ...], ...]
    bases: Bases
    frequencies: tuple[sp.Expr, ...]
    drives: tuple[Drive, ...]
    slow: tuple[tuple[str, Frozen], ...]
    detunings: tuple[Detuning, ...]
    truncated: bool
    harmonics: tuple[Harmonic, ...] = ()
    numeric: tuple[tuple[str, sp.Expr], ...] = ()
    moduli: tuple[Modulus, ...] = ()
    left_out: tuple[str, ...] = ()
    torus: tuple[TorusMean, ...] = ()
    operator: Operator | None = None
    named_frequencies: tuple[sp.Expr, ...] = ()


@dataclass
class Working:
    """Equations, phasor rates and slow rates, in which parameters are eliminated together.

    `hidden` are the symbols of radicals and what they stand for; those in `relations` eliminate no parameter, so that
    their squares are relations of the ring, a radical standing before those inside it; those in `numbers` have
    no closed form. `changes` are the parameters eliminated by radicals so far, in order.
    """

    equations: list[sp.Expr]
    rates: list[list[sp.Expr]]
    exact: list[sp.Expr]
    slow: dict[sp.Symbol, sp.Expr]
    hidden: dict[sp.Symbol, sp.Expr]
    detunings: list[Detuning]
    relations: list[tuple[sp.Symbol, sp.Expr]] = field(default_factory=list)
    numbers: list[sp.Symbol] = field(default_factory=list)
    changes: list[tuple[sp.Symbol, sp.Expr]] = field(default_factory=list)

    def replace(self, symbol: sp.Symbol, value: sp.Expr) -> None:
        self.changes.append((symbol, value))
        self.equations = [x.subs(symbol, value) for x in self.equations]
        self.rates = [[x.subs(symbol, value) for x in series] for series in self.rates]
        self.exact = [x.subs(symbol, value) for x in self.exact]
        self.slow = {s: x.subs(symbol, value) for s, x in self.slow.items() if s != symbol}


def in_double(frequency: sp.Expr) -> sp.Expr:
    """A frequency without a closed form to double precision; any other as it is."""
    return sp.Float(frequency, 17) if frequency.is_Float else frequency


def working_copy(prepared: Prepared, layout: Layout) -> Working:
    return Working(
        [with_exact_oscillators(x, layout) for x in prepared.equations],
        [list(series) for series in prepared.rates],
        list(prepared.exact_rates),
        dict(prepared.leaves.rates),
        {},
        list(prepared.relations.detunings),
    )


def canonical_form(
    prepared: Prepared,
    layout: Layout,
    shown: Mapping[sp.Symbol, sp.Expr],
    names: list[sp.Expr],
    read: tuple[Reader, list[list[Entry]]] | None = None,
) -> Canonical:
    """Raises `ProblemError`, `ResonanceError` or `UnsupportedTermError`, naming the equation or the term.

    `read` are the equations of `prepared` if they were read before.
    """
    dynamic = (*layout.jets, layout.small)
    working = working_copy(prepared, layout)
    forced = dict(prepared.relations.frequencies)
    while True:
        current = working.equations
        if read is None or current != prepared.equations:
            reader = Reader(current, dynamic, shown)
            tables = [tabulate(reader, equation, layout) for equation in current]
        else:
            reader, tables = read
        read = None
        leaders = match(tables, reader, layout, names)
        order = [leaders.index(k) for k in range(len(names))]
        current, tables = [current[j] for j in order], [tables[j] for j in order]
        masses = [inertia(table, k) for k, table in enumerate(tables)]
        if any(mass.coefficient != ONE for mass in masses):
            working.equations = [x / reader.expression(m.coefficient) for x, m in zip(current, masses, strict=True)]
            continue
        working.equations = current
        squares = [own_stiffness(table, k, reader, layout, masses[k].power) for k, table in enumerate(tables)]
        if forced:
            k, value = forced.popitem()
            displacement = next(s for s, jet in layout.jets.items() if jet == (k, 0)) * layout.small ** masses[k].power
            stiffness = reader.expression(reader.named(squares[k]).items())
            known = set().union(*(x.free_symbols for x in prepared.equations))
            working.detunings.append(detuning_of(None, sp.sqrt(stiffness), value, layout.small, known))
            working.equations[k] = current[k] - stiffness * displacement + value**2 * displacement
            continue
        found = _frequencies(reader, squares, names, working, layout.small)
        if found is not None:
            return _assembled(working, prepared, layout, shown, found)


def _frequencies(
    reader: Reader, squares: list[Quotient], names: list[sp.Expr], working: Working, small: sp.Symbol
) -> list[sp.Expr] | None:
    """The natural frequencies; None when a parameter was eliminated and the equations must be read again."""
    roots = []
    written = {sp.expand(p.base) for x in working.equations for p in x.atoms(sp.Pow) if p.exp == 2 and p.base.is_Add}
    written = {b.subs(small, 0) for b in written}
    for square, name in zip(squares, names, strict=True):
        value = reader.expression(reader.named(square).items())
        if value.is_nonpositive:
            raise ProblemError(
                f"the squared frequency of {name} is {value}, not positive: {name} does not oscillate at leading "
                "order, its state of rest is unstable"
            )
        root = square_root(reader, square, written)
        radical = sp.sqrt(root.radicand)
        if root.radicand.free_symbols:
            radical = sp.Symbol(f"sqrt({root.radicand})", positive=True)
            if radical not in working.hidden and hide(radical, root.radicand, working):
                return None
        roots.append(root.outside * radical)
    return denested(roots)


def hide(radical: sp.Symbol, radicand: sp.Expr, working: Working) -> bool:
    """Introduce w = √radicand; True if a parameter could be eliminated by it."""
    change = sp.Add(*(sp.diff(radicand, s) * rate for s, rate in working.slow.items())) / (2 * radical)
    replacement = eliminated(radicand, radical, frozenset(working.hidden))
    working.hidden[radical] = sp.sqrt(radicand.subs(working.hidden))
    if change != 0:
        working.slow[radical] = change
    if replacement is not None:
        working.replace(*replacement)
    return replacement is not None


def _assembled(
    working: Working,
    prepared: Prepared,
    layout: Layout,
    shown: Mapping[sp.Symbol, sp.Expr],
    frequencies: list[sp.Expr],
) -> Canonical:
    flat = [x for series in working.rates for x in series]
    reader = Reader(
        [*working.equations, *frequencies, *flat, *working.slow.values()], (*layout.jets, layout.small), shown
    )
    bases = bases_of(reader, [*frequencies, *(series[0] for series in working.rates)])
    force = []
    for k, equation in enumerate(working.equations):
        table = tabulate(reader, equation, layout)
        lead = inertia(table, k).power
        weak = [e for e in table if e.power > lead or not e.factors]
        force.append(tuple(Term(e.power - lead, e.factors, tuple((m, -c) for m, c in e.coefficient)) for e in weak))
    canonical = completed(working, prepared, reader, bases, force, frequencies)
    refuse_resonant_drives(
        canonical.force, canonical.bases.rates, canonical.drives, canonical.frequencies, range(len(force)), layout
    )
    return canonical


def completed(
    working: Working,
    prepared: Prepared,
    reader: Reader,
    bases: Bases,
    force: Sequence[tuple[Term, ...]],
    frequencies: Sequence[sp.Expr],
    operator: Operator | None = None,
    named: Sequence[sp.Expr] = (),
) -> Canonical:
    """The canonical form from the forces and the rates of `frequencies` and, after them, of the phasors."""
    renamed = {f"1/({p.symbol.name})": f"{p.symbol.name}~" for p in prepared.phasors}
    force = [tuple(Term(t.power, t.factors, _rename(t.coefficient, renamed)) for t in terms) for terms in force]
    count = len(frequencies)
    drives = tuple(
        Drive(
            p.symbol.name,
            bases.rates[count + k],
            tuple(freeze(reader.reduced(reader.read(x))) for x in working.rates[k][1:]),
            p.rate.subs(prepared.leaves.meanings),
            p.angle,
            working.exact[k].subs(working.hidden).subs(prepared.leaves.meanings),
        )
        for k, p in enumerate(prepared.phasors)
    )
    modes = Bases(bases.values, bases.rates[:count], bases.unit, bases.assumed)
    slow = {s.name: freeze(reader.reduced(reader.read(x))) for s, x in working.slow.items()}
    linear = [] if operator is None else operator.polynomials
    spec, slow = _pruned(reader.ring.spec, force, modes, drives, slow, linear)
    meanings = _meanings(reader, spec, working, prepared)
    shown_frequencies = tuple(f.subs(working.hidden).subs(prepared.leaves.meanings) for f in frequencies)
    return Canonical(
        spec,
        meanings,
        tuple(force),
        modes,
        shown_frequencies,
        drives,
        tuple(slow.items()),
        tuple(working.detunings),
        prepared.truncated,
        operator=operator,
        named_frequencies=tuple(named),
    )


def _meanings(reader: Reader, spec: RingSpec, working: Working, prepared: Prepared) -> tuple[tuple[str, sp.Expr], ...]:
    leaves = prepared.leaves.meanings
    named = {
        name: value.subs(working.hidden).subs(leaves) for name, value in reader.meanings.items() if name in spec.index
    }
    return tuple(
        sorted((name, value) for name, value in named.items() if name not in {p.symbol.name for p in prepared.phasors})
    )


def _rename(polynomial: Frozen, names: Mapping[str, str]) -> Frozen:
    return freeze({tuple(sorted((names.get(g, g), e) for g, e in m)): c for m, c in polynomial})


def _pruned(
    spec: RingSpec,
    force: list[tuple[Term, ...]],
    bases: Bases,
    drives: tuple[Drive, ...],
    slow: dict[str, Frozen],
    linear: list[Frozen],
) -> tuple[RingSpec, dict[str, Frozen]]:
    """The generators in use, amplitude pairs and phasors first, and the slow ones among them."""
    polynomials = [term.coefficient for terms in force for term in terms] + list(bases.values)
    polynomials += [*linear, *(p for d in drives for p in d.detunings)]
    below = dict(spec.reciprocals) | dict(spec.roots)
    used: set[str] = set()
    while polynomials:
        new = {name for p in polynomials for monomial, _ in p for name, _ in monomial} - used
        used |= new
        polynomials = [slow[name] for name in new if name in slow] + [below[name] for name in new if name in below]
    phasors = tuple((d.generator, f"{d.generator}~") for d in drives)
    pairs = (*((f"@z{k}", f"@z{k}~") for k in range(len(bases.rates))), *phasors)
    units = frozenset(e for e, _ in phasors)
    reciprocals = tuple((h, p) for h, p in spec.reciprocals if h in used)
    reals = tuple(r for r in spec.reals if r in used and r not in units)
    kept = {name: p for name, p in slow.items() if name in used}
    return RingSpec(pairs, units, reals, tuple((g, p) for g, p in spec.roots if g in used), reciprocals), kept


def with_exact_oscillators(equation: sp.Expr, layout: Layout) -> sp.Expr:
    """Floats in mass and leading stiffness become the decimals they print as, so that resonance is decided exactly."""
    if not equation.atoms(sp.Float):
        return equation
    terms = []
    for term in sp.Add.make_args(sp.expand(equation)):
        jets = [s for s in term.free_symbols if s in layout.jets]
        linear = len(jets) == 1 and layout.jets[jets[0]][1] != 1 and jets[0] not in (term / jets[0]).free_symbols
        weak = linear and layout.small in term.free_symbols and not layout.ordered
        terms.append(decimals(term) if linear and not weak else term)
    return sp.Add(*terms)
