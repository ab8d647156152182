"""The Van der Pol slow flow as a short SymPy script has it: complex exponentials, expand, collect by hand.

    u'' + ε (u² − 1) u' + u = 0,    u = Σ εⁿ U_n(T_0, A, Ā),    d/dt = Σ εⁿ D_n,    D_nA and D_nĀ functions of A and Ā

At level n everything known is written out and expanded, the terms are sorted by their harmonic; the first harmonic
gives D_nA and the others give U_n.
"""

from __future__ import annotations

import sympy as sp

__all__ = ["slow_flow"]

A, B = sp.symbols("A Abar")
FAST = sp.Symbol("T_0", real=True)


def _conjugate(expression: sp.Expr) -> sp.Expr:
    return expression.xreplace({A: B, B: A, sp.I: -sp.I})


def _harmonics(expression: sp.Expr) -> dict[int, sp.Expr]:
    """{k: coefficient of exp(i k T_0)} of an expanded sum."""
    found: dict[int, list[sp.Expr]] = {}
    for term in sp.Add.make_args(expression):
        coefficient, wave = term.as_independent(FAST)
        k = int(sp.diff(wave, FAST) / (sp.I * wave))
        found.setdefault(k, []).append(coefficient)
    return {k: sp.Add(*terms) for k, terms in found.items()}


def slow_flow(order: int) -> list[sp.Expr]:
    """[D_1A, …, D_orderA]."""
    fields = [A * sp.exp(sp.I * FAST) + B * sp.exp(-sp.I * FAST)]
    changes: list[sp.Expr] = [sp.Integer(0)]

    def derivative(k: int, f: sp.Expr) -> sp.Expr:
        if k == 0:
            return sp.diff(f, FAST)
        return changes[k] * sp.diff(f, A) + _conjugate(changes[k]) * sp.diff(f, B)

    for n in range(1, order + 1):
        # [εⁿ] u'' and [εⁿ⁻¹] (u² − 1) u', without U_n and D_nA.
        known = sp.Add(
            *(
                derivative(i, derivative(j, fields[n - i - j]))
                for i in range(n)
                for j in range(min(n, n - i + 1))
                if i + j > 0
            )
        )
        damping = sp.Add(
            *(
                fields[a] * fields[b] * derivative(n - 1 - a - b - c, fields[c])
                for a in range(n)
                for b in range(n - a)
                for c in range(n - a - b)
            )
        ) - sp.Add(*(derivative(n - 1 - c, fields[c]) for c in range(n)))
        parts = _harmonics(sp.expand(known + damping))
        changes.append(sp.expand(parts.pop(1, sp.Integer(0)) * sp.I / 2))
        parts.pop(-1, None)
        fields.append(sp.Add(*(sp.expand(c) / (k**2 - 1) * sp.exp(sp.I * k * FAST) for k, c in parts.items())))
    return changes[1:]
