"""Relations in which natural frequencies of coupled equations stand by name: omega_1, omega_2, …

A drive near a mode, {Omega: omega_1 + ε σ}, only needs the frequency put in. A mode whose frequency is given,
{omega_2: 2 omega_1 + ε σ}, has its share of the stiffness replaced by that frequency,

    K + (Ω² − ω_k²) M φ ψ^T M / (ψ^T M φ),      M φ ψ^T M / (ψ^T M φ) = M adj(K − ω_k² M) M / tr(adj(K − ω_k² M) M)

which leaves all shapes and all other frequencies as they are and makes L_0 exactly resonant.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import replace

import sympy as sp

from multiscale.errors import ProblemError
from multiscale.problem.canonical import Working, in_double
from multiscale.problem.coupled.critical_values import critical_value
from multiscale.problem.coupled.modes import numbering
from multiscale.problem.coupled.rows import leading_terms, linear_part, matrix
from multiscale.problem.coupled.spectrum import Found
from multiscale.problem.preparation import Prepared
from multiscale.problem.reading import Reader, decimals
from multiscale.problem.relations import detuning_of
from multiscale.problem.terms import Layout, tabulate

__all__ = ["with_mode_relations"]


def with_mode_relations(
    working: Working,
    prepared: Prepared,
    layout: Layout,
    shown: Mapping[sp.Symbol, sp.Expr],
    found: list[Found],
    modes: Mapping[sp.Symbol, int],
) -> list[Found]:
    """The roots with the relations in force; equations and rates of `working` are changed to agree."""
    meant = [(f.shown or f.frequency).subs(working.hidden).subs(prepared.leaves.meanings) for f in found]
    order = _order(working, layout, shown, found, meant) if modes else []
    if strange := [s for s, a in modes.items() if a >= len(order)]:
        raise ProblemError(f"a relation names {strange[0]}, but the equations have {len(order)} modes at leading order")
    named = {s: found[order[a]].frequency for s, a in modes.items()}
    explicit = {m: f.frequency for m, f in zip(meant, found, strict=True) if not m.is_Rational}
    # Relations hold numbers as the decimals they print as.
    explicit |= {decimals(in_double(m)): w for m, w in explicit.items() if m.is_Float}

    def read(x: sp.Expr) -> sp.Expr:
        return x.subs(named).subs(explicit)

    # A relation may have put a frequency into the forces too, as into an unbalance e Ω².
    working.equations = [read(x) for x in working.equations]
    working.rates = [[read(x) for x in series] for series in working.rates]
    working.exact = [read(x) for x in working.exact]
    by_name = {s: meant[order[a]] for s, a in modes.items()}
    working.detunings = [replace(d, formula=d.formula.subs(by_name)) for d in working.detunings]
    known = set().union(*(x.free_symbols for x in prepared.equations))
    for a, value in prepared.relations.modes:
        k, exact = order[a], read(value)
        working.detunings.append(detuning_of(None, meant[k], value.subs(by_name), layout.small, known))
        if any(_matrices(working.equations, layout, shown)[1]) or found[k].multiplicity > 1:
            raise _refused(modes, a, value, _matrices(prepared.equations, layout, shown), layout)
        working.equations = _shifted(working.equations, layout, shown, found[k], exact)
        found[k] = replace(found[k], frequency=sp.expand(exact.subs(layout.small, 0)), shown=None)
    return _merged(found)


def _merged(found: list[Found]) -> list[Found]:
    """Roots that a relation has made equal, as one root of several modes."""
    result: list[Found] = []
    for f in found:
        same = next((k for k, g in enumerate(result) if sp.expand(f.frequency - g.frequency) == 0), None)
        if same is None:
            result.append(f)
        else:
            result[same] = replace(result[same], multiplicity=result[same].multiplicity + f.multiplicity)
    return result


def _order(
    working: Working,
    layout: Layout,
    shown: Mapping[sp.Symbol, sp.Expr],
    found: list[Found],
    meant: list[sp.Expr],
) -> list[int]:
    """For each mode by number the root it belongs to."""
    reader, _, bases, linear = linear_part(replace(working, rates=[]), layout, shown, found)
    return [k for k in numbering(linear, bases, reader, found, meant) for _ in range(found[k].multiplicity)]


def _matrices(
    equations: list[sp.Expr], layout: Layout, shown: Mapping[sp.Symbol, sp.Expr]
) -> tuple[sp.Matrix, sp.Matrix, sp.Matrix]:
    reader = Reader(equations, (*layout.jets, layout.small), shown)
    tables = [tabulate(reader, x, layout) for x in equations]
    mass, damping, stiffness = (matrix(tables, reader, order) for order in (2, 1, 0))
    return mass, damping, stiffness


def _refused(
    modes: Mapping[sp.Symbol, int],
    mode: int,
    value: sp.Expr,
    matrices: tuple[sp.Matrix, sp.Matrix, sp.Matrix],
    layout: Layout,
) -> ProblemError:
    """What to write instead of a relation that no change of the stiffness alone makes exact."""
    text = (
        "a relation gives the frequency of a mode of equations with first derivatives at leading order, or of several "
        "modes at once, which no change of the stiffness alone makes exact: split a parameter of the equations "
        "instead, "
    )
    ratio = next((r for s in modes if (r := value.subs(layout.small, 0) / s).is_Rational), None)
    found = critical_value(*matrices, ratio) if ratio is not None and len(modes) == 2 and ratio != 1 else None
    if found is None:
        return ProblemError(
            f"{text}such as resonances={{k: k_c + {layout.small}*sigma}} with the value k_c at which the leading order "
            "is resonant and a symbol k in the place of a number; where k_c is no rational function of the other "
            "parameters, write two of them in terms of a frequency w, so that det L_0 vanishes at both frequencies"
        )
    name = next(s for s, a in modes.items() if a == mode)
    return ProblemError(
        f"{text}here resonances={{{found[0]}: {found[1]} + {layout.small}*sigma}}, at which {name} = "
        f"{value.subs(layout.small, 0)} exactly; sigma then detunes {found[0]}"
    )


def _shifted(
    equations: list[sp.Expr], layout: Layout, shown: Mapping[sp.Symbol, sp.Expr], mode: Found, value: sp.Expr
) -> list[sp.Expr]:
    reader = Reader(equations, (*layout.jets, layout.small), shown)
    tables = [tabulate(reader, x, layout) for x in equations]
    mass, stiffness = (matrix(tables, reader, order) for order in (2, 0))
    adjoint = (stiffness - mode.frequency**2 * mass).adjugate()
    share = mass * adjoint * mass / (adjoint * mass).trace()
    jets = {jet: s for s, jet in layout.jets.items()}
    result = []
    for k, (x, table) in enumerate(zip(equations, tables, strict=True)):
        scale = layout.small ** leading_terms(table)[0] * (sp.expand(value**2) - mode.frequency**2)
        result.append(x + scale * sp.Add(*(share[k, j] * jets[j, 0] for j in range(len(tables)))))
    return result
