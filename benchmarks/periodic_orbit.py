"""The limit cycle of Van der Pol alone: `periodic_series` against Lindstedt loops made for that equation alone.

Compared: `multiscale.periodic_series(problem, order)`, which knows any polynomial oscillator, in exact rationals on
FLINT, and `opponents.lindstedt_loop`, which has the equation, its unit frequency and the parity of its levels built in
and calculates every harmonic of every level, in rationals or in balls of 600 bits. All give ω_0 … ω_N; the library also
gives the amplitude, all harmonics to half the order, and SymPy numbers, which is counted in.

At order 164 the library in rationals, the library to 100 digits and the loop in balls are timed once each, in processor
time; with ``--long`` the loop in rationals is too, otherwise its time there is extrapolated by the power law through
orders 40 and 80. The loop in balls loses about half its bits on the way; ω_164 is left with some 90 digits.

Floor: the loops. Only harmonics that can act on the last frequency are needed, and whole runs of levels can be
multiplied at once.
"""

from __future__ import annotations

from math import log
from time import process_time
from typing import Any

import sympy as sp

import multiscale as ms
from benchmarks.problems import van_der_pol
from benchmarks.report import FLINT_MISSING, Figure, Result, against, has_flint, note
from benchmarks.timing import in_turns

ORDERS = (40, 80)
LONGEST = 164
BITS = 600
TARGET = 1.0
CASE = "Van der Pol limit cycle"


def _check(problem: ms.Problem, frequency: Any, order: int) -> None:
    series = ms.periodic_series(problem, order).frequency_coefficients
    by_hand = tuple(sp.Rational(int(x.p), int(x.q)) for x in frequency(order))
    if series != by_hand:
        raise RuntimeError(f"library and loop disagree at order {order}")


def _timed(call: Any) -> tuple[float, Any]:
    start = process_time()
    found = call()
    return process_time() - start, found


def _check_balls(exact: Any, balls: Any) -> None:
    """The rational coefficients lie in the balls, as far as floats can tell."""
    for x, ball in zip(exact, balls, strict=True):
        wanted, found = float(x), float(ball.mid())
        if abs(found - wanted) > 1e-12 * abs(wanted):
            raise RuntimeError(f"library and loop in balls disagree: {wanted} and {found}")


def _longest(problem: ms.Problem, frequency: Any, rational: tuple[float, str]) -> list[Result | Figure]:
    """One run each at the highest order; `rational` is the time of the loop in rationals and how it was found."""
    exact, series = _timed(lambda: ms.periodic_series(problem, LONGEST))
    rounded, _ = _timed(lambda: ms.periodic_series(problem, LONGEST, digits=100))
    balls, found = _timed(lambda: frequency(LONGEST, BITS))
    _check_balls(series.frequency_coefficients, found)
    results: list[Result | Figure] = []
    for label, own in (("exact", exact), ("100 digits", rounded)):
        for opponent, (seconds, text) in (
            ("loop in rationals", rational),
            (f"loop in balls of {BITS} bits", (balls, "one run each")),
        ):
            case = f"{CASE}, {label}, order {LONGEST}, {opponent}"
            results.append(Result(case, own, seconds, own / seconds, target=TARGET, note=text))
    return results


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
    text = f"one run; the loop extrapolated with the power {power:.1f} of the order"
    rational = (loop[80] * (LONGEST / 80) ** power, text)
    if long:
        rational = (_timed(lambda: frequency(LONGEST))[0], "one run each")
    return [*results, *_longest(problem, frequency, rational)]
