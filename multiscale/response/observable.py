"""Quantities derived from the motion: any polynomial in the unknowns and their derivatives, expanded to the same order.

    Q = Σ ε^p c · Π jets,      [εⁿ] Q = Σ c · [ε^{n−p}] Π jets        (products of the computed fields)

The harmonics of an unknown are the coefficients of its fast angles: Q = C_0 + Σ_k (C_k e^{ikΦ} + conjugate).
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property
from typing import TYPE_CHECKING

import sympy as sp

from multiscale.algebra.quotient import finish
from multiscale.computed import Finished
from multiscale.errors import EvaluationError, UnsupportedTermError
from multiscale.expansion import Expansion
from multiscale.frame import turns
from multiscale.tower import Jet

if TYPE_CHECKING:
    from multiscale.codegen.numpy_function import NumpyFunction

__all__ = ["Observable", "harmonics", "observable"]

Row = tuple[int, sp.Expr, tuple[Jet, ...]]


@dataclass(frozen=True)
class Observable:
    """A quantity along the motion of an expansion; made by `observable`.

    Attributes
    ----------
    expansion : Expansion
    expression : Expr
        The quantity as it was given, a polynomial in unknowns and their first two time derivatives.
    """

    expansion: Expansion
    expression: sp.Expr

    @cached_property
    def _rows(self) -> list[Row]:
        """(power of ε, coefficient, jets) of each term."""
        problem = self.expansion.problem
        jets = {u.diff(problem.time, d) if d else u: (k, d) for k, u in enumerate(problem.unknowns) for d in (2, 1, 0)}
        hidden = {x: sp.Symbol(f"@{k}.{d}") for x, (k, d) in jets.items()}
        derivatives = {x: s for x, s in hidden.items() if x.is_Derivative}
        plain = problem.with_relations(self.expression).xreplace(derivatives).xreplace(hidden)
        generators = [*hidden.values(), problem.small]
        try:
            polynomial = sp.Poly(plain, *generators)
        except sp.PolynomialError:
            raise self._refused() from None
        rows = []
        for monomial, c in polynomial.terms():
            if c.free_symbols & set(generators) or problem.time in c.free_symbols:
                raise self._refused()
            factors = tuple(sorted(jet for jet, e in zip(jets.values(), monomial, strict=False) for _ in range(e)))
            rows.append((monomial[-1], c, factors))
        return rows

    def _refused(self) -> UnsupportedTermError:
        return UnsupportedTermError(
            f"quantity {self.expression}: expected a polynomial in the unknowns, their first two time derivatives and "
            "the small parameter, with coefficients that are constant in time"
        )

    def _products(self, row: Row) -> list[tuple[int, Finished]]:
        """(power of ε, product of jets at that power) of one term, as far as the expansion goes."""
        power, _, factors = row
        tower = self.expansion.computation.hierarchy.tower
        levels = range(self.expansion.order - power + 1)
        return [(power + n, finish(tower.ring, tower.ring.normal(tower.product(factors, n)))) for n in levels]

    @cached_property
    def harmonics(self) -> dict[int | sp.Expr, sp.Expr]:
        """{k: C_k}: Q = C_0 + Σ (C_k e^{ikΦ} + conjugate), in the amplitudes A of the rotating frame.

        For one mode k counts multiples of its fast angle (a fraction where a drive is no multiple of it); for several
        modes, and where a drive is not in the frame, the keys are the fast angles themselves.
        """
        views, small = self.expansion.views, self.expansion.problem.small
        found: dict[int | sp.Expr, sp.Expr] = {}
        for row in self._rows:
            for power, finished in self._products(row):
                for m, c in finished.items():
                    own = turns(m)
                    if own < tuple(-x for x in own):
                        continue
                    term = small**power * row[1] * views.writer.coefficient(c) * views.monomial(m)
                    key = self._key(own)
                    found[key] = found.get(key, sp.Integer(0)) + term
        return dict(sorted(found.items(), key=lambda item: (not isinstance(item[0], int), str(item[0]).zfill(4))))

    def _key(self, own: tuple[int, ...]) -> int | sp.Expr:
        views = self.expansion.views
        angle = views.angle(own)
        if angle == 0:
            return 0
        ratio = sp.expand(angle / views.fast_angle(0)) if self.expansion.computation.modes == 1 else angle
        if self.expansion.computation.modes == 1 and ratio.is_Rational:
            return int(ratio) if ratio.is_Integer else ratio
        return angle

    def solution(self, form: str = "complex") -> sp.Expr:
        """The quantity in slow variables and time, in the forms of `Expansion.solution`."""
        small = self.expansion.problem.small
        terms = []
        for row in self._rows:
            for power, finished in self._products(row):
                terms.append(small**power * row[1] * self.expansion.field_expression(finished, form))
        return sp.Add(*terms)

    def to_numpy(self) -> NumpyFunction:
        """``f(t, y, *parameters)`` of shape B, y the slow state, Cartesian in the rotating frame."""
        from multiscale.codegen.functions import observable_function

        known = {*self.expansion.problem.parameters, self.expansion.problem.small}
        strange = set().union(*(c.free_symbols for _, c, _ in self._rows)) - known
        if strange:
            raise EvaluationError(f"{min(strange, key=str)} is no parameter of the problem: substitute a number for it")
        terms = [(c, self._products((power, c, factors))) for power, c, factors in self._rows]
        return observable_function(self.expansion.problem, self.expansion.computation, terms)


def observable(expansion: Expansion, expression: sp.Expr) -> Observable:
    """A polynomial in unknowns and derivatives (energy, transmitted force, power), expanded to the same order.

    Parameters
    ----------
    expansion : Expansion
    expression : Expr
        Polynomial in the unknowns, their first and second time derivatives and the small parameter.

    Raises
    ------
    UnsupportedTermError
        The expression is no such polynomial.

    Examples
    --------
    >>> import sympy as sp, multiscale as ms
    >>> t = sp.Symbol("t", real=True)
    >>> eps = sp.Symbol("epsilon", positive=True)
    >>> u = sp.Function("u")(t)
    >>> result = ms.expand(ms.Problem(u.diff(t, 2) + u + eps*u**3, u, small=eps), order=1)
    >>> energy = ms.observable(result, u.diff(t)**2/2 + u**2/2 + eps*u**4/4)
    >>> energy.harmonics[0]
    9*A**2*epsilon*conjugate(A)**2/2 + 2*A*conjugate(A)
    """
    if not isinstance(expression, sp.Expr):
        raise EvaluationError(f"quantity {expression!r}: expected a SymPy expression in {expansion.problem.unknowns}")
    found = Observable(expansion, expression)
    found._rows  # noqa: B018 - refuses what is no polynomial at once
    return found


def harmonics(expansion: Expansion) -> dict[sp.Expr, dict[int | sp.Expr, sp.Expr]]:
    """{unknown: {k: C_k}}, u = C_0 + Σ (C_k e^{ikΦ} + conjugate): constant part and complex amplitude of each harmonic.

    Examples
    --------
    >>> import sympy as sp, multiscale as ms
    >>> t = sp.Symbol("t", real=True)
    >>> eps = sp.Symbol("epsilon", positive=True)
    >>> u = sp.Function("u")(t)
    >>> result = ms.expand(ms.Problem(u.diff(t, 2) + u + eps*u**3, u, small=eps), order=1)
    >>> ms.harmonics(result)
    {u(t): {1: A, 3: A**3*epsilon/8}}
    """
    return {u: observable(expansion, u).harmonics for u in expansion.problem.unknowns}
