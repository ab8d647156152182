"""Truncated power series in the small parameter whose coefficients are exact polynomials.

    x = Σ x_n εⁿ ,      x_n rational polynomials in jets, parameters and constants such as sin(u_s)

Sums, products and powers; functions are for `problem.series`. A quotient whose denominator vanishes at ε = 0 is carried
through, and accepted when it cancels: sin(u)/u is analytic. A constant that turns up becomes a generator, and the
computation starts again in the larger ring; a first pass at ε = 0 finds nearly all of them.
"""

from __future__ import annotations

from collections.abc import Callable, Collection, Sequence
from functools import reduce
from operator import mul
from typing import Any

import sympy as sp
from sympy.polys.rings import PolyRing

__all__ = ["BRANCH", "KINKED", "UNKNOWN", "NotAnalyticError", "NotSmallError", "SeriesArithmetic", "needs_series"]

QUOTIENTS: dict[Any, Callable[[sp.Expr], sp.Expr]] = {
    sp.cot: lambda x: sp.cos(x) / sp.sin(x),
    sp.sec: lambda x: 1 / sp.cos(x),
    sp.csc: lambda x: 1 / sp.sin(x),
    sp.coth: lambda x: sp.cosh(x) / sp.sinh(x),
    sp.sech: lambda x: 1 / sp.cosh(x),
    sp.csch: lambda x: 1 / sp.sinh(x),
    sp.sinc: lambda x: sp.sin(x) / x,
}
VANISHING = 24
"""How far a denominator is searched for its first non-zero term."""


SINGULAR = "Measure the unknown from a state of rest where it is smooth, through `about`"
KINKED = (
    "A force with a kink, a jump or a branch point goes with an unknown of order 1 and a force of order epsilon: "
    "state the problem with small=epsilon and that factor"
)
BRANCH = f"{SINGULAR}. {KINKED}"
UNKNOWN = "Write it out, or replace it by its Taylor terms with symbols for the coefficients"


class NotAnalyticError(Exception):
    """A subexpression has no power series at ε = 0: `reason` says why, `remedy` what to write instead."""

    def __init__(self, where: sp.Expr, reason: str, remedy: str = SINGULAR) -> None:
        super().__init__(reason)
        self.where, self.reason, self.remedy = where, reason, remedy


class NotSmallError(Exception):
    """The argument of a function does not become constant at ε = 0, so that no series in ε serves."""


class _NewConstantError(Exception):
    """The ring needs one more generator; the computation starts again with it."""


def _bare_time(x: sp.Expr, time: sp.Symbol) -> bool:
    """Whether time stands in x outside functions: in Ωt it does, in t-dependent F(εt) as a whole it does not."""
    if isinstance(x, sp.Add | sp.Mul | sp.Pow):
        return any(_bare_time(arg, time) for arg in x.args)
    return bool(x == time)


def _is_wave(x: sp.Expr, time: sp.Symbol, jets: Collection[sp.Symbol]) -> bool:
    """A function of time alone, which is for drives and slow time to read."""
    arguments = x.args if isinstance(x, sp.Function) else (x,)
    alone = time in x.free_symbols and not x.free_symbols & set(jets)
    return alone and any(_bare_time(arg, time) for arg in arguments)


def needs_series(x: sp.Expr, small: sp.Symbol, time: sp.Symbol, jets: Collection[sp.Symbol]) -> bool:
    """Whether the small parameter stands in x other than polynomially (or as a plain power of its own)."""
    if small not in x.free_symbols or x == small:
        return False
    if isinstance(x, sp.Add | sp.Mul):
        return any(needs_series(arg, small, time, jets) for arg in x.args)
    if isinstance(x, sp.Pow) and x.exp.is_Integer:
        if x.exp > 0:
            return needs_series(x.base, small, time, jets)
        if x.base == small:
            return False
    return not _is_wave(x, time, jets)


class SeriesArithmetic:
    """Series in `small` of expressions in `jets`, time and parameters; `_function` is left to be supplied."""

    def __init__(self, small: sp.Symbol, time: sp.Symbol, jets: Collection[sp.Symbol], slow: bool = True) -> None:
        """`slow` says that ε times time is slow time, at which series are taken; else ε only counts orders."""
        self.small, self.time, self.jets = small, time, frozenset(jets)
        self._stretched = {small * time: sp.Symbol("@st", real=True)} if slow else {}
        self._waves: dict[sp.Expr, sp.Symbol] = {}
        self._leaves: list[sp.Expr] = [small]
        self._restart()

    def _restart(self) -> None:
        self._ring = PolyRing(tuple(sp.Symbol(f"@g{k}") for k in range(len(self._leaves))), sp.QQ, sp.lex)
        self._place = {leaf: k for k, leaf in enumerate(self._leaves)}
        self._memo: dict[Any, list[Any]] = {}

    def coefficients(self, x: sp.Expr, order: int) -> list[sp.Expr]:
        """x_0 … x_order. Raises `NotAnalyticError` or `NotSmallError`."""
        x = self._without_waves(x).subs(self._stretched)
        # As quotients in the product around them, where a vanishing denominator may cancel.
        x = x.replace(
            lambda f: type(f) in QUOTIENTS and self.small in f.free_symbols, lambda f: QUOTIENTS[type(f)](f.args[0])
        )
        # The first pass meets the constants, which is cheap where nothing is multiplied.
        for depth in dict.fromkeys((0, order)):
            while True:
                try:
                    found = self._series(x, depth)
                    break
                except _NewConstantError:
                    self._restart()
                except NotAnalyticError as error:
                    raise NotAnalyticError(self.shown(error.where), error.reason, error.remedy) from None
        return [self.shown(self._expression(c)) for c in found]

    def shown(self, x: sp.Expr) -> sp.Expr:
        """An expression with the symbols that stand in for functions of time spelled out."""
        return x.xreplace({symbol: wave for wave, symbol in (*self._waves.items(), *self._stretched.items())})

    def _without_waves(self, x: sp.Expr) -> sp.Expr:
        """A symbol for every function of time alone; the part of an angle that turns with time is split off."""
        if self.time not in x.free_symbols or not x.args:
            return x
        if _is_wave(x, self.time, self.jets) and not isinstance(x, sp.Add | sp.Mul):
            return self._waves.setdefault(x, sp.Symbol(f"@w{len(self._waves)}", real=True))
        if isinstance(x, sp.sin | sp.cos):
            x = self._split(x)
        return x.func(*(self._without_waves(arg) for arg in x.args))

    def _split(self, x: sp.Expr) -> sp.Expr:
        """sin(r + w) and cos(r + w), w the terms of the angle that are bare time."""
        terms = sp.Add.make_args(x.args[0])
        turning = [a for a in terms if _bare_time(a, self.time) and not a.free_symbols & self.jets]
        if not turning:
            return x
        w, r = sp.Add(*turning), sp.Add(*(a for a in terms if a not in turning))
        if isinstance(x, sp.sin):
            return sp.sin(r) * sp.cos(w) + sp.cos(r) * sp.sin(w)
        return sp.cos(r) * sp.cos(w) - sp.sin(r) * sp.sin(w)

    # From SymPy to the ring and back

    def _generator(self, leaf: sp.Expr) -> Any:
        if leaf not in self._place:
            self._leaves.append(leaf)
            raise _NewConstantError
        return self._ring.gens[self._place[leaf]]

    def _element(self, x: sp.Expr) -> Any:
        """An expression without ε."""
        if isinstance(x, sp.Rational):
            return self._ring(sp.QQ(int(x.p), int(x.q)))
        if isinstance(x, sp.Add):
            return sum((self._element(arg) for arg in x.args), self._ring.zero)
        if isinstance(x, sp.Mul):
            return reduce(mul, (self._element(arg) for arg in x.args), self._ring.one)
        if isinstance(x, sp.Pow) and x.exp.is_Integer:
            base = self._element(x.base) if x.exp > 0 else self._generator(1 / x.base)
            return base ** abs(int(x.exp))
        return self._generator(x)

    def _expression(self, x: Any) -> sp.Expr:
        terms = []
        for m, c in x.terms():
            factors = (leaf**e for leaf, e in zip(self._leaves, m, strict=True) if e)
            terms.append(sp.Mul(sp.Rational(int(c.numerator), int(c.denominator)), *factors))
        return sp.Add(*terms)

    def _at_zero(self, x: Any) -> sp.Expr:
        """A leading coefficient as the argument of a function."""
        value = self._expression(x)
        if value.free_symbols & self.jets:
            raise NotSmallError
        return value

    def _seed(self, value: sp.Expr, where: sp.Expr) -> Any:
        if value.has(sp.zoo, sp.nan, sp.oo, -sp.oo):
            raise NotAnalyticError(where, "it is singular at rest")
        if value.has(sp.I) or (value.is_number and value.is_real is False):
            raise NotAnalyticError(where, "it is complex at rest (a root or logarithm of a negative number)")
        return self._element(value)

    # Series

    def _series(self, x: sp.Expr, n: int) -> list[Any]:
        known = self._memo.get(x)
        if known is None or len(known) <= n:
            known = self._memo[x] = self._made(x, n)
        return known[: n + 1]

    def _constant(self, element: Any, n: int) -> list[Any]:
        return [element] + [self._ring.zero] * n

    def _made(self, x: sp.Expr, n: int) -> list[Any]:
        if self.small not in x.free_symbols:
            return self._constant(self._element(x), n)
        if x == self.small:
            return [self._ring.zero, *self._constant(self._ring.one, n - 1)][: n + 1]
        if isinstance(x, sp.Add):
            return [sum(column, self._ring.zero) for column in zip(*(self._series(a, n) for a in x.args), strict=True)]
        if isinstance(x, sp.Mul):
            return self._product(x, n)
        if isinstance(x, sp.Pow):
            return self._power(x, n)
        return self._function(x, n)

    def _times(self, x: Sequence[Any], y: Sequence[Any]) -> list[Any]:
        size = min(len(x), len(y))
        result = [self._ring.zero] * size
        for j, a in enumerate(x[:size]):
            if a:
                for k, b in enumerate(y[: size - j]):
                    if b:
                        result[j + k] += a * b
        return result

    def _convolved(self, x: Sequence[Any], h: Sequence[Any], n: int) -> Any:
        """(1/n) Σ k x_k h_{n−k}, k = 1 … n."""
        total = self._ring.zero
        for k in range(1, n + 1):
            if x[k] and h[n - k]:
                total += (x[k] * h[n - k]).mul_ground(sp.QQ(k, n))
        return total

    def _product(self, x: sp.Expr, n: int) -> list[Any]:
        """A product, in which denominators that vanish at ε = 0 have to cancel."""
        below = [f for f in x.args if isinstance(f, sp.Pow) and f.exp.is_Integer and f.exp < 0 and self._vanishes(f)]
        above = [f for f in x.args if f not in below]
        valuations = [self._leading(f.base) for f in below]
        shift = sum(v * -int(f.exp) for (v, _), f in zip(valuations, below, strict=True))
        result = self._constant(self._ring.one, n + shift)
        for f in above:
            result = self._times(result, self._series(f, n + shift))
        for (v, lead), f in zip(valuations, below, strict=True):
            base = self._series(f.base, n + shift + v)[v:]
            quotient = self._divided(base, lead, x)
            result = self._times(result, self._raised(quotient, sp.Integer(f.exp), f, n + shift))
        for (_, lead), f in zip(valuations, below, strict=True):
            for _ in range(-int(f.exp)):
                result = self._divided(result, lead, x)
        if any(result[:shift]):
            raise NotAnalyticError(x, "its denominator vanishes at rest, so that it is singular there")
        return result[shift:]

    def _vanishes(self, x: sp.Pow) -> bool:
        return self.small in x.base.free_symbols and not self._series(x.base, 0)[0]

    def _leading(self, base: sp.Expr) -> tuple[int, Any]:
        for v in range(1, VANISHING):
            lead = self._series(base, v)[v]
            if lead:
                if len(lead) > 1:
                    raise NotAnalyticError(1 / base, "its denominator vanishes at rest, so that it is singular there")
                return v, lead
        raise NotAnalyticError(1 / base, "its denominator vanishes identically at rest")

    def _divided(self, series: Sequence[Any], lead: Any, where: sp.Expr) -> list[Any]:
        """Each coefficient divided by a single term; parameters may be left below the line, jets not."""
        ((monomial, c),) = lead.terms()
        jets = tuple(e if self._leaves[k] in self.jets else 0 for k, e in enumerate(monomial))
        rest = tuple(e - j for e, j in zip(monomial, jets, strict=True))
        if all(_divides(monomial, m) for x in series for m in x):
            return [x.quo_term((monomial, c)) for x in series]
        if not all(_divides(jets, m) for x in series for m in x):
            raise NotAnalyticError(where, "its denominator vanishes at rest, so that it is singular there")
        inverse = reduce(mul, (self._generator(1 / self._leaves[k]) ** e for k, e in enumerate(rest) if e))
        return [x.quo_term((jets, c)) * inverse for x in series]

    def _power(self, x: sp.Pow, n: int) -> list[Any]:
        base, exponent = x.base, x.exp
        if self.small in exponent.free_symbols:
            return self._series(sp.exp(exponent * sp.log(base), evaluate=False), n)
        if exponent.is_Integer and exponent > 0:
            half = self._series(base ** (exponent // 2), n) if exponent > 1 else self._constant(self._ring.one, n)
            square = self._times(half, half)
            return self._times(square, self._series(base, n)) if exponent % 2 else square
        if exponent.is_Integer and self._vanishes(x):
            return self._product(sp.Mul(x, sp.Integer(1), evaluate=False), n)
        return self._raised(self._series(base, n), exponent, x, n)

    def _raised(self, s: Sequence[Any], exponent: sp.Expr, where: sp.Expr, n: int) -> list[Any]:
        if not s[0]:
            raise NotAnalyticError(
                where,
                f"the power {exponent} of something that vanishes at rest has a branch point there",
                BRANCH,
            )
        start = self._at_zero(s[0])
        if not exponent.is_Integer and start.is_negative:
            raise NotAnalyticError(where, f"the power {exponent} of the negative number {start} is complex")
        a, inverse = self._element(exponent), self._element(1 / start)
        y = [self._seed(start**exponent, where)]
        for m in range(1, n + 1):
            total = self._ring.zero
            for k in range(1, m + 1):
                if s[k] and y[m - k]:
                    total += (a * k - (m - k)) * s[k] * y[m - k]
            y.append((total * inverse).mul_ground(sp.QQ(1, m)))
        return y

    def _function(self, x: sp.Expr, n: int) -> list[Any]:
        raise NotImplementedError


def _divides(divisor: Sequence[int], monomial: Sequence[int]) -> bool:
    return all(d <= m for d, m in zip(divisor, monomial, strict=True))
