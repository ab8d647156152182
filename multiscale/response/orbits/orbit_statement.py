"""What the recursion for a periodic orbit needs to know of a problem: one oscillator, its force, and which orbit."""

from __future__ import annotations

from dataclasses import dataclass
from fractions import Fraction
from typing import Any

import sympy as sp

from multiscale.errors import ProblemError, UnsupportedTermError
from multiscale.expressions import Writer
from multiscale.forces.polynomial import Term
from multiscale.problem import Problem
from multiscale.problem.canonical import Canonical
from multiscale.problem.reading import decimals, given_expression
from multiscale.response.orbits.leading import Leading, check_single, leading_damping
from multiscale.response.orbits.limit_cycles import positive_roots
from multiscale.symbols import symbols_of

__all__ = ["Statement", "read_statement"]


@dataclass(frozen=True)
class Statement:
    """One oscillator and the orbit that is meant.

    `start` is a_0; `damping` the level p of an isolated orbit, None with free amplitude; `terms` the force with
    coefficients in the user's symbols.
    """

    canonical: Canonical
    natural: sp.Expr
    terms: tuple[tuple[Term, sp.Expr], ...]
    start: sp.Expr
    damping: int | None
    leading: Leading | None
    small: sp.Symbol

    def depth(self, order: int) -> int:
        """The level to go to for the frequency through `order`: a term at ε¹ may bring a_{n−1} into ω_n, and a_{n−1}
        is fixed at level n − 1 + p."""
        return order if self.damping is None else order + self.damping - 1

    @property
    def is_numeric(self) -> bool:
        return not (self.start.free_symbols or self.symbols)

    @property
    def symbols(self) -> set[sp.Symbol]:
        """The parameters."""
        return set(self.natural.free_symbols).union(*(c.free_symbols for _, c in self.terms))

    @property
    def has_odd_degrees(self) -> bool:
        """Whether −u solves the equation with u, so that the orbit has odd harmonics only."""
        return all(len(term.factors) % 2 for term, _ in self.terms)

    @property
    def homogeneity(self) -> Fraction | None:
        """κ, if every term of power p has degree 1 + κp: the level n of Y then goes as a_0^{κn}."""
        ratios = {Fraction(len(term.factors) - 1, term.power) for term, _ in self.terms}
        return ratios.pop() if len(ratios) == 1 else None


def read_statement(problem: Problem, order: int, amplitude: Any, root: int | None) -> Statement:
    """Raises `ProblemError` or `UnsupportedTermError`, with what to state instead."""
    check_single(problem.canonical(order), "the periodic orbit is given")
    leading = None if amplitude is not None else leading_damping(problem)
    canonical = problem.canonical(order if leading is None else order + leading.level - 1)
    write = Writer(dict(canonical.meanings))
    terms = tuple((term, write.polynomial(term.coefficient)) for term in canonical.force[0])
    for term, c in terms:
        if not term.power:
            raise UnsupportedTermError(
                f"term {-c} is constant and not small: measure {problem.unknowns[0]} from its rest position"
            )
    natural = sp.S(canonical.frequencies[0])
    if leading is None:
        if root is not None:
            raise ProblemError(f"root={root}: this problem has periodic motions of every amplitude; give `amplitude`")
        start = symbols_of(problem, 1, 0, 0).a[0] if amplitude is None else _amplitude(amplitude)
        return Statement(canonical, natural, terms, start, None, None, problem.small)
    rates = {m: write.quotient(q) for m, q in leading.terms.items()}
    roots = positive_roots(rates, problem.small)
    start = sp.sqrt(4 * _chosen(roots, root))
    return Statement(canonical, natural, terms, start, leading.level, leading, problem.small)


def _amplitude(given: Any) -> sp.Expr:
    value = given_expression(given)
    if value is None or value.is_positive is False or value.has(sp.I, sp.nan, sp.oo):
        raise ProblemError(f"amplitude={given!r}: expected a positive number or a symbol")
    return decimals(value)


def _chosen(roots: list[sp.Expr], root: int | None) -> sp.Expr:
    if not roots:
        raise ProblemError(
            "no limit cycle: the amplitude grows or decays at every amplitude. Give `amplitude` only where motions of "
            "that amplitude are periodic"
        )
    listed = ", ".join(f"root={k}: {sp.sqrt(4 * rho)}" for k, rho in enumerate(roots))
    if root is None and len(roots) > 1:
        raise ProblemError(f"{len(roots)} limit cycles, of leading amplitudes {listed}: choose one by `root`")
    index = 0 if root is None else root
    if isinstance(index, bool) or not isinstance(index, int) or index not in range(len(roots)):
        raise ProblemError(f"root={root!r}: the leading amplitudes are {listed}")
    return roots[index]
