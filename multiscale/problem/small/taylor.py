"""Analytic forces of small unknowns, by their Taylor polynomials to exactly the order needed.

    sin(εu) = εu − ε³u³/6 + … ,       1/(g − εu)² = 1/g² + 2εu/g³ + …

With U_0 … U_N wanted, an equation led by the power ε^p of an acceleration needs its terms through ε^{p+N}. Terms that
are polynomial already are left as they stand; every other term is one truncated series, see `problem.series`. A
function whose argument stays finite as ε → 0 has no such series, and is left to be read, or refused, as it stands.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence

import sympy as sp

from multiscale.errors import UnsupportedTermError
from multiscale.problem.reading import decimals, unsupported
from multiscale.problem.small.series import ROUGH, EpsilonSeries
from multiscale.problem.small.series_arithmetic import BRANCH, KINKED, NotAnalyticError, NotSmallError, needs_series
from multiscale.problem.terms import Layout

__all__ = ["with_taylor_polynomials"]

HIGHEST_LEAD = 60
DRIVEN = 8
"""How many powers of ε beyond the order of an expansion a drive is looked for."""


def with_taylor_polynomials(
    equations: Sequence[sp.Expr],
    layout: Layout,
    time: sp.Symbol,
    orders: Mapping[sp.Symbol, int],
    shown: Mapping[sp.Symbol, sp.Expr],
    order: int,
) -> tuple[list[sp.Expr], bool]:
    """(the equations, polynomial in ε as far as Taylor's series makes them so; whether one was cut).

    `equations` have their powers of ε already, those of `orders` among them. Raises `UnsupportedTermError` for a term
    whose function has no Taylor series at rest.
    """
    small, jets = layout.small, set(layout.jets)
    scaled = {s for s in jets if orders.get(s)}
    result, cut = [], False
    for equation in equations:
        terms = sp.Add.make_args(equation)
        _refuse_kinks(terms, scaled, layout, shown)
        wanted = [x for x in terms if needs_series(x, small, time, jets)]
        exact = {x: decimals(x) for x in wanted}
        series = EpsilonSeries(small, time, jets, slow=not layout.ordered)
        depth = order + _lead(sp.Add(*(exact.get(x, x) for x in terms)), series, layout) if wanted else 0
        polynomials = {}
        for x in wanted:
            try:
                found = _with_drives(series, exact[x], depth)
            except NotSmallError:
                continue
            except NotAnalyticError as error:
                if not layout.ordered and not error.where.free_symbols & jets:
                    continue
                raise _refused(x, error, layout, shown) from None
            polynomials[x] = sp.Add(*(c * small**k for k, c in enumerate(found)))
        cut = cut or bool(polynomials)
        _refuse_singular([polynomials.get(x, x) for x in terms], scaled, layout, shown)
        result.append(sp.Add(*(polynomials.get(x, x) for x in terms)) if polynomials else equation)
    return result, cut


def _with_drives(series: EpsilonSeries, x: sp.Expr, depth: int) -> list[sp.Expr]:
    """x_0 … x_depth, and further to where every function of time in x has appeared: a drive is part of the problem,
    with its relation, also where an expansion of this order does not feel it yet."""
    found = series.coefficients(x, depth)
    wanted = {angle for f in x.atoms(sp.sin, sp.cos) if (angle := _turning(f.args[0], series)) != 0}
    for further in range(depth + 1, depth + DRIVEN + 1):
        if all(any(c.has(angle, -angle) for c in found) for angle in wanted):
            break
        found = series.coefficients(x, further)
    return found


def _turning(angle: sp.Expr, series: EpsilonSeries) -> sp.Expr:
    """The terms of an angle that turn with time whatever the unknowns do."""
    terms = sp.Add.make_args(angle)
    return sp.Add(*(a for a in terms if series.time in a.free_symbols and not a.free_symbols & series.jets))


def _lead(equation: sp.Expr, series: EpsilonSeries, layout: Layout) -> int:
    """The lowest power of ε at which an acceleration stands alone; 0 where none does, which is refused later."""
    found = []
    for jet, (_, derivative) in layout.jets.items():
        if derivative != 2 or jet not in equation.free_symbols:
            continue
        inertia = sp.diff(equation, jet).subs(dict.fromkeys(layout.jets, 0))
        if inertia == 0 or inertia.has(sp.nan, sp.zoo):
            continue
        try:
            found += [next(p for p in range(HIGHEST_LEAD) if series.coefficients(inertia, p)[p] != 0)]
        except (NotAnalyticError, NotSmallError, StopIteration):
            continue
    return min(found, default=0)


def _refuse_kinks(
    terms: Sequence[sp.Expr], scaled: set[sp.Symbol], layout: Layout, shown: Mapping[sp.Symbol, sp.Expr]
) -> None:
    """A small unknown at a kink stays there however small it is: ε·|u| is no power series of the motion."""
    for term in terms:
        for f in sorted(term.atoms(*ROUGH, sp.Pow), key=str):
            if not f.free_symbols & scaled or layout.small in f.free_symbols:
                continue
            if isinstance(f, ROUGH):
                reason = f"{f.func.__name__} has no Taylor series where it has a kink or a jump"
                raise _refused(term, NotAnalyticError(f, reason, KINKED), layout, shown)
            if not f.exp.is_Integer:
                reason = f"the power {f.exp} of something that vanishes at rest has a branch point there"
                raise _refused(term, NotAnalyticError(f, reason, BRANCH), layout, shown)


def _refuse_singular(
    terms: Sequence[sp.Expr], scaled: set[sp.Symbol], layout: Layout, shown: Mapping[sp.Symbol, sp.Expr]
) -> None:
    """A denominator in a small unknown that nothing cancelled: 1/u, which ε leaves as a power of its own."""
    for term in terms:
        for p in sorted(term.atoms(sp.Pow), key=str):
            if p.exp.is_negative and p.base.free_symbols & scaled:
                reason = "its denominator vanishes at rest, so that it is singular there"
                raise _refused(term, NotAnalyticError(p, reason), layout, shown)


def _refused(
    term: sp.Expr, error: NotAnalyticError, layout: Layout, shown: Mapping[sp.Symbol, sp.Expr]
) -> UnsupportedTermError:
    spelled = {**shown, layout.small: sp.Integer(1)} if layout.ordered else dict(shown)
    where, whole = error.where.xreplace(spelled), term.xreplace(spelled)
    inside = f" (in {where})" if where != whole and where.free_symbols else ""
    return unsupported(whole, f"{error.reason}{inside}", error.remedy)
