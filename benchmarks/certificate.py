"""`certify` in units of the work it certifies, and against the residual multiplied out by SymPy.

Compared, at order 6 with symbolic parameters: expansion and certificate with the expansion alone, and with the
expansion and its published expressions written out, without which nothing can be certified. Then, at orders where that
ends, expansion and certificate with expansion and `opponents.plain_residual`, which puts the published expressions into
the equation and multiplies out. SymPy's cache is emptied before every call.

The two checks differ in kind: a symbolic residual that vanishes is a proof; a certificate is evidence at random
points in 130 digits and more. But it covers drives at their exact phase, several modes, and functions that cannot be
multiplied out.

Floor: writing out the published expressions.
"""

from __future__ import annotations

from collections.abc import Callable

import sympy as sp

import multiscale as ms
from benchmarks.opponents.plain_residual import residual_coefficients
from benchmarks.problems import damped_duffing, driven_cubic, one_to_two, quadratic_and_cubic
from benchmarks.report import Result, against
from benchmarks.timing import empty_sympy_cache, in_turns

ORDER = 6
CASES: dict[str, Callable[[], ms.Problem]] = {
    "damped cubic": damped_duffing,
    "quadratic and cubic": quadratic_and_cubic,
    "driven cubic": driven_cubic,
    "1:2 internal resonance": one_to_two,
}
PLAIN_ORDERS = (1, 2, 3)


def _certified(problem: ms.Problem, order: int) -> None:
    ms.certify(ms.expand(problem, order)).require()


def _multiplied_out(problem: ms.Problem, order: int) -> None:
    result = ms.expand(problem, order)
    (unknown,), (equation,), (A,) = problem.unknowns, problem.equations, result.symbols.A
    field, flow = result.solution("complex")[unknown], result.slow_flow.complex[A]
    left = residual_coefficients(equation, unknown, problem.small, A, field, flow, order)
    if any(sp.expand(x) != 0 for x in left):
        raise RuntimeError(f"the residual multiplied out does not vanish at order {order}")


def _written(problem: ms.Problem, order: int) -> None:
    result = ms.expand(problem, order)
    result.solution("complex")
    _ = result.slow_flow.complex


def run() -> list[Result]:
    results = []
    for name, build in CASES.items():
        problem = build()
        rounds = in_turns(
            {
                "library": lambda problem=problem: _certified(problem, ORDER),
                "expand": lambda problem=problem: ms.expand(problem, ORDER),
                "written": lambda problem=problem: _written(problem, ORDER),
            },
            repeats=5,
            prepare=empty_sympy_cache,
        )
        case = f"{name}, order {ORDER}: with certificate, in units of"
        results.append(against(f"{case} expansion", rounds, opponent="expand"))
        results.append(against(f"{case} published expansion", rounds, opponent="written"))
    problem = damped_duffing()
    for order in PLAIN_ORDERS:
        rounds = in_turns(
            {
                "library": lambda order=order: _certified(problem, order),
                "opponent": lambda order=order: _multiplied_out(problem, order),
            },
            repeats=5,
            prepare=empty_sympy_cache,
        )
        case = f"damped cubic, order {order}: residual multiplied out by SymPy"
        results.append(against(case, rounds, sense="times faster"))
    return results
