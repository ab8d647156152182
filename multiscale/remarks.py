"""What a careful analyst would say about a result: orderings that lose something, assumptions that were made."""

from __future__ import annotations

import sympy as sp

from multiscale.computed import Computation
from multiscale.problem import Problem

__all__ = ["incomplete_cubic", "remarks"]


def remarks(problem: Problem, computation: Computation) -> tuple[str, ...]:
    """The remarks, most important first."""
    cubic = incomplete_cubic(problem, computation)
    found = [*([cubic] if cubic else []), *_lost_parameters(problem, computation), *_assumptions(computation)]
    return tuple(found)


def _even_terms(computation: Computation) -> bool:
    return any(
        len(term.factors) % 2 == 0 and term.factors for equation in computation.canonical.force for term in equation
    )


def incomplete_cubic(problem: Problem, computation: Computation) -> str | None:
    """Order 1 with quadratic terms is a common trap: the shift they cause appears at order 2."""
    if computation.order > 1 or not _even_terms(computation):
        return None
    return (
        "order 1 with even (quadratic) terms: they contribute to the frequency only from the second order on, "
        f"so the effective cubic coefficient is incomplete; use order=2 or more in {problem.small}"
    )


def _lost_parameters(problem: Problem, computation: Computation) -> list[str]:
    """Parameters that appear in the equations but nowhere in the result."""
    c = computation
    finished = [c.change(n, a) for n in range(1, c.order + 1) for a in range(c.modes)]
    finished += [c.field(n, k) for n in range(c.order + 1) for k in range(c.modes)]
    meanings = dict(c.canonical.meanings)
    used: set[sp.Symbol] = set()
    used.update(*(w.free_symbols for w in problem.natural_frequencies))
    names = {
        name
        for f in finished
        for x in f.values()
        for q in (x.real, x.imag)
        for p in (q.numerator, *(d for d, _ in q.denominator))
        for m, _ in p
        for name, _ in m
    }
    used.update(*(meanings[name].free_symbols for name in names))
    lost = [s for s in problem.parameters if s not in used]
    return [f"{s} has no effect up to order {c.order}: it enters at a higher order, or cancels" for s in lost]


def _assumptions(computation: Computation) -> list[str]:
    bases = computation.canonical.bases
    found = [f"{name} is assumed to be rationally independent of the other frequencies" for name in bases.assumed]
    for frequency in computation.canonical.frequencies:
        if not frequency.is_positive:
            found.append(f"the natural frequency {frequency} is assumed to be positive")
    return found
