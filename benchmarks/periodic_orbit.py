"""The limit cycle of Van der Pol alone: `periodic_series` against a Lindstedt loop made for that equation alone.

Compared: `multiscale.periodic_series(problem, order)`, which knows any polynomial oscillator, in exact rationals on
FLINT, and `opponents.lindstedt_loop`, which has the equation, its unit frequency and the parity of its levels built in
and calculates every harmonic of every level in rationals. Both give ω_0 … ω_N; the library also gives the amplitude,
all harmonics to half the order, and SymPy numbers, which is counted in. At order 164 the library is timed once, in
rationals and to 100 digits; with ``--long`` the loop is too, otherwise its time there is extrapolated by the power law
through orders 40 and 80.

Floor: the loop. Only harmonics that can act on the last frequency are needed, a quarter of them, and by symmetry half
of those.
"""

from __future__ import annotations

from math import log
from time import perf_counter
from typing import Any

import sympy as sp

import multiscale as ms
from benchmarks.problems import van_der_pol
from benchmarks.report import FLINT_MISSING, Figure, Result, against, has_flint, note
from benchmarks.timing import in_turns

ORDERS = (40, 80)
LONGEST = 164
TARGET = 1.0
CASE = "Van der Pol limit cycle"


def _check(problem: ms.Problem, frequency: Any, order: int) -> None:
    series = ms.periodic_series(problem, order).frequency_coefficients
    by_hand = tuple(sp.Rational(int(x.p), int(x.q)) for x in frequency(order))
    if series != by_hand:
        raise RuntimeError(f"library and loop disagree at order {order}")


def _seconds(call: Any) -> float:
    start = perf_counter()
    call()
    return perf_counter() - start


def run(long: bool = False) -> list[Result | Figure]:
    if not has_flint():
        return [note(f"{CASE}, orders 40, 80, 164", FLINT_MISSING)]
    from benchmarks.opponents.lindstedt_loop import frequency

    problem = van_der_pol()
    results: list[Result | Figure] = []
    loop: dict[int, float] = {}
    for order in ORDERS:
        _check(problem, frequency, order)
        rounds = in_turns(
            {
                "library": lambda order=order: ms.periodic_series(problem, order),
                "opponent": lambda order=order: frequency(order),
            },
            repeats=5,
        )
        loop[order] = rounds.median("opponent")
        results.append(against(f"{CASE}, exact, order {order}", rounds, target=TARGET))
    power = log(loop[80] / loop[40]) / log(2)
    extrapolated = loop[80] * (LONGEST / 80) ** power
    opponent = _seconds(lambda: frequency(LONGEST)) if long else extrapolated
    text = "one run each" if long else f"one run; the loop extrapolated with the power {power:.1f} of the order"
    for label, digits in (("exact", None), ("100 digits", 100)):
        own = _seconds(lambda digits=digits: ms.periodic_series(problem, LONGEST, digits=digits))
        case = f"{CASE}, {label}, order {LONGEST}"
        results.append(Result(case, own, opponent, own / opponent, target=TARGET, note=text))
    return results
