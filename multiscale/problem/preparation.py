"""The user's equations made ready for reading: orders, drives, relations and slow parameters, one after the other.

    unknowns → jets     orders → powers of ε     analytic forces → Taylor polynomials
    cos, sin of fast angles → phasors            eliminated frequencies → their values
    functions of εt → leaves with known derivatives

Every step is exact, but for functions of small unknowns and for relations that are not polynomial in ε: their series
are cut at `order`.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass

import sympy as sp

from multiscale.errors import ProblemError
from multiscale.problem.averaged.laws import Law
from multiscale.problem.drives import Phasor, with_phasors
from multiscale.problem.ordering import with_orders
from multiscale.problem.relations import Relations, relations_of, taylor
from multiscale.problem.slow_time import SlowLeaves
from multiscale.problem.small.taylor import with_taylor_polynomials
from multiscale.problem.terms import Layout

__all__ = ["Prepared", "prepare"]


@dataclass(frozen=True)
class Prepared:
    """Equations in jets, phasors, leaves and parameters; `rates[k]` is the series Ω_0 … Ω_N of the k-th phasor."""

    equations: list[sp.Expr]
    phasors: tuple[Phasor, ...]
    rates: tuple[tuple[sp.Expr, ...], ...]
    exact_rates: tuple[sp.Expr, ...]
    leaves: SlowLeaves
    relations: Relations
    truncated: bool
    laws: tuple[Law, ...] = ()

    @property
    def shown(self) -> dict[sp.Symbol, sp.Expr]:
        """How phasors and leaves are spelled in messages."""
        return {p.symbol: sp.exp(sp.I * p.angle) for p in self.phasors} | self.leaves.meanings


def prepare(
    equations: Sequence[sp.Expr],
    layout: Layout,
    time: sp.Symbol,
    orders: Mapping[sp.Symbol, int],
    resonances: Sequence[tuple[sp.Expr, sp.Expr]],
    unknowns: Sequence[sp.Expr],
    shown: Mapping[sp.Symbol, sp.Expr],
    order: int,
    modes: Mapping[sp.Symbol, int],
) -> Prepared:
    """`orders` concern jets and parameters, `modes` are symbols for natural frequencies.

    Raises `UnsupportedTermError`, `ProblemError` or `ResonanceError`."""
    small = layout.small
    carried = {s: small**q * s for s, q in orders.items()}
    plain = with_orders(list(equations), orders, small)
    plain, cut = with_taylor_polynomials(plain, layout, time, orders, shown, order)
    plain, phasors = with_phasors(plain, time, small, set(layout.jets))
    drives = set().union(*(p.rate.free_symbols for p in phasors)) - {time, small}
    known = set().union(*(x.free_symbols for x in equations))
    relations = relations_of(resonances, unknowns, small, drives, known, carried, modes) if resonances else Relations()
    _check_used(relations, plain, phasors)
    leaves = SlowLeaves(time, small, shown=shown)
    result = []
    for equation in plain:
        # Slow time first, so that series in ε are taken at fixed εt.
        replaced, was_cut = relations.apply(leaves.scaled(equation), small, order)
        cut = cut or was_cut
        result.append(leaves.read(replaced))
    rates, exact = [], []
    for phasor in phasors:
        rate = leaves.read(_exactly(leaves.scaled(phasor.rate), relations))
        exact.append(rate)
        polynomial = rate.is_polynomial(small)
        cut = cut or not polynomial
        depth = max(order, sp.degree(rate, small)) if polynomial and small in rate.free_symbols else order
        series = sp.expand(rate if polynomial else taylor(rate, small, order))
        rates.append(tuple(series.coeff(small, n) for n in range(depth + 1)))
    leaves.close(order + 2)
    return Prepared(result, tuple(phasors), tuple(rates), tuple(exact), leaves, relations, cut or bool(leaves.leaves))


def _exactly(rate: sp.Expr, relations: Relations) -> sp.Expr:
    for symbol, value in relations.values:
        rate = rate.subs(symbol, value)
    return rate


def _check_used(relations: Relations, equations: list[sp.Expr], phasors: Sequence[Phasor]) -> None:
    present = set().union(*(x.free_symbols for x in equations), *(p.rate.free_symbols for p in phasors))
    present |= set().union(*(v.free_symbols for _, v in (*relations.values, *relations.frequencies)))
    for symbol, value in relations.values:
        if symbol not in present:
            raise ProblemError(
                f"the relation for {symbol} = {value} concerns a symbol that the equations do not contain"
            )
