"""Forces of several oscillators, or of one that is driven hard: what their average over the torus has to know."""

from __future__ import annotations

from collections.abc import Mapping, Sequence

import sympy as sp

from multiscale.algebra.polynomial import Frozen
from multiscale.forces.polynomial import Term
from multiscale.linear_part import Rate
from multiscale.problem.averaged.laws import Law
from multiscale.problem.averaged.projection import TorusMean
from multiscale.problem.canonical import Canonical
from multiscale.problem.lattice import saturated_basis
from multiscale.problem.reading import unsupported
from multiscale.problem.terms import Layout

__all__ = ["several_phases", "torus_means", "turning_of"]


def turning_of(coefficient: Frozen, canonical: Canonical) -> set[Rate]:
    """The rates of the drives that multiply a law."""
    found = set()
    for monomial, _ in coefficient:
        powers = dict(monomial)
        counts = [powers.get(d.generator, 0) - powers.get(f"{d.generator}~", 0) for d in canonical.drives]
        size = len(canonical.bases.values)
        found.add(tuple(sum(n * d.rate[b] for n, d in zip(counts, canonical.drives, strict=True)) for b in range(size)))
    return found


def several_phases(law: Law, canonical: Canonical, layout: Layout) -> tuple[int, ...] | None:
    """The modes and hard drives of the leading motion of a law, where they are more than one mode alone."""
    modes = sorted({k for k, _ in law.jets(layout)})
    drives = set()
    for k in modes:
        for term in canonical.force[k]:
            if not term.power and not term.factors:
                names = {name.removesuffix("~") for monomial, _ in term.coefficient for name, _ in monomial}
                drives |= {index for index, d in enumerate(canonical.drives) if d.generator in names}
                drives |= {-1} if not all(any("@" in g for g, _ in m) for m, _ in term.coefficient) else set()
    if len(modes) == 1 and not drives:
        return None
    return (*modes, *(len(canonical.force) + index for index in sorted(drives - {-1})))


def torus_means(
    n: int,
    law: Law,
    generators: tuple[int, ...],
    places: Sequence[tuple[int, Term]],
    order: int,
    canonical: Canonical,
    layout: Layout,
    shown: Mapping[sp.Symbol, sp.Expr],
) -> list[TorusMean]:
    """One mean for each equation that the law stands in. Raises `UnsupportedTermError`."""
    rates = [*canonical.bases.rates, *(d.rate for d in canonical.drives)]
    modes = len(canonical.force)

    def refuse(reason: str, remedy: str) -> Exception:
        return unsupported(law.spelled(shown), f"a force of several phases {reason}", remedy)

    moving = [rates[g] for g in generators if g >= modes and any(rates[g])]
    if moving and sp.Matrix(moving).rank() < len(moving):
        raise refuse("meets drives of nearly the same frequency, whose beats it cannot average", "Keep one of them")
    if order > min(t.power for _, t in places):
        raise refuse("is averaged at its leading order only", f"Use order={min(t.power for _, t in places)}")
    if any(any(rate) for _, t in places for rate in turning_of(t.coefficient, canonical)):
        raise refuse("is multiplied by a drive", "Such a product is averaged for forces of one oscillator only")
    real = {jet: sp.Symbol(s.name, real=True) for s, jet in layout.jets.items()}
    means = []
    for k in dict.fromkeys(k for k, _ in places):
        involved = tuple(sorted({*generators, k}))
        names = f"@T{n}.{k}c", f"@T{n}.{k}s"
        mean = TorusMean(
            n,
            k,
            *names,
            law.force,
            tuple((real[jet], jet) for jet in law.jets(layout)),
            involved,
            _zero_combinations(rates, involved),
        )
        means.append(mean)
    return means


def _zero_combinations(rates: Sequence[Rate], generators: Sequence[int]) -> tuple[tuple[int, ...], ...]:
    """A basis of the integer combinations of moving generators whose rate is zero."""
    moving = [g for g in generators if any(rates[g])]
    rows = []
    for vector in sp.Matrix([rates[g] for g in moving]).T.nullspace():
        scale = sp.ilcm(*(x.q for x in vector))
        row = [0] * len(rates)
        for g, x in zip(moving, vector, strict=True):
            row[g] = int(x * scale)
        rows.append(tuple(row))
    return tuple(saturated_basis(rows, len(rates))) if rows else ()
