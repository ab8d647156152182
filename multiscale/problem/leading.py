"""What may stand at leading order: u_k'' + ω_k² u_k, and drives off resonance. Everything else is refused by name."""

from __future__ import annotations

from collections.abc import Sequence

import sympy as sp

from multiscale.algebra.quotient import Quotient, reduced
from multiscale.errors import ProblemError, ResonanceError
from multiscale.forces.polynomial import Term
from multiscale.linear_part import Rate
from multiscale.problem.averaged.laws import LAW
from multiscale.problem.drives import Drive
from multiscale.problem.reading import Reader, unsupported
from multiscale.problem.terms import Entry, Layout, show

__all__ = ["inertia", "is_driven", "misplaced", "own_stiffness", "refuse_resonant_drives"]


def inertia(table: list[Entry], k: int) -> Entry:
    """The leading term in u_k''."""
    return min((e for e in table if e.factors == ((k, 2),)), key=lambda e: e.power)


def is_driven(entry: Entry) -> bool:
    return any("@e" in name for monomial, _ in entry.coefficient for name, _ in monomial)


def own_stiffness(table: list[Entry], k: int, reader: Reader, layout: Layout, power: int) -> Quotient:
    """ω_k² of an equation u_k'' + ω_k² u_k + … = 0."""
    own = [e for e in table if e.factors == ((k, 0),) and e.power == power]
    for e in table:
        at_leading_order = e.power <= power and e.factors != ((k, 2),)
        if at_leading_order and (e not in own or is_driven(e)) and (e.factors or e.power < power):
            raise misplaced(show(e, reader, layout), e, k, power, layout)
    if not own:
        u = reader.show(next(s for s, jet in layout.jets.items() if jet == (k, 0)))
        raise ProblemError(
            f"the oscillator of {u} has zero frequency: its equation needs a restoring term omega**2*u at leading "
            "order. Where the stiffness vanishes at the state of rest (pull-in, buckling) no such expansion exists"
        )
    return reduced(reader.ring, reader.ring.read(dict(own[0].coefficient)))


def misplaced(term: sp.Expr, entry: Entry, k: int | None, power: int, layout: Layout) -> Exception:
    """Why a term cannot stand where it does; `k` is the unknown of its oscillator, None for coupled equations."""
    remedy = (
        f"Raise its order above {power} through `ordering`" if layout.ordered else f"Give it a factor {layout.small}"
    )
    if not entry.factors and not is_driven(entry):
        return unsupported(
            term,
            "a constant force is left, so the state of rest is not zero",
            "Measure the unknown from its state of rest: about={u: u_s} with a new symbol u_s (a parameter is then "
            f"eliminated by the equilibrium), or with its exact value. A small constant force: {remedy[0].lower()}"
            f"{remedy[1:]}",
        )
    if entry.power < power:
        reason = f"its order {entry.power} is below the order {power} of the unknown its equation belongs to"
    elif len(entry.factors) > 1 or entry.factors[0][1] == LAW:
        reason = "a nonlinear term stands at leading order"
    elif is_driven(entry):
        reason = "a parametric drive stands at leading order, where coefficients must be constant or slow"
    elif entry.factors[0] == (k, 1):
        reason = "damping stands at leading order, where the oscillators must be undamped"
    else:
        reason = "it couples the unknowns at leading order, where the oscillators must be uncoupled"
        remedy += ", or use modal coordinates"
    return unsupported(term, reason, remedy)


def refuse_resonant_drives(
    force: Sequence[Sequence[Term]],
    modes: Sequence[Rate],
    drives: Sequence[Drive],
    frequencies: Sequence[sp.Expr | str],
    reached: Sequence[int] | None,
    layout: Layout,
) -> None:
    """A drive of order ε⁰ at a natural frequency has no bounded response.

    `reached[k]` is the mode that the k-th equation drives, None where every equation may drive every mode.
    """
    for k, terms in enumerate(force):
        for monomial, _ in (m for term in terms if not term.factors and not term.power for m in term.coefficient):
            powers = dict(monomial)
            counts = [powers.get(d.generator, 0) - powers.get(f"{d.generator}~", 0) for d in drives]
            rate = tuple(sum(n * d.rate[b] for n, d in zip(counts, drives, strict=True)) for b in range(len(modes[0])))
            both = (rate, tuple(-r for r in rate))
            met = next((a for a in (range(len(modes)) if reached is None else [reached[k]]) if modes[a] in both), None)
            if met is not None:
                combination = sp.Add(*(abs(n) * d.frequency for n, d in zip(counts, drives, strict=True)))
                own = frequencies[met]
                name = "Omega, a symbol of its own for the drive frequency," if combination == own else str(combination)
                raise ResonanceError(
                    f"a drive at leading order has the frequency {combination}, the natural frequency {own} of its "
                    f"oscillator: the divisor {own}**2 - ({combination})**2 vanishes and the response is unbounded. "
                    f"Give the drive a factor {layout.small} (or an order) and declare that {name} is "
                    f"{own} + {layout.small}*sigma through `resonances`"
                )
