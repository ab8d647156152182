"""Finished coefficients as SymPy expressions, compact: content, common factors, factored numerator over the divisors.

Equal coefficients give identical expressions. Numerators of up to `FACTOR_LIMIT` terms are factored over the rationals;
longer ones are sums with their common monomial and content in front.
"""

from __future__ import annotations

from collections.abc import Iterable, Mapping
from fractions import Fraction
from typing import Any

import sympy as sp
from sympy.polys.domains import ZZ
from sympy.polys.orderings import lex
from sympy.polys.rings import PolyRing

from multiscale.algebra.polynomial import Frozen, Monomial, freeze, primitive
from multiscale.algebra.quotient import Coefficient, Quotient
from multiscale.algebra.ring import IMAGINARY

__all__ = ["FACTOR_LIMIT", "Writer"]

FACTOR_LIMIT = 40


FLOATING = (float, sp.Float)


def _number(c: Any) -> sp.Expr:
    if isinstance(c, FLOATING):
        return sp.Float(c) if isinstance(c, float) else c
    return sp.Rational(c.numerator, c.denominator)


class Writer:
    """Writes with `meanings`, the user's expression for each generator, and `reciprocals`, the denominators by name.

    Those generators in `opaque` are written as they stand.
    """

    def __init__(
        self,
        meanings: Mapping[str, sp.Expr],
        reciprocals: Mapping[str, Frozen] | None = None,
        opaque: Iterable[str] = (),
    ) -> None:
        self._meanings, self._reciprocals = dict(meanings), dict(reciprocals or {})
        self._opaque = frozenset(opaque)
        self._quotients: dict[Quotient, sp.Expr] = {}

    def monomial(self, monomial: Monomial) -> sp.Expr:
        return sp.Mul(*(self._meanings[name] ** e for name, e in monomial))

    def polynomial(self, terms: Iterable[tuple[Monomial, Fraction]]) -> sp.Expr:
        return sp.Add(*(_number(c) * self.monomial(m) for m, c in terms))

    def quotient(self, q: Quotient) -> sp.Expr:
        if q not in self._quotients:
            self._quotients[q] = self._split(q) if self._opaque and q else self._plain(q)
        return self._quotients[q]

    def _plain(self, q: Quotient) -> sp.Expr:
        below = [self.polynomial(p) ** -e for p, e in q.denominator]
        return sp.Mul(*self._numerator(q.numerator), *below) if q else sp.Integer(0)

    def _split(self, q: Quotient) -> sp.Expr:
        """Fourier coefficients of forces are formulas of their own: what multiplies each is written apart."""
        groups: dict[Monomial, dict[Monomial, Fraction]] = {}
        for m, c in q.numerator:
            outside = tuple((name, e) for name, e in m if name in self._opaque)
            groups.setdefault(outside, {})[tuple((name, e) for name, e in m if name not in self._opaque)] = c
        parts = [(m, self._plain(Quotient(freeze(terms), q.denominator))) for m, terms in sorted(groups.items())]
        return sp.Add(*(self.monomial(m) * part for m, part in parts))

    def named(self, terms: Frozen) -> sp.Expr:
        """A complex polynomial that may hold i and reciprocals, as in shapes of modes."""
        total = sp.Integer(0)
        for monomial, c in terms:
            total += _number(c) * sp.Mul(*(self._factor(name) ** e for name, e in monomial))
        return sp.factor_terms(sp.cancel(total)) if total.free_symbols else sp.expand(sp.radsimp(total))

    def _factor(self, name: str) -> sp.Expr:
        if name == IMAGINARY:
            return sp.I
        return self._meanings[name] if name in self._meanings else 1 / self.polynomial(self._reciprocals[name])

    def coefficient(self, c: Coefficient) -> sp.Expr:
        return self.quotient(c.real) + sp.I * self.quotient(c.imag)

    def _numerator(self, terms: Frozen) -> list[sp.Expr]:
        """Content, common monomial and the factors of the rest."""
        if any(isinstance(c, FLOATING) for _, c in terms):
            return [self.polynomial(terms)]
        content, rest = primitive(dict(terms))
        lowest = dict(terms[0][0])
        for m, _ in terms[1:]:
            powers = dict(m)
            lowest = {name: min(e, powers[name]) for name, e in lowest.items() if name in powers}
        common = tuple(sorted(lowest.items()))
        rest = {
            tuple((name, e - lowest.get(name, 0)) for name, e in m if e > lowest.get(name, 0)): c
            for m, c in rest.items()
        }
        sign, factors = self._factors(rest)
        content *= sign
        if content < 0:
            # A minus sign goes into the first factor that is a sum, which is how such fractions are usually written.
            for k, (factor, power) in enumerate(factors):
                if factor.is_Add and power % 2:
                    factors[k] = (sp.Add(*(-term for term in factor.args)), power)
                    content = -content
                    break
        return [_number(content), self.monomial(common), *(f**e for f, e in factors)]

    def _factors(self, terms: Mapping[Monomial, Fraction]) -> tuple[int, list[tuple[sp.Expr, int]]]:
        """Sign and (factor, power) of a primitive polynomial without a common monomial."""
        names = sorted({name for m in terms for name, _ in m})
        if not names:
            return 1, []
        if len(terms) > FACTOR_LIMIT:
            return 1, [(self.polynomial(terms.items()), 1)]
        ring = PolyRing(tuple(map(sp.Symbol, names)), ZZ, lex)
        table = {tuple(dict(m).get(name, 0) for name in names): ZZ(c.numerator) for m, c in terms.items()}
        sign, factors = ring.from_dict(table).factor_list()
        result = []
        for p, power in factors:
            named = [
                (tuple((n, int(e)) for n, e in zip(names, m, strict=True) if e), Fraction(int(c))) for m, c in p.terms()
            ]
            result.append((self.polynomial(named), int(power)))
        return int(sign), result
