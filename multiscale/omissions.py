"""What a formula does not show by itself: terms beyond the order, parameters without effect, a mean that moves."""

from __future__ import annotations

from collections.abc import Callable, Iterable

import sympy as sp

from multiscale.computed import Computation, Finished
from multiscale.forces.polynomial import Term
from multiscale.problem import Problem

__all__ = ["drift", "first_order_of", "terms_beyond"]

LONGEST = 120
"""Characters of a formula beyond which a remark refers to `harmonics` instead."""


def terms_beyond(problem: Problem, computation: Computation) -> list[str]:
    """Terms of the equations whose own power of ε lies beyond the order of the expansion."""
    # Squares of a detuning come from a relation, and every order leaves higher ones out.
    meanings = dict(computation.canonical.meanings)
    detunings = {d.detuning for d in problem.detunings}
    beyond: dict[int, list[str]] = {}
    for equation in computation.canonical.force:
        for term in equation:
            generators = {name for monomial, _ in term.coefficient for name, _ in monomial}
            symbols = set().union(*(meanings[name].free_symbols for name in generators if name in meanings))
            if term.power > computation.order and not symbols & detunings:
                beyond.setdefault(term.power, []).append(_factors(problem, term))
    found = []
    for power, names in sorted(beyond.items()):
        kinds = ", ".join(sorted(set(names)))
        found.append(
            f"the terms in {kinds} are of order {power} in {problem.small}: order {computation.order} leaves them out; "
            f"use order={power} or more if they matter"
        )
    return found


def _factors(problem: Problem, term: Term) -> str:
    jets = [problem.unknowns[k].diff(problem.time, d) if d else problem.unknowns[k] for k, d in term.factors]
    return str(sp.Mul(*jets)) if jets else "no unknown (a drive)"


def first_order_of(computation: Computation, symbol: sp.Symbol) -> int | None:
    """The lowest power of ε of the terms and detunings that a parameter stands in; None where it stands in none."""
    canonical = computation.canonical
    below = dict(canonical.spec.reciprocals)
    meanings = dict(canonical.meanings)

    def holds(polynomial: Iterable[tuple[tuple[tuple[str, int], ...], object]]) -> bool:
        names = {name for monomial, _ in polynomial for name, _ in monomial}
        return any(
            holds(below[name]) if name in below else name in meanings and symbol in meanings[name].free_symbols
            for name in names
        )

    powers = [term.power for equation in canonical.force for term in equation if holds(term.coefficient)]
    powers += [n for d in canonical.drives for n, p in enumerate(d.detunings, start=1) if holds(p)]
    return min(powers, default=None)


def drift(problem: Problem, computation: Computation, write: Callable[[Finished], sp.Expr]) -> list[str]:
    """The constant part of each unknown, at the first level where it has one; `write` gives it in real amplitudes."""
    found = []
    for k, u in enumerate(problem.unknowns):
        for n in range(computation.order + 1):
            field = computation.field(n, k)
            constant = {m: c for m, c in field.items() if not any(computation.rate(m))}
            if not constant:
                continue
            mean = problem.small**n * write(constant)
            formula = str(mean) if len(str(mean)) <= LONGEST else f"harmonics(expansion)[{u}][0]"
            found.append(f"the motion is not centred: the mean of {u} is {formula} to order {n}, not zero")
            break
    return found
