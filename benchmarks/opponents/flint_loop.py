"""The Van der Pol hierarchy for general amplitude as a loop on FLINT polynomials, written for this one equation only.

    u'' + ε (u² − 1) u' + u = 0,    z = A e^{iT_0} and w its conjugate

All coefficients of one level are real up to one power of i, so a level needs one rational polynomial, and none has i:

    U_n = iⁿ u_n,    (du/dt)_n = iⁿ⁺¹ v_n,    D_n z = iⁿ⁺¹ g_n,    conjugate of iᵐ p(z, w) = iᵐ (−1)ᵐ p(w, z)
"""

from __future__ import annotations

from typing import Any

from flint import Ordering, fmpq_mpoly_ctx

__all__ = ["slow_flow"]

CONTEXT = fmpq_mpoly_ctx.get(["z", "w"], Ordering.lex)
Z, W = CONTEXT.gens()
ZERO, ONE = CONTEXT.constant(0), CONTEXT.constant(1)


def _with_conjugate(p: Any, power: int) -> Any:
    """iᵐ p plus its conjugate, over iᵐ."""
    mirrored = p.compose(W, Z)
    return p - mirrored if power & 1 else p + mirrored


def _fast(p: Any) -> Any:
    """D_0 over i: each monomial times its harmonic."""
    return Z * p.derivative(0) - W * p.derivative(1)


def _slow(g: list[Any], slopes: list[Any], n: int) -> Any:
    """Σ D_k f_{n−k}, 0 < k < n, from the slopes ∂f/∂z, for f whose level m has the power iᵐ."""
    total = ZERO
    for k in range(1, n):
        total = total + g[k] * slopes[n - k]
    return total


def _square(u: list[Any], n: int) -> Any:
    total = ZERO
    for a in range((n + 1) // 2):
        total = total + u[a] * u[n - a]
    total = 2 * total
    return total if n & 1 else total + u[n // 2] * u[n // 2]


def _solved(residual: Any) -> tuple[Any, Any]:
    """(u_n, g_n) from the residual: u_n = r/(d² − 1) at the harmonics d ≠ ±1, g_n = r/2 at the first."""
    field, change = {}, {}
    for m, c in residual.to_dict().items():
        d = m[0] - m[1]
        if d == 1:
            change[m] = c / 2
        elif d != -1:
            field[m] = c / (d * d - 1)
    return CONTEXT.from_dict(field), CONTEXT.from_dict(change)


def slow_flow(order: int) -> list[Any]:
    """[g_1, …, g_order]; D_nA is iⁿ⁺¹ g_n(A, Ā)."""
    u, v, g = [Z + W], [Z - W], [ZERO]
    u_slopes, v_slopes, squares = [ONE], [ONE], []
    for n in range(1, order + 1):
        squares.append(_square(u, n - 1) - (1 if n == 1 else 0))
        damping = ZERO
        for a in range(n):
            damping = damping + squares[a] * v[n - 1 - a]
        known = _with_conjugate(_slow(g, u_slopes, n), n + 1)
        acceleration = _fast(known) + _with_conjugate(_slow(g, v_slopes, n), n + 2)
        field, change = _solved(damping - acceleration)
        u.append(field)
        g.append(change)
        v.append(_fast(field) + known + _with_conjugate(change, n + 1))
        u_slopes.append(field.derivative(0))
        v_slopes.append(v[n].derivative(0))
    return g[1:]
