"""Analytic functions as truncated power series in the small parameter, exactly.

Every elementary function follows its differential equation, which is a recurrence on coefficients of O(n²) products:

    y = exp x:   n y_n = Σ k x_k y_{n−k}                    y = xᵃ:   n x_0 y_n = Σ (ka − n + k) x_k y_{n−k}
    y = f(x):    n y_n = Σ k x_k h_{n−k},  h = f'(x)        k = 1 … n

What a function gives at ε = 0 is evaluated by SymPy, so that sin(0) is 0 and sin(u_s) a constant of its own.
"""

from __future__ import annotations

from collections.abc import Sequence
from typing import Any

import sympy as sp

from multiscale.problem.small.series_arithmetic import BRANCH, KINKED, UNKNOWN, NotAnalyticError, SeriesArithmetic

__all__ = ["ROUGH", "EpsilonSeries"]

ROUGH = (
    sp.Abs,
    sp.sign,
    sp.Heaviside,
    sp.DiracDelta,
    sp.Max,
    sp.Min,
    sp.Piecewise,
    sp.floor,
    sp.ceiling,
    sp.frac,
    sp.Mod,
    sp.re,
    sp.im,
    sp.arg,
    sp.conjugate,
)


class EpsilonSeries(SeriesArithmetic):
    """Series in `small` of expressions in `jets`, time and parameters."""

    def _function(self, x: sp.Expr, n: int) -> list[Any]:
        if isinstance(x, sp.Abs):
            return self._absolute(x, n)
        if isinstance(x, ROUGH):
            raise NotAnalyticError(x, f"{x.func.__name__} has no Taylor series where it jumps or has a kink", KINKED)
        if isinstance(x, sp.core.function.AppliedUndef):
            raise NotAnalyticError(
                x, f"the function {x.func.__name__} is undefined, so its Taylor series is not known", UNKNOWN
            )
        if isinstance(x, sp.sin | sp.cos | sp.sinh | sp.cosh):
            return self._pair(x, n)
        if isinstance(x, sp.exp):
            return self._exponential(x, n)
        if isinstance(x, sp.log):
            return self._logarithm(x, n)
        if isinstance(x, sp.tan | sp.tanh):
            return self._tangent(x, n)
        if isinstance(x, sp.Function):
            return self._by_derivative(x, n)
        raise NotAnalyticError(x, f"{type(x).__name__} has no Taylor series here", UNKNOWN)

    def _absolute(self, x: sp.Expr, n: int) -> list[Any]:
        s = self._series(x.args[0], n)
        start = self._at_zero(s[0])
        if start.is_positive or start.is_negative:
            return s if start.is_positive else [-c for c in s]
        raise NotAnalyticError(x, "Abs has no Taylor series where it has a kink", KINKED)

    def _pair(self, x: sp.Expr, n: int) -> list[Any]:
        """sin and cos together, or sinh and cosh."""
        angle = x.args[0]
        circular = isinstance(x, sp.sin | sp.cos)
        odd, even = (sp.sin, sp.cos) if circular else (sp.sinh, sp.cosh)
        s = self._series(angle, n)
        start = self._at_zero(s[0])
        a, b = [self._seed(odd(start), x)], [self._seed(even(start), x)]
        for m in range(1, n + 1):
            up, down = self._convolved(s, b, m), self._convolved(s, a, m)
            a.append(up)
            b.append(-down if circular else down)
        self._memo[odd(angle)], self._memo[even(angle)] = a, b
        return a if isinstance(x, odd) else b

    def _exponential(self, x: sp.Expr, n: int) -> list[Any]:
        s = self._series(x.args[0], n)
        y = [self._seed(sp.exp(self._at_zero(s[0])), x)]
        for m in range(1, n + 1):
            y.append(self._convolved(s, y, m))
        return y

    def _logarithm(self, x: sp.Expr, n: int) -> list[Any]:
        s = self._series(x.args[0], n)
        start = self._at_zero(s[0])
        if start == 0:
            raise NotAnalyticError(
                x, "the logarithm of something that vanishes at rest has a branch point there", BRANCH
            )
        y = [self._seed(sp.log(start), x)]
        slope = self._raised(s, sp.Integer(-1), x, max(n - 1, 0))
        return y + [self._convolved(s, slope, m) for m in range(1, n + 1)]

    def _tangent(self, x: sp.Expr, n: int) -> list[Any]:
        """y' = (1 ± y²) x'."""
        s = self._series(x.args[0], n)
        sign = 1 if isinstance(x, sp.tan) else -1
        y = [self._seed(x.func(self._at_zero(s[0])), x)]
        slope: list[Any] = []
        for m in range(1, n + 1):
            square = sum((y[k] * y[m - 1 - k] for k in range(m)), self._ring.zero)
            slope.append(square * sign + (1 if m == 1 else 0))
            y.append(self._convolved(s, slope, m))
        return y

    def _by_derivative(self, x: sp.Function, n: int) -> list[Any]:
        """y' = Σ f_j(x) x_j' where the partial derivatives f_j are algebraic or elementary; else by repeated ones."""
        moving = [j for j, a in enumerate(x.args) if self.small in a.free_symbols]
        start = x.func(*(self._at_zero(self._series(a, 0)[0]) for a in x.args))
        first = self._seed(start, x)
        if n == 0:
            return [first]
        try:
            slopes = [x.fdiff(j + 1) for j in moving]
        except (sp.core.function.ArgumentIndexError, NotImplementedError):
            raise NotAnalyticError(x, f"SymPy knows no derivative of {x.func.__name__}", UNKNOWN) from None
        if any(h.has(sp.Derivative, sp.Subs, *ROUGH) for h in slopes):
            raise NotAnalyticError(x, f"SymPy knows no derivative of {x.func.__name__}", UNKNOWN)
        if any(self._special(f) for h in slopes for f in h.atoms(sp.Function)):
            return self._repeated(x, moving, n)
        result = [first] + [self._ring.zero] * n
        for j, h in zip(moving, slopes, strict=True):
            inner, slope = self._series(x.args[j], n), self._series(h, n - 1)
            for m in range(1, n + 1):
                result[m] += self._convolved(inner, slope, m)
        return result

    def _special(self, f: sp.Function) -> bool:
        own = (sp.sin, sp.cos, sp.sinh, sp.cosh, sp.tan, sp.tanh, sp.exp, sp.log)
        return self.small in f.free_symbols and not isinstance(f, own)

    def _repeated(self, x: sp.Function, moving: Sequence[int], n: int) -> list[Any]:
        """Σ f^(k)(x_0) (x − x_0)^k / k! for a special function of one argument."""
        if len(moving) > 1:
            raise NotAnalyticError(x, f"{x.func.__name__} of several varying arguments is not expanded", UNKNOWN)
        (j,) = moving
        s = self._series(x.args[j], n)
        start, z = self._at_zero(s[0]), sp.Dummy("z")
        f = x.func(*(z if k == j else a for k, a in enumerate(x.args)))
        step = [self._ring.zero, *s[1:]]
        power, result = self._constant(self._ring.one, n), [self._ring.zero] * (n + 1)
        for k in range(n + 1):
            weight = self._seed((f / sp.factorial(k)).subs(z, start), x)
            result = [r + weight * p for r, p in zip(result, power, strict=True)]
            f, power = sp.diff(f, z), self._times(power, step)
        return result
