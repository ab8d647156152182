"""Values of SymPy expressions in high precision: numbers, or jets where time enters; every subexpression once.

A function of a jet is composed from the derivatives of the function, f(x_0 + h) = Σ f^(k)(x_0) h^k / k!, which SymPy
gives for any function it knows; so nothing here is particular to polynomials.
"""

from __future__ import annotations

from collections.abc import Mapping, MutableMapping, Sequence
from functools import cache
from math import factorial
from typing import Any

import sympy as sp

from multiscale.checks.residual.jets import Jet
from multiscale.errors import EvaluationError

__all__ = ["Evaluation", "Value"]

Value = Any
"""A number of the context, or a jet of them."""

NAMES = {"Abs": "fabs", "ceiling": "ceil", "LambertW": "lambertw", "Heaviside": "heaviside"}
SEVERAL = ("atan2", "besselj", "bessely", "besseli", "besselk")
"""Functions of several arguments that mean the same in SymPy and in mpmath."""


@cache
def _derivatives(function: type, count: int) -> tuple[sp.Symbol, tuple[sp.Expr, ...]]:
    """(x, (f, f', f'', …) at x)."""
    x = sp.Dummy("x")
    found = [function(x)]
    for _ in range(count - 1):
        found.append(found[-1].diff(x))
    return x, tuple(found)


class Evaluation:
    """Evaluates expressions in an mpmath `context`.

    `varying` holds what changes from one use of the parameters to the next (small parameter, time, amplitudes), by
    symbol or by subexpression; `fixed` is shared between evaluations and grows with every subexpression that contains
    nothing varying. `time` is the symbol whose integrals are phases.
    """

    def __init__(
        self,
        context: Any,
        fixed: MutableMapping[sp.Basic, Value],
        varying: Mapping[sp.Basic, Value],
        time: Sequence[sp.Symbol] = (),
    ) -> None:
        self._context, self._fixed, self._varying, self._time = context, fixed, dict(varying), tuple(time)

    def __call__(self, x: sp.Expr) -> Value:
        value = self._varying.get(x)
        if value is None:
            value = self._fixed.get(x)
        if value is None:
            value = self._evaluated(x)
            depends = isinstance(value, Jet) or any(a in self._varying for a in x.args)
            (self._varying if depends else self._fixed)[x] = value
        return value

    def _evaluated(self, x: sp.Expr) -> Value:
        if x.is_Add:
            return self._sum([self(a) for a in x.args])
        if x.is_Mul:
            return self._product([self(a) for a in x.args])
        if x.is_Pow:
            return self._power(x.base, x.exp)
        if x.is_Rational:
            return self._context.mpf(int(x.p)) / int(x.q) if x.q != 1 else self._context.mpf(int(x.p))
        if x is sp.I:
            return self._context.mpc(0, 1)
        if isinstance(x, sp.Integral):
            return self._integral(x)
        if isinstance(x, sp.Function) and len(x.args) == 1:
            return self._function(x.func, self(x.args[0]), x)
        if type(x).__name__ in SEVERAL and not any(isinstance(self(a), Jet) for a in x.args):
            return getattr(self._context, type(x).__name__)(*map(self, x.args))
        if x.is_number:
            return self._context.convert(sp.N(x, self._context.dps + 5))
        if x.has(sp.Derivative):
            raise EvaluationError(f"{x} is not known: a force must be smooth for its residual to have an order")
        raise EvaluationError(f"{x} has no value: neither the equations nor the relations give it a meaning")

    @staticmethod
    def _sum(parts: Sequence[Value]) -> Value:
        total, jets = 0, []
        for p in parts:
            if isinstance(p, Jet):
                jets.append(p.coefficients)
            else:
                total = total + p
        if not jets:
            return total
        length = min(map(len, jets))
        sums = []
        for k in range(length):
            s = jets[0][k]
            for c in jets[1:]:
                s = s + c[k]
            sums.append(s)
        return Jet((sums[0] + total, *sums[1:]))

    @staticmethod
    def _product(parts: Sequence[Value]) -> Value:
        """Numbers first, so that a coefficient costs one multiplication of a jet."""
        number, jet = 1, None
        for p in parts:
            if isinstance(p, Jet):
                jet = p if jet is None else jet * p
            else:
                number = number * p
        return number if jet is None else jet * number

    def _power(self, base: sp.Expr, exponent: sp.Expr) -> Value:
        x = self(base)
        if exponent.is_Integer:
            return x ** int(exponent)
        p = self(exponent)
        if isinstance(p, Jet):
            return self._function(sp.exp, self._function(sp.log, x, base) * p, base**exponent)
        return self._raised(x, p) if isinstance(x, Jet) else self._context.power(x, p)

    def _raised(self, x: Jet, p: Value) -> Jet:
        """x^p by the binomial series."""
        start, binomial, outer = x.coefficients[0], self._context.mpf(1), []
        for k in range(len(x.coefficients)):
            outer.append(binomial * self._context.power(start, p - k))
            binomial = binomial * (p - k) / (k + 1)
        return x.composed(outer)

    def _function(self, function: type, x: Value, shown: sp.Expr) -> Value:
        if function is sp.conjugate:
            return x.conjugate()
        if function in (sp.re, sp.im, sp.Abs) and isinstance(x, Jet):
            return self._part(function, x)
        if not isinstance(x, Jet):
            known = getattr(self._context, NAMES.get(function.__name__, function.__name__), None)
            if known is None:
                raise EvaluationError(f"{shown}: a function without a value in high precision")
            return known(x)
        start, count = x.coefficients[0], len(x.coefficients)
        if function is sp.exp:
            value = self._context.exp(start)
            return x.composed([value / factorial(k) for k in range(count)])
        argument, derivatives = _derivatives(function, count)
        here = Evaluation(self._context, self._fixed, {argument: start})
        return x.composed([here(d) / factorial(k) for k, d in enumerate(derivatives)])

    def _part(self, function: type, x: Jet) -> Value:
        """Real part, imaginary part and modulus of a jet, along real τ."""
        mirror = x.conjugate()
        if function is sp.re:
            return (x + mirror) * self._context.mpf("0.5")
        if function is sp.im:
            return (x + mirror * -1) * self._context.mpc(0, "-0.5")
        return self._raised(x * mirror, self._context.mpf("0.5"))

    def _integral(self, x: sp.Integral) -> Value:
        """∫_0^t ω dt, the phase of a slowly varying frequency.

        Its derivatives in time matter; its value at one instant is a choice of the phase of the amplitude. Taken
        proportional to ω, it gives a multiple of a frequency the same multiple of the phase.
        """
        limits = x.limits[0]
        if len(x.limits) != 1 or len(limits) != 3 or limits[2] not in self._time or limits[1].free_symbols:
            raise EvaluationError(f"{x}: only integrals over time up to now are evaluated")
        rate = self(x.function.subs(limits[0], limits[2]))
        if not isinstance(rate, Jet):
            rate = Jet([rate] + [rate * 0] * (len(self(limits[2]).coefficients) - 1))
        return rate.integral(rate.coefficients[0] * self._context.mpf("0.71"))
