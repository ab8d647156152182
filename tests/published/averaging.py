"""First-order averaging by means over the angles of the motion: a second route to the first level of a slow flow.

With u = p cos Φ + q sin Φ + w and u' = ν(q cos Φ − p sin Φ) + w', Φ' = ν, where w is the response to a hard drive, the
equation u'' + ν²u = ν²w + w'' + ε g(u, u', angles) gives exactly

    p' = −(ε/ν) g sin Φ,      q' = (ε/ν) g cos Φ,

and to the first order g may be averaged over the angles, which turn independently of each other (van der Pol's
variables; Bogoliubov's averaging). Where the natural frequency ω differs from ν by the detuning, ω = ν − εs, the part
2νs (u − w) of ν² − ω² belongs to g.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import sympy as sp


@dataclass(frozen=True)
class Averaged:
    """One mode: its angle Φ, its rate ν, the shift s (ω = ν − εs), its state (p, q) and the hard response w with w'."""

    angle: sp.Expr
    rate: sp.Expr
    state: tuple[sp.Symbol, sp.Symbol]
    shift: sp.Expr | int = 0
    response: sp.Expr | int = 0
    response_rate: sp.Expr | int = 0

    @property
    def free(self) -> sp.Expr:
        p, q = self.state
        return p * sp.cos(self.angle) + q * sp.sin(self.angle)

    @property
    def displacement(self) -> sp.Expr:
        return self.free + self.response

    @property
    def velocity(self) -> sp.Expr:
        p, q = self.state
        return self.rate * (q * sp.cos(self.angle) - p * sp.sin(self.angle)) + self.response_rate

    def rates(self, force: sp.Expr, angles: Sequence[sp.Symbol]) -> tuple[sp.Expr, sp.Expr]:
        """(p', q')/ε for the equation u'' + ω²u + ε·force = hard drive."""
        g = 2 * self.rate * self.shift * self.free - force
        return (
            -mean(g * sp.sin(self.angle), angles) / self.rate,
            mean(g * sp.cos(self.angle), angles) / self.rate,
        )


def mean(f: sp.Expr, angles: Sequence[sp.Symbol]) -> sp.Expr:
    """The mean of a trigonometric polynomial over all its angles: the term of its Fourier sum that is constant."""
    terms = sp.Add.make_args(sp.expand(sp.expand(f).rewrite(sp.exp)))
    return sp.Add(*(x for x in terms if not x.free_symbols & set(angles)))
