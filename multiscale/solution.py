"""The uniform approximation u = U_0 + εU_1 + … in slow variables and time."""

from __future__ import annotations

import sympy as sp

from multiscale.computed import Computation, Finished
from multiscale.level import Views
from multiscale.problem import Problem
from multiscale.symbols import Symbols

__all__ = ["FORMS", "solution"]

FORMS = ("polar", "complex", "cartesian")


def solution(
    problem: Problem, computation: Computation, views: Views, symbols: Symbols, form: str, order: int
) -> dict[sp.Expr, sp.Expr]:
    """{unknown: Σ εⁿ U_n, n = 0 … order}."""
    build = {"polar": _polar, "complex": _complex, "cartesian": _cartesian}[form]
    return {
        u: sp.Add(
            *(
                problem.small**n * build(computation.field(n, k), problem, computation, views, symbols)
                for n in range(order + 1)
            )
        )
        for k, u in enumerate(problem.unknowns)
    }


def _complex(finished: Finished, problem: Problem, computation: Computation, views: Views, symbols: Symbols) -> sp.Expr:
    return views.field(finished).subs(symbols.T[0], problem.time)


def _polar(finished: Finished, problem: Problem, computation: Computation, views: Views, symbols: Symbols) -> sp.Expr:
    angles = [w * problem.time + b for w, b in zip(problem.natural_frequencies, symbols.beta, strict=True)]
    terms = []
    for m, c in finished.items():
        turns = tuple(m[2 * k] - m[2 * k + 1] for k in range(len(m) // 2))
        if turns < tuple(-x for x in turns):
            continue
        size = sp.Mul(
            sp.Rational(2 if any(turns) else 1, 2 ** sum(m)),
            *(a ** (m[2 * k] + m[2 * k + 1]) for k, a in enumerate(symbols.a)),
        )
        angle = sp.Add(*(n * x for n, x in zip(turns, angles, strict=True)))
        terms.append(
            size * (views.writer.quotient(c.real) * sp.cos(angle) - views.writer.quotient(c.imag) * sp.sin(angle))
        )
    return sp.Add(*terms)


def _cartesian(
    finished: Finished, problem: Problem, computation: Computation, views: Views, symbols: Symbols
) -> sp.Expr:
    """With z = A e^{iωt} = ½ (P − iQ): P = p cos ωt + q sin ωt, Q = q cos ωt − p sin ωt."""
    rotated = []
    for p, q, w in zip(symbols.p, symbols.q, problem.natural_frequencies, strict=True):
        cosine, sine = sp.cos(w * problem.time), sp.sin(w * problem.time)
        rotated.append((p * cosine + q * sine, q * cosine - p * sine, p**2 + q**2))
    terms = []
    for m, c in finished.items():
        turns = tuple(m[2 * k] - m[2 * k + 1] for k in range(len(m) // 2))
        if turns < tuple(-x for x in turns):
            continue
        real, imag = sp.Integer(1), sp.Integer(0)
        size = sp.Rational(2 if any(turns) else 1, 2 ** sum(m))
        for (P, Q, radius), k, up, down in zip(rotated, turns, m[::2], m[1::2], strict=True):
            size *= radius ** min(up, down)
            y = -Q if k > 0 else Q
            for _ in range(abs(k)):
                real, imag = real * P - imag * y, real * y + imag * P
        terms.append(size * (views.writer.quotient(c.real) * real - views.writer.quotient(c.imag) * imag))
    return sp.Add(*terms)
