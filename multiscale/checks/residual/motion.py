"""The motion that a claim describes, followed for an instant, and what it leaves in the equations.

The amplitudes are jets in time, filled in from the slow flow, A(t + τ) = A_0 + A_1 τ + …, k A_k = [τ^{k−1}] Σ εⁿ D_nA.
The fields on these jets give the unknowns and their derivatives as numbers, and these go into the equations as stated.
Drives keep their exact phase, detunings are held fixed; the residual of a claim of order N falls as ε^{N+1}.
"""

from __future__ import annotations

from collections.abc import Sequence
from math import factorial
from typing import Any

import sympy as sp

from multiscale.checks.residual.claim import Claim
from multiscale.checks.residual.draws import Draw
from multiscale.checks.residual.evaluation import Evaluation, Value
from multiscale.checks.residual.jets import Jet
from multiscale.checks.residual.statement import Statement

__all__ = ["Instant", "leading"]


class Instant:
    """A statement at one draw and one value of the small parameter; `fixed` is shared by all instants of a draw.

    Amplitudes and fields are kept for the slow flow last asked for, so that claims which differ in a field only share
    the rest.
    """

    def __init__(self, context: Any, statement: Statement, draw: Draw, small: Value, fixed: dict[Any, Any]) -> None:
        self.context, self._statement, self._draw, self._fixed = context, statement, draw, fixed
        self.small = small
        self.size = context.mpf(int(draw.size.p)) / int(draw.size.q)
        number = Evaluation(context, fixed, {})
        fixed.update({s: number(x) for s, x in draw.values.items()})
        self.start = [context.mpc(number(x), number(y)) for x, y in draw.amplitudes]
        self.time = number(draw.time)
        self._followed: tuple[Any, Evaluation] | None = None

    def scaled(self, time: Value | None = None) -> dict[sp.Basic, Value]:
        """What the equations see: symbols that carry an order q are ε^q times what was drawn."""
        known = {self._statement.small: self.small, self._statement.time: self.time if time is None else time}
        carried = {
            s: self._fixed[s] * self.small**q for s, q in self._statement.orders if isinstance(s, sp.Symbol) and q
        }
        here = Evaluation(self.context, {}, self._drawn() | known | carried, (self._statement.time,))
        return known | carried | {s: here(x) for s, x in self._statement.relations}

    def _drawn(self) -> dict[sp.Basic, Value]:
        return {s: self._fixed[s] for s in self._draw.values}

    def published(
        self, claim: Claim, amplitudes: Sequence[Value], length: int, more: dict[sp.Basic, Value] | None = None
    ) -> Evaluation:
        """How the expressions of a claim are evaluated, time known through τ^{length − 1}."""
        time = Jet((self.time, *(self.context.mpf(int(k == 1)) for k in range(1, length))))
        relations = {s: x for s, x in self.scaled(time).items() if s in dict(self._statement.relations)}
        known = {self._statement.small: self.small, **relations, **dict.fromkeys(claim.times, time)}
        known |= dict(zip(claim.amplitudes, amplitudes, strict=True))
        return Evaluation(self.context, self._fixed, known | (more or {}), claim.times)

    def summed(self, here: Evaluation, levels: Sequence[sp.Expr], first: int) -> Value:
        """Σ εⁿ x_n from the given power on."""
        terms = (here(x) * self.small ** (n + first) for n, x in enumerate(levels))
        return sum(terms, start=self.context.mpf(0))

    def followed(self, claim: Claim) -> Evaluation:
        """The evaluation of fields on amplitudes that follow the slow flow."""
        if self._followed is None or self._followed[0] != claim.flow:
            jets = [Jet((a,)) for a in self.start]
            for k in range(1, self._statement.depth + 1):
                here = self.published(claim, jets, k)
                rates = [self.summed(here, level, 1) for level in zip(*claim.flow, strict=True)]
                jets = [
                    Jet((*jet.coefficients, _coefficient(rate, k - 1) / k))
                    for jet, rate in zip(jets, rates, strict=True)
                ]
            self._followed = claim.flow, self.published(claim, jets, self._statement.depth + 1)
        return self._followed[1]

    def residuals(self, claim: Claim) -> list[Value]:
        """|R| of every equation in units of its slopes and of the amplitudes.

        A slope ∂R/∂u^(d) counts with the d-th power of the largest natural frequency, whatever the unit of time.
        """
        here, statement = self.followed(claim), self._statement
        moved = [self.summed(here, level, 0) for level in zip(*claim.fields, strict=True)]
        power = dict(statement.orders)
        numbers = {
            x: self._real(_coefficient(moved[k], d)) * factorial(d) * self.small ** power.get(statement.unknowns[k], 0)
            for k, d, x in statement.jets
        }
        there = Evaluation(self.context, {}, self._drawn() | self.scaled() | numbers, (statement.time,))
        rate, found = self.rate(claim), []
        for equation, slopes in zip(statement.equations, statement.slopes, strict=True):
            unit = max(abs(there(x)) * rate**d for d, x in slopes)
            found.append(abs(there(equation)) / unit / self.size)
        return found

    def rate(self, claim: Claim) -> Value:
        """The largest natural frequency, 1 where none is known."""
        here = self.published(claim, self.start, 1)
        return max((abs(leading(here(x))) for x in claim.frequencies), default=self.context.mpf(1))

    def _real(self, x: Value) -> Value:
        """x without an imaginary part that is rounding alone."""
        rounding = self.context.mpf(10) ** (8 - self.context.dps)
        return x.real if abs(x.imag) <= rounding * abs(x) else x


def _coefficient(x: Value, k: int) -> Value:
    """[τ^k] of a jet or of a constant."""
    return x.coefficients[k] if isinstance(x, Jet) else x * int(k == 0)


def leading(x: Value) -> Value:
    """The value at τ = 0."""
    return _coefficient(x, 0)
