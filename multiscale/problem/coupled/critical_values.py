"""The value of a parameter at which two modes of equations with first derivatives are in a rational ratio r.

    det L_0(s) = a s⁴ + b s² + c:      ω_2 = r ω_1  ⟺  ac (1 + r²)² = r² b²

It serves a message: what to write instead of a relation between the names of two modes.
"""

from __future__ import annotations

from collections.abc import Iterator

import sympy as sp

__all__ = ["critical_value"]

S = sp.Symbol("@s")


def critical_value(
    mass: sp.Matrix, damping: sp.Matrix, stiffness: sp.Matrix, ratio: sp.Expr
) -> tuple[sp.Symbol, sp.Expr] | None:
    """(parameter, value), a rational value if there is one; None where det L_0 is not of this form or none is found."""
    determinant = sp.Poly(sp.expand((S**2 * mass + S * damping + stiffness).det(method="berkowitz")), S)
    powers = dict(determinant.terms())
    if not powers.keys() <= {(4,), (2,), (0,)} or len(powers) < 3:
        return None
    a, b, c = (powers[n,] for n in (4, 2, 0))
    condition = sp.numer(sp.together(a * c * (1 + ratio**2) ** 2 - ratio**2 * b**2))
    found = list(_values(condition, (a, b, c)))
    found.sort(key=lambda pair: (any(not p.exp.is_Integer for p in pair[1].atoms(sp.Pow)), len(str(pair[1]))))
    return found[0] if found else None


def _values(condition: sp.Expr, coefficients: tuple[sp.Expr, ...]) -> Iterator[tuple[sp.Symbol, sp.Expr]]:
    """Roots of the condition in one parameter each, at which both frequencies are real for some value of the others."""
    for p in sorted(condition.free_symbols, key=str):
        if sp.degree(condition, p) > 4:
            continue
        for value in sp.roots(sp.Poly(condition, p)):
            others = sorted(value.free_symbols | condition.free_symbols - {p}, key=str)
            at = {s: sp.Rational(3 * n + 2, n + 2) for n, s in enumerate(others)}
            number = value.subs(at)
            if not number.is_real or number == 0 or (p.is_positive and number.is_negative):
                continue
            a, b, c = (x.subs(p, value).subs(at) for x in coefficients)
            if b / a > 0 and c / a > 0:
                value = sp.simplify(value)
                # Roots of sums in the linear part would nest in the frequencies.
                if not any(q.base.is_Add for q in value.atoms(sp.Pow) if not q.exp.is_Integer):
                    yield p, value
