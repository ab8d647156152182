"""Symbolic parameters, drives and resonance, in units of a time that does not depend on the library.

Compared: `expand` for one oscillator with four symbolic parameters to order 10, for two coupled oscillators with
symbolic frequencies to order 4 (small divisors such as 2ω_1 − ω_2 appear), for a driven cubic oscillator at primary
resonance and for a detuned 1:2 internal resonance to order 6, with the order-20 time of
`opponents.flint_loop` for Van der Pol as the unit. The works differ, so the ratio is no contest: it turns seconds into
a figure that can be followed from machine to machine and from version to version.

Floor: none is known; nobody writes these by hand.
"""

from __future__ import annotations

import multiscale as ms
from benchmarks.problems import driven_cubic, one_to_two, quadratic_and_cubic, two_coupled
from benchmarks.report import FLINT_MISSING, Result, against, has_flint, note
from benchmarks.timing import in_turns

CASES = {
    "one oscillator, ω μ α_2 α_3 symbolic, order 10": (quadratic_and_cubic, 10),
    "two oscillators, symbolic frequencies, quadratic coupling, order 4": (two_coupled, 4),
    "driven cubic oscillator, μ α f σ ω symbolic, order 6": (driven_cubic, 6),
    "1:2 internal resonance, symbolic coefficients and detuning, order 6": (one_to_two, 6),
}


def run() -> list[Result]:
    if not has_flint():
        return [note(case, FLINT_MISSING) for case in CASES]
    from benchmarks.opponents.flint_loop import slow_flow

    candidates = {"loop, order 20": lambda: slow_flow(20)}
    for case, (build, order) in CASES.items():
        problem = build()
        candidates[case] = lambda problem=problem, order=order: ms.expand(problem, order, representation="flint")
    rounds = in_turns(candidates)
    return [against(case, rounds, library=case, opponent="loop, order 20") for case in CASES]
