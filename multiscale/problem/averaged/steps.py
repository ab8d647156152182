"""Kinks and jumps written with the unit step: Max, Min, Abs, sign and Piecewise of affine functions of one variable.

    max(A, B) = B + (A − B) H(A − B)      |h| = h (2H(h) − 1)      sgn h = 2H(h) − 1

|x| and sgn x of a variable itself stay, and H(x) becomes (1 + sgn x)/2: those are powers, not thresholds.
"""

from __future__ import annotations

from collections.abc import Sequence

import sympy as sp

__all__ = ["expanded", "with_steps"]


def expanded(x: sp.Expr) -> sp.Expr:
    """Products and whole powers of sums multiplied out; arguments of functions and general powers are left alone."""
    known = None
    while x != known:
        known, x = x, sp.Add(*(_opened(term) for term in sp.Add.make_args(x)))
    return x


def _opened(x: sp.Expr) -> sp.Expr:
    sums: list[sp.Expr] = []
    rest: list[sp.Expr] = []
    for f in sp.Mul.make_args(x):
        whole = f.is_Pow and f.base.is_Add and f.exp.is_Integer and f.exp.is_positive
        (sums if whole or f.is_Add else rest).append(f)
    if not sums:
        return x
    terms = [sp.Mul(*rest)]
    for f in sums:
        base, power = f.as_base_exp()
        for _ in range(int(power)):
            terms = list(sp.Add.make_args(sp.Add(*(t * y for t in terms for y in base.args))))
    return sp.Add(*terms)


def _step(h: sp.Expr, variables: Sequence[sp.Symbol]) -> sp.Expr:
    h = sp.expand(h)
    for x in variables:
        slope = sp.diff(h, x)
        if slope != 0 and h.subs(x, 0) == 0 and not slope.free_symbols & set(variables):
            return (1 + sp.sign(slope) * sp.sign(x)) / 2
    return sp.Heaviside(h, sp.Rational(1, 2))


def _condition(c: sp.Basic, variables: Sequence[sp.Symbol]) -> sp.Expr | None:
    if c == sp.true:
        return sp.Integer(1)
    if isinstance(c, sp.Gt | sp.Ge):
        return _step(c.lhs - c.rhs, variables)
    if isinstance(c, sp.Lt | sp.Le):
        return _step(c.rhs - c.lhs, variables)
    return None


def _rewritten(x: sp.Expr, variables: Sequence[sp.Symbol]) -> sp.Expr:
    if not x.args or not x.free_symbols & set(variables):
        return x
    args = [_rewritten(arg, variables) if isinstance(arg, sp.Expr) else arg for arg in x.args]
    if isinstance(x, sp.Max | sp.Min) and len(args) == 2:
        # The base is the part without variables, so that the step multiplies what is beyond the threshold.
        base, other = sorted(args, key=lambda e: bool(e.free_symbols & set(variables)))
        h = other - base if isinstance(x, sp.Max) else base - other
        return base + (other - base) * _step(h, variables)
    if isinstance(x, sp.Heaviside):
        return _step(args[0], variables)
    if isinstance(x, sp.Abs | sp.sign) and sp.expand(args[0]).subs(dict.fromkeys(variables, 0)) != 0:
        sign = 2 * _step(args[0], variables) - 1
        return sign * args[0] if isinstance(x, sp.Abs) else sign
    if isinstance(x, sp.Piecewise):
        steps = [_condition(c, variables) for _, c in x.args]
        if len(steps) == 2 and steps[1] == 1 and steps[0] is not None:
            first, second = (_rewritten(e, variables) for e, _ in x.args)
            return second + (first - second) * steps[0]
        return x
    return x.func(*args) if tuple(args) != x.args else x


def with_steps(x: sp.Expr, variables: Sequence[sp.Symbol]) -> sp.Expr:
    """x as a sum of products in which thresholds appear as unit steps."""
    if x.has(sp.Max, sp.Min, sp.Heaviside, sp.Abs, sp.sign, sp.Piecewise):
        x = _rewritten(x, variables)
    return expanded(x)
