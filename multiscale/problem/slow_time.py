"""Parameters that vary slowly: functions of εt become generators whose time derivative is known.

    D_1 F = F' ,  D_1 F' = F'' , …,      D_1 (εt) = 1

Every maximal subexpression of s = εt that is not a sum, product or integer power is a leaf; its derivative by s is read
in terms of leaves, which adds the derivatives of undefined functions as leaves of their own, as far as the order needs.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field

import sympy as sp

from multiscale.errors import UnsupportedTermError
from multiscale.problem.reading import unsupported

__all__ = ["SLOW", "SlowLeaves"]

SLOW = sp.Symbol("@s", real=True)


@dataclass
class SlowLeaves:
    """The leaves found so far: expression in s → symbol, in order of appearance; `rates` their derivatives by s."""

    time: sp.Symbol
    small: sp.Symbol
    leaves: dict[sp.Expr, sp.Symbol] = field(default_factory=dict)
    rates: dict[sp.Symbol, sp.Expr] = field(default_factory=dict)
    shown: Mapping[sp.Symbol, sp.Expr] = field(default_factory=dict)

    def scaled(self, x: sp.Expr) -> sp.Expr:
        """x with time written as s/ε, so that a function of εt is one of s."""
        if self.time not in x.free_symbols:
            return x
        slow = sp.expand(x) if x.is_polynomial(self.time) else x
        return slow.subs(self.time, SLOW / self.small).doit()

    def read(self, x: sp.Expr) -> sp.Expr:
        """A scaled expression with its dependence on s through leaves; other dependence on time is refused by name."""
        return self._replaced(x)

    def _replaced(self, x: sp.Expr) -> sp.Expr:
        if SLOW not in x.free_symbols:
            return x
        if isinstance(x, sp.Add | sp.Mul):
            # s and powers of ε may meet only in a product: ε·(s/ε) has cancelled, s/ε alone means time itself.
            if isinstance(x, sp.Mul) and any(
                isinstance(f, sp.Pow) and f.base == self.small and f.exp.is_negative for f in x.args
            ):
                raise self._explicit(x)
            return x.func(*(self._replaced(arg) for arg in x.args))
        if isinstance(x, sp.Pow) and x.exp.is_Integer:
            return self._replaced(x.base) ** x.exp
        if self.small in x.free_symbols:
            raise self._explicit(x)
        if x not in self.leaves:
            self.leaves[x] = sp.Symbol(f"@slow{len(self.leaves)}", positive=x.is_positive or None, real=True)
        return self.leaves[x]

    def _explicit(self, x: sp.Expr) -> UnsupportedTermError:
        shown = x.subs(SLOW, self.small * self.time).xreplace(dict(self.shown))
        return unsupported(
            shown,
            f"it depends on {self.time} explicitly",
            f"Drives are cos or sin of a fast angle; slow parameters are functions of {self.small}*{self.time}",
        )

    def close(self, depth: int) -> None:
        """Derivatives of all leaves, `depth` times; deeper ones have no effect at the order that asks for them."""
        for _ in range(depth):
            for expression, symbol in list(self.leaves.items()):
                if symbol not in self.rates:
                    self.rates[symbol] = self._replaced(sp.diff(expression, SLOW).doit())

    def rate(self, x: sp.Expr) -> sp.Expr:
        """dx/ds for an expression in leaves."""
        return sp.Add(
            *(
                sp.diff(x, symbol) * self.rates.get(symbol, 0)
                for symbol in self.leaves.values()
                if symbol in x.free_symbols
            )
        )

    @property
    def meanings(self) -> dict[sp.Symbol, sp.Expr]:
        """{leaf: what it stands for, in time}."""
        return {symbol: x.subs(SLOW, self.small * self.time) for x, symbol in self.leaves.items()}
