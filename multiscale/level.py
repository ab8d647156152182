"""One level of the hierarchy as an analyst would read it."""

from __future__ import annotations

from collections.abc import Iterable
from dataclasses import dataclass
from functools import cached_property

import sympy as sp

from multiscale.algebra.polynomial import Frozen
from multiscale.computed import Computation, Finished
from multiscale.expressions import Writer
from multiscale.linear_part import Rate
from multiscale.problem import Problem
from multiscale.symbols import Symbols

__all__ = ["Level", "Views", "polynomials_below"]


@dataclass(frozen=True)
class Level:
    """Level `order` of the hierarchy L_0 U_n = forcing.

    Attributes
    ----------
    operator : dict
        {unknown: L_0 U_n}, applied to U_n as a function of the fast time T_0.
    forcing : dict
        {unknown: right-hand side}, with the solvability conditions of lower levels inserted and the term in D_nA left
        out.
    secular : dict
        {unknown: the part of the forcing at the natural frequency}, both complex-conjugate halves.
    solvability : dict
        {D_nA: its value}, the condition that removes the secular terms.
    corrections : dict
        {unknown: U_n}, without any part at the natural frequency for n ≥ 1.
    divisors : tuple
        The polynomials in parameters that stand in denominators of this level, after reduction.
    """

    order: int
    operator: dict[sp.Expr, sp.Expr]
    forcing: dict[sp.Expr, sp.Expr]
    secular: dict[sp.Expr, sp.Expr]
    solvability: dict[sp.Symbol, sp.Expr]
    corrections: dict[sp.Expr, sp.Expr]
    divisors: tuple[sp.Expr, ...]

    def _repr_latex_(self) -> str:
        rows = [rf"{sp.latex(left)} &= {sp.latex(self.forcing[u])}" for u, left in self.operator.items()]
        rows += [rf"{sp.latex(d)} &= {sp.latex(value)}" for d, value in self.solvability.items()]
        return r"$\displaystyle \begin{aligned}" + r" \\ ".join(rows) + r"\end{aligned}$"


def polynomials_below(finished: Iterable[Finished]) -> list[Frozen]:
    """The distinct denominators in finished coefficients, in a fixed order."""
    found = {p for f in finished for c in f.values() for q in (c.real, c.imag) for p, _ in q.denominator}
    return sorted(found)


class Views:
    """SymPy views of a computation's levels."""

    def __init__(self, problem: Problem, computation: Computation, symbols: Symbols) -> None:
        self._problem, self._computation, self._symbols = problem, computation, symbols

    @cached_property
    def writer(self) -> Writer:
        return Writer(dict(self._computation.canonical.meanings))

    def frequency(self, rate: Rate) -> sp.Expr:
        """The frequency that a rate stands for."""
        bases = self._computation.canonical.bases
        return sp.Add(
            *(sp.Rational(r, bases.unit) * self.writer.polynomial(b) for r, b in zip(rate, bases.values, strict=True))
        )

    def amplitudes(self, finished: Finished) -> sp.Expr:
        """A polynomial in A and its conjugate, the fast phases left out."""
        return sp.Add(*(self.writer.coefficient(c) * self._monomial(m) for m, c in finished.items()))

    def _monomial(self, exponents: tuple[int, ...]) -> sp.Expr:
        factors = [
            A ** exponents[2 * k] * sp.conjugate(A) ** exponents[2 * k + 1] for k, A in enumerate(self._symbols.A)
        ]
        return sp.Mul(*factors)

    def field(self, finished: Finished) -> sp.Expr:
        """A field in A, its conjugate and T_0, grouped by harmonic."""
        groups: dict[Rate, list[sp.Expr]] = {}
        for m, c in finished.items():
            groups.setdefault(self._computation.rate(m), []).append(self.writer.coefficient(c) * self._monomial(m))
        return sp.Add(
            *(
                sp.Add(*terms) * sp.exp(sp.I * self.frequency(rate) * self._symbols.T[0])
                for rate, terms in sorted(groups.items())
            )
        )

    def level(self, n: int) -> Level:
        problem, computation = self._problem, self._computation
        T0 = self._symbols.T[0]
        operator, forcing, secular, corrections = {}, {}, {}, {}
        below: list[Finished] = []
        for k, (u, omega) in enumerate(zip(problem.unknowns, problem.natural_frequencies, strict=True)):
            unknown = sp.Function(f"{u.func.__name__}_{n}")(T0)
            operator[u] = unknown.diff(T0, 2) + omega**2 * unknown
            corrections[u] = self.field(computation.field(n, k))
            total, resonant = computation.forcing(n, k) if n else ({}, {})
            forcing[u], secular[u] = self.field(total), self.field(resonant)
            below.append(computation.field(n, k))
        solvability = {}
        for a, A in enumerate(self._symbols.A if n else ()):
            change = computation.change(n, a)
            below.append(change)
            solvability[sp.Symbol(f"D_{n}{A.name}", complex=True)] = self.amplitudes(change)
        divisors = tuple(self.writer.polynomial(p) for p in polynomials_below(below))
        return Level(n, operator, forcing, secular, solvability, corrections, divisors)
