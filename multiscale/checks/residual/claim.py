"""What an expansion claims, as plain data: fields U_0 … U_N and slow derivatives D_1A … D_NA, SymPy expressions.

The certificate sees nothing else of an expansion, so a claim can be altered and looked at again.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass, replace

import sympy as sp

from multiscale.expansion import Expansion

__all__ = ["Claim", "claim_of"]


@dataclass(frozen=True)
class Claim:
    """`fields[n][k]` is U_n of the k-th unknown, `flow[n - 1][j]` is D_n of the j-th amplitude, both in A, its
    conjugate and time (`times` are the symbols that stand for it); `frequencies` are positive, `divisors` non-zero."""

    amplitudes: tuple[sp.Symbol, ...]
    times: tuple[sp.Symbol, ...]
    fields: tuple[tuple[sp.Expr, ...], ...]
    flow: tuple[tuple[sp.Expr, ...], ...]
    amplitude: str = "fundamental"
    frequencies: tuple[sp.Expr, ...] = ()
    divisors: tuple[sp.Expr, ...] = ()

    @property
    def order(self) -> int:
        return len(self.flow)

    @property
    def beginning(self) -> Claim:
        """U_0 alone, with the slow flow of the first level."""
        return replace(self, fields=self.fields[:1], flow=self.flow[:1])

    def changed(self, change: Callable[[sp.Expr], sp.Expr]) -> Claim:
        """The claim with every expression passed through `change`."""
        return replace(
            self,
            fields=tuple(tuple(map(change, level)) for level in self.fields),
            flow=tuple(tuple(map(change, level)) for level in self.flow),
            frequencies=tuple(map(change, self.frequencies)),
            divisors=tuple(map(change, self.divisors)),
        )


def claim_of(expansion: Expansion) -> Claim:
    """The published expressions of an expansion: the corrections of its levels and its slow flow."""
    problem, symbols, computation = expansion.problem, expansion.symbols, expansion.computation
    return Claim(
        amplitudes=symbols.A,
        times=(symbols.T[0], problem.time),
        fields=tuple(
            # As levels[n].corrections has them; the rest of a level takes longer to write and is not looked at.
            tuple(expansion.field_expression(computation.field(n, k), "complex") for k in range(len(problem.unknowns)))
            for n in range(expansion.order + 1)
        ),
        flow=tuple(tuple(expansion.slow_flow.by_scale[n][A] for A in symbols.A) for n in range(1, expansion.order + 1)),
        amplitude=expansion.amplitude,
        frequencies=tuple(problem.natural_frequencies),
        divisors=expansion.nonresonance,
    )
