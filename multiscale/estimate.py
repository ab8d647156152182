"""How long an expansion will be, from its first levels alone.

The number of terms N_n of a level grows like the number of monomials of degree proportional to n in a fixed number of
generators, a power of n for large n. The first levels are computed; three of their counts fix c and d in

    N_n = C (n + c)^d

which is then continued. Growth may differ between even and odd levels, so d is also found across both with a usual
value of c, and the larger prediction is taken. Levels that vanish by parity are predicted to vanish.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from math import exp, log

from multiscale.computed import begin
from multiscale.errors import ProblemError
from multiscale.problem import Problem

__all__ = ["TermEstimate", "estimate_terms"]

USUAL_SHIFT = 2.0
"""c where only two counts are known."""


@dataclass(frozen=True)
class TermEstimate:
    """Numbers of terms by level, as the engine works with them (before coefficients are reduced).

    Attributes
    ----------
    fields : tuple of int
        Terms of U_n in all unknowns together, n = 0 … order.
    slow_flow : tuple of int
        Terms of D_nA in all modes together, n = 0 … order; the first is 0.
    computed : int
        Levels up to this one were computed, so their numbers are exact; the others are predicted.
    """

    fields: tuple[int, ...]
    slow_flow: tuple[int, ...]
    computed: int

    @property
    def total(self) -> int:
        """All terms of all levels."""
        return sum(self.fields) + sum(self.slow_flow)


def estimate_terms(problem: Problem, order: int, *, limit: int = 20_000) -> TermEstimate:
    """Predict how many terms `expand` would produce, from the first levels, without computing the long ones.

    Parameters
    ----------
    problem : Problem
    order : int ≥ 1
    limit : int
        Levels are computed as long as fewer terms than this are expected of them, and level 1 always.

    Returns
    -------
    TermEstimate
        Two levels beyond the last computed one, predictions are usually within a factor of three (common practice: a
        million terms take minutes and a few gigabytes).

    Raises
    ------
    ProblemError
        `order` is not an integer ≥ 1.

    Examples
    --------
    >>> import sympy as sp, multiscale as ms
    >>> t = sp.Symbol("t", real=True)
    >>> eps, alpha = sp.symbols("epsilon alpha", positive=True)
    >>> u = sp.Function("u")(t)
    >>> ms.estimate_terms(ms.Problem(u.diff(t, 2) + u + eps*alpha*u**3, u, small=eps), order=3)
    TermEstimate(fields=(2, 2, 4, 6), slow_flow=(0, 1, 1, 1), computed=3)
    """
    if not isinstance(problem, Problem):
        raise ProblemError(f"estimate_terms was given a {type(problem).__name__}: state a multiscale.Problem first")
    if isinstance(order, bool) or not isinstance(order, int) or order < 1:
        raise ProblemError(f"order is {order!r}: expected an integer ≥ 1")
    computation = begin(problem.canonical(order), "auto")
    sizes = [computation.size(0)]
    while computation.order < order:
        n = computation.order + 1
        if n > 1 and _predicted(dict(enumerate(fields for fields, _ in sizes)), n) > limit:
            break
        computation = computation.further()
        sizes.append(computation.size(n))
    computed = computation.order
    columns = []
    for column in zip(*sizes, strict=True):
        known = dict(enumerate(column))
        rest = [_predicted(known, n) for n in range(computed + 1, order + 1)]
        columns.append((*column, *rest))
    return TermEstimate(columns[0], columns[1], computed)


def _predicted(known: Mapping[int, int], n: int) -> int:
    """The count at level n from those at the levels below; level 0 counts only where there is nothing else."""
    counts = {k: x for k, x in known.items() if k}
    alike = [x for k, x in counts.items() if (n - k) % 2 == 0]
    if len(counts) > 2 and alike and not any(alike):
        return 0
    found = [(float(k), log(x)) for k, x in sorted(counts.items()) if x][-3:]
    if len(found) < 2 and known[0]:
        found = [(0.0, log(known[0])), *found]
    if not found:
        return 0
    if len(found) == 1:
        (k, y), shift = found[0], USUAL_SHIFT
        return round(exp(y + y / log(k + shift) * log((n + shift) / (k + shift))))
    return round(exp(_continued(found, float(n))))


def _continued(points: list[tuple[float, float]], n: float) -> float:
    """log N at n from (level, log N) at two or three levels."""
    (k0, y0), (k1, y1), (k2, y2) = points[0], *points[-2:]
    found = [_power_law((k0, y0), (k2, y2), USUAL_SHIFT, n)]
    if len(points) == 3 and y2 > y1:
        shift = _shift(k0, k1, k2, (y1 - y0) / (k1 - k0) * (k2 - k1) / (y2 - y1))
        found += [] if shift is None else [_power_law((k1, y1), (k2, y2), shift, n)]
    return max(found)


def _power_law(first: tuple[float, float], last: tuple[float, float], shift: float, n: float) -> float:
    (k1, y1), (k2, y2) = first, last
    power = max(y2 - y1, 0.0) / log((k2 + shift) / (k1 + shift))
    return y2 + power * log((n + shift) / (k2 + shift))


def _shift(k0: float, k1: float, k2: float, ratio: float) -> float | None:
    """c for which the slopes of log(n + c) before and after k1 have this ratio; None where growth does not slow."""

    def found(c: float) -> float:
        return (log((k1 + c) / (k0 + c)) / (k1 - k0)) / (log((k2 + c) / (k1 + c)) / (k2 - k1))

    low, high = 0.1 - k0, 1e3
    if ratio <= found(high):
        return None
    for _ in range(60):
        middle = (low + high) / 2
        low, high = (middle, high) if found(middle) > ratio else (low, middle)
    return (low + high) / 2
