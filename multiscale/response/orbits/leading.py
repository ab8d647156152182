"""Where one undriven oscillator gains or loses amplitude first: the condition for the leading amplitude of its orbits.

    D_nA = A Σ_m c_{n,m} |A|^{2m},      a'/a = Σ εⁿ R_n(ρ),   R_n = Σ_m Re c_{n,m} ρ^m,   ρ = |A|² = a²/4

The leading amplitudes of isolated orbits are the positive roots of the first R_p that does not vanish identically. A
motion that is the same backwards in time, about a time of rest or about a passage through zero, has none.
"""

from __future__ import annotations

from dataclasses import dataclass

from multiscale.algebra.quotient import Quotient
from multiscale.computed import Computation, begin
from multiscale.errors import UnsupportedTermError
from multiscale.problem import Problem
from multiscale.problem.averaged.laws import LAW
from multiscale.problem.canonical import Canonical

__all__ = ["SEARCHED", "Leading", "check_single", "is_reversible", "leading_damping", "parts"]

SEARCHED = 12
"""Levels that are searched for damping when the problem is not reversible."""


@dataclass(frozen=True)
class Leading:
    """p and R_p as {m: coefficient of ρ^m}."""

    level: int
    terms: dict[int, Quotient]


def check_single(canonical: Canonical, wanted: str, coupled: bool = False, laws: bool = False) -> None:
    """One oscillator, no drives, no parameters that vary; with `coupled` one mode carried of any number of unknowns.

    Forces that are not polynomial pass with `laws`.
    """
    if coupled and len(canonical.frequencies) != 1:
        raise UnsupportedTermError(
            f"the expansion carries {len(canonical.frequencies)} modes: {wanted} for one mode. Carry one through "
            "`modes` where the others stay at rest, or integrate `slow_flow`"
        )
    if not coupled and (len(canonical.force) != 1 or canonical.operator is not None):
        raise UnsupportedTermError(
            f"the problem has {len(canonical.force)} unknowns: {wanted} for one oscillator. State one equation; for "
            "several, integrate `slow_flow`"
        )
    if not laws and any(d == LAW for terms in canonical.force for term in terms for _, d in term.factors):
        raise UnsupportedTermError(
            f"the problem has a force that is not polynomial: {wanted} for polynomial forces. Find the zeros of da/dt "
            "from slow_flow.to_numpy('polar'), or integrate it"
        )
    if canonical.drives or canonical.slow:
        what = canonical.drives[0].frequency if canonical.drives else "parameters that vary slowly"
        raise UnsupportedTermError(
            f"the problem depends on time ({what}): {wanted} for an autonomous oscillator. Remove the time dependence"
        )


def is_reversible(canonical: Canonical) -> bool:
    """Whether u(−t) or −u(−t) solves the equation whenever u(t) does."""
    velocities = [sum(d == 1 for _, d in term.factors) for term in canonical.force[0]]
    others = [len(term.factors) - v for term, v in zip(canonical.force[0], velocities, strict=True)]
    return all(v % 2 == 0 for v in velocities) or all(k % 2 == 1 for k in others)


def parts(computation: Computation, level: int) -> tuple[dict[int, Quotient], dict[int, Quotient]]:
    """(R_n, turn) at a level as {m: coefficient}: real and imaginary part of c_{n,m}."""
    change = computation.change(level, 0)
    real = {m[1]: c.real for m, c in change.items() if c.real}
    return real, {m[1]: c.imag for m, c in change.items() if c.imag}


def leading_damping(problem: Problem) -> Leading | None:
    """The first level with damping, None where the problem is reversible or no level up to `SEARCHED` has any."""
    canonical = problem.canonical(SEARCHED)
    if is_reversible(canonical):
        return None
    computation = begin(canonical, "auto")
    for n in range(1, SEARCHED + 1):
        computation = computation.further()
        if real := parts(computation, n)[0]:
            return Leading(n, real)
    return None
