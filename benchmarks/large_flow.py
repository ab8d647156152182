"""A slow flow of more than a hundred thousand terms: how long it takes to expand, to generate and to call.

The problem is `problems.three_resonant`: three oscillators in internal resonance, a general quartic potential and
damping, eighteen symbolic coefficients; order 4 (order 3, with some 14000 terms, for the comparison). Terms are those
of the numerators of D_nA, finished and over common denominators.

Compared: `slow_flow.to_numpy("cartesian")` with `sympy.lambdify(..., cse=True)` of the same flow as SymPy expressions
(`slow_flow.cartesian`, which the opponent is given ready-made), with scalars from `math`: time to generate, time per
call at one state. The opponent's time grows faster than linearly, so it is run at order 3; with ``--long`` also at
order 4, where it takes many minutes.
"""

from __future__ import annotations

from collections.abc import Callable
from functools import partial
from time import perf_counter
from typing import Any

import numpy as np
import sympy as sp

import multiscale as ms
from benchmarks.problems import three_resonant
from benchmarks.report import Result, against, alone, note
from benchmarks.timing import Rounds, in_turns
from multiscale.codegen.module import module_source

ORDER = 4
COMPARED = 3


def _terms(result: ms.Expansion) -> int:
    c = result.computation
    flows = [c.flow(n, a) for n in range(1, c.order + 1) for a in range(c.modes)]
    return sum(len(q.numerator) for flow in flows for x in flow.values() for q in (x.real, x.imag))


def _once(name: str, call: Callable[[], Any]) -> tuple[Any, Rounds]:
    """What takes long is done once."""
    start = perf_counter()
    value = call()
    return value, Rounds({name: [perf_counter() - start]})


def run(long: bool = False) -> list[Result]:
    problem = three_resonant()
    estimate, estimating = _once("library", lambda: ms.estimate_terms(problem, ORDER))
    result, expanding = _once("library", lambda: ms.expand(problem, ORDER))
    actual = sum(sum(result.computation.size(n)) for n in range(ORDER + 1))
    terms, finishing = _once("library", lambda: _terms(result))
    rhs, generating = _once("library", result.slow_flow.to_numpy)
    source, writing = _once("library", lambda: module_source(result, functions=["rhs", "jacobian"]))
    values, state = _arguments(rhs)
    bound, binding = _once("library", lambda: rhs.bind(dict(zip(rhs.parameters, values, strict=True))))
    calling = in_turns({"library": partial(rhs, 0.0, state, *values)}, repeats=5)
    bound_calling = in_turns({"library": partial(bound, 0.0, state)}, repeats=5)
    told = f"predicted {estimate.total} terms in fields and D_nA after {estimate.computed} levels, found {actual}"
    rows = [
        alone(f"order {ORDER}: estimate of the number of terms", estimating, note=told),
        alone(f"order {ORDER}: expand", expanding),
        alone(f"order {ORDER}: coefficients of the slow flow reduced", finishing, note=f"{terms} terms"),
        alone(f"order {ORDER}: function generated and compiled", generating, note=f"{len(rhs.source)} characters"),
        alone(f"order {ORDER}: one call", calling),
        alone(f"order {ORDER}: parameters fixed, coefficients worked out", binding),
        alone(f"order {ORDER}: one call at fixed parameters", bound_calling),
        alone(f"order {ORDER}: module with rhs and jacobian", writing, note=f"{len(source)} characters"),
    ]
    return rows + _compared(COMPARED) + (_compared(ORDER) if long else [])


def _arguments(function: ms.NumpyFunction) -> tuple[tuple[float, ...], np.ndarray]:
    rng = np.random.default_rng(1)
    return tuple(rng.uniform(0.3, 0.9, len(function.parameters)).tolist()), rng.normal(size=function.size)


def _compared(order: int) -> list[Result]:
    result = ms.expand(three_resonant(), order)
    terms = _terms(result)
    rhs, generating = _once("library", result.slow_flow.to_numpy)
    flow = result.slow_flow.cartesian
    pairs = zip(result.symbols.p, result.symbols.q, strict=True)
    state = [x for pair in pairs for x in pair]
    symbols = {str(s.name): s for s in (*result.problem.parameters, result.problem.small)}
    arguments = [*state, *(symbols[name] for name in rhs.parameters)]
    other, lambdifying = _once(
        "opponent", lambda: sp.lambdify(arguments, [flow[x] for x in state], modules="math", cse=True)
    )
    values, y = _arguments(rhs)
    if not np.allclose(other(*y, *values), rhs(0.0, y, *values), rtol=1e-9):
        raise RuntimeError("the opponent and the generated function disagree")
    bound = rhs.bind(dict(zip(rhs.parameters, values, strict=True)))
    calls = {
        "library": partial(rhs, 0.0, y, *values),
        "bound": partial(bound, 0.0, y),
        "opponent": partial(other, *y.tolist(), *values),
    }
    calling = in_turns(calls, repeats=5)
    made = Rounds(dict(generating.seconds) | dict(lambdifying.seconds))
    case = f"order {order}, {terms} terms"
    return [
        against(f"{case}: generated, against lambdify(cse=True)", made, sense="times faster"),
        against(f"{case}: one call, against lambdify(cse=True)", calling, sense="times faster"),
        against(f"{case}: one call at fixed parameters", calling, library="bound", sense="times faster"),
        *([] if order == ORDER else [note(f"order {ORDER} by lambdify", "run with --long: takes many minutes")]),
    ]
