"""Van der Pol to order 30: `expand` against a loop on FLINT polynomials made for that equation alone.

Compared: `multiscale.expand(problem, 30, representation="flint")`, which knows any polynomial oscillator, and
`opponents.flint_loop`, which has the equation, its unit frequency and the parity of its coefficients built in. Both end
with polynomials that have not been turned into SymPy expressions. The growth of both with the order is drawn.

Floor: the loop. It spends nearly all its time inside FLINT, so a ratio near 1 says that generality costs nothing.
"""

from __future__ import annotations

from typing import Any

import sympy as sp

import multiscale as ms
from benchmarks.problems import van_der_pol
from benchmarks.report import FLINT_MISSING, Figure, Result, against, has_flint, note
from benchmarks.timing import in_turns

ORDERS = (5, 10, 15, 20, 25, 30)
TARGET = 1.5


def _check(problem: ms.Problem, slow_flow: Any) -> None:
    order = 8
    for n, (change, by_hand) in enumerate(
        zip(ms.expand(problem, order).slow_flow.by_scale.values(), slow_flow(order), strict=True), start=1
    ):
        ((amplitude, value),) = change.items()
        monomials = [
            sp.Rational(int(c.p), int(c.q)) * amplitude ** m[0] * sp.conjugate(amplitude) ** m[1]
            for m, c in by_hand.to_dict().items()
        ]
        if sp.expand(value - sp.I ** (n + 1) * sp.Add(*monomials)) != 0:
            raise RuntimeError(f"library and loop disagree about D_{n}A")


def _growth(results: list[Result]) -> Figure:
    def draw(axes: Any) -> None:
        axes.semilogy(ORDERS, [r.library for r in results], "o-", label="expand")
        axes.semilogy(ORDERS, [r.opponent for r in results], "s--", label="loop for this equation alone")
        axes.set(xlabel="order", ylabel="seconds", title="Van der Pol, general amplitude, FLINT")
        axes.grid(visible=True, which="both", alpha=0.3)
        axes.legend()

    return Figure("growth_with_order", draw)


def run() -> list[Result | Figure]:
    if not has_flint():
        return [note("Van der Pol, orders 5 … 30", FLINT_MISSING)]
    from benchmarks.opponents.flint_loop import slow_flow

    problem = van_der_pol()
    _check(problem, slow_flow)
    results = []
    for order in ORDERS:
        rounds = in_turns(
            {
                "library": lambda order=order: ms.expand(problem, order, representation="flint"),
                "opponent": lambda order=order: slow_flow(order),
            }
        )
        results.append(against(f"order {order}", rounds, target=TARGET if order == ORDERS[-1] else None))
    return [*results, _growth(results)]
