"""The residual of a published expansion as a short SymPy script checks it: put in, multiply out, collect powers of ε.

    u = Σ εⁿ U_n(A, Ā, t),    du/dt = ∂u/∂t + (dA/dt) ∂u/∂A + (dĀ/dt) ∂u/∂Ā

for one oscillator. The coefficients of ε⁰ … ε^N must vanish, identically in every symbol.
"""

from __future__ import annotations

import sympy as sp

__all__ = ["residual_coefficients"]

B = sp.Symbol("Abar")


def residual_coefficients(
    equation: sp.Expr,
    unknown: sp.Expr,
    small: sp.Symbol,
    amplitude: sp.Symbol,
    field: sp.Expr,
    flow: sp.Expr,
    order: int,
) -> list[sp.Expr]:
    """[ε⁰], …, [ε^order] of the equation with the field and the slow flow put in."""
    (time,) = unknown.args
    conjugates = {sp.conjugate(amplitude): B}
    u, change = field.xreplace(conjugates), flow.xreplace(conjugates)
    mirrored = sp.expand(change).xreplace({amplitude: B, B: amplitude, sp.I: -sp.I})

    def rate(x: sp.Expr) -> sp.Expr:
        return sp.diff(x, time) + change * sp.diff(x, amplitude) + mirrored * sp.diff(x, B)

    first = rate(u)
    second = rate(first)
    put_in = equation.xreplace({unknown.diff(time, 2): second, unknown.diff(time): first}).xreplace({unknown: u})
    expanded = sp.expand(put_in)
    return [expanded.coeff(small, n) for n in range(order + 1)]
