"""Van der Pol to order 6: `expand` against the short SymPy script that people write for it.

Compared: `multiscale.expand(problem, 6)` with either representation, and `opponents.plain_sympy`, which multiplies out
complex exponentials with `sympy.expand` and collects harmonics by hand. Both give D_1A … D_6A and U_1 … for general
amplitude. What `expand` leaves until it is asked for, SymPy expressions of the slow flow, is timed beside it, and so is
the reading of the equations. Both sides begin every repeat with an empty SymPy cache, as a script does.

SymPy calculates with FLINT integers when python-flint is installed, on both sides. The same comparison is therefore
made once more in a process of its own with Python integers, which is what an installation without python-flint has.

Floor: the opponent of `against_flint_loop` needs under a millisecond for order 6.
"""

from __future__ import annotations

import json
import os
import subprocess
import sys
from dataclasses import asdict
from pathlib import Path

import sympy as sp
from sympy.external.gmpy import GROUND_TYPES

import multiscale as ms
from benchmarks.opponents.plain_sympy import A, B, slow_flow
from benchmarks.problems import van_der_pol
from benchmarks.report import FLINT_MISSING, Result, against, alone, has_flint, note
from benchmarks.timing import empty_sympy_cache, in_turns

ORDER = 6
TARGETS = {"flint": 1000.0, "sympy": 150.0}
HERE = Path(__file__).parents[1]


def _expressions(problem: ms.Problem, representation: str) -> dict:
    return ms.expand(problem, ORDER, representation=representation).slow_flow.by_scale


def _check(problem: ms.Problem, representation: str) -> None:
    by_hand = slow_flow(ORDER)
    for n, change in _expressions(problem, representation).items():
        (amplitude,) = change
        value = change[amplitude].subs({sp.conjugate(amplitude): B}).subs(amplitude, A)
        if sp.expand(value - by_hand[n - 1]) != 0:
            raise RuntimeError(f"library and script disagree about D_{n}A")


def measure(representations: list[str]) -> list[Result]:
    """The comparison with SymPy's ground types as they are in this process."""
    problem = van_der_pol()
    for representation in representations:
        _check(problem, representation)
    candidates = {"script": lambda: slow_flow(ORDER), "problem": van_der_pol}
    for r in representations:
        candidates[f"expand {r}"] = lambda r=r: ms.expand(problem, ORDER, representation=r)
        candidates[f"written {r}"] = lambda r=r: _expressions(problem, r)
    rounds = in_turns(candidates, repeats=5, prepare=empty_sympy_cache)
    integers = {"python": "Python", "flint": "FLINT", "gmpy": "GMP"}[GROUND_TYPES]
    results = [alone(f"Problem(…), SymPy on {integers} integers", rounds, "problem")]
    for r in representations:
        where = f"{r} representation" + (f" on {integers} integers" if r == "sympy" else "")
        for what, target in (("expand", TARGETS[r]), ("written", None)):
            case = f"{where}: " + ("expand" if what == "expand" else "expand, and D_nA as SymPy")
            sides = {"library": f"{what} {r}", "opponent": "script"}
            results.append(against(case, rounds, **sides, sense="times faster", target=target))
    return results


def without_flint() -> list[Result]:
    """`measure` in a process where SymPy has Python integers."""
    command = [sys.executable, "-m", "benchmarks.against_plain_sympy"]
    variables = os.environ | {"SYMPY_GROUND_TYPES": "python"}
    answer = subprocess.run(command, env=variables, cwd=HERE, capture_output=True, text=True, check=True)
    return [Result(**fields) for fields in json.loads(answer.stdout)]


def run() -> list[Result]:
    results = measure(["flint", "sympy"] if has_flint() else ["sympy"])
    if not has_flint():
        results.append(note("flint representation", FLINT_MISSING))
    return results if GROUND_TYPES == "python" else results + without_flint()


if __name__ == "__main__":
    print(json.dumps([asdict(result) for result in measure(["sympy"])]))
