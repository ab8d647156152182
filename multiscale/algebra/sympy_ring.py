"""Ring elements as SymPy sparse integer polynomials over one common denominator.

Arithmetic on Python integers is several times faster than on SymPy's pure-Python rationals, so an element is a pair
(integer polynomial, positive denominator). `normal` also removes what numerator and denominator have in common; between
two calls the pair may be unreduced, its value is the same.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from fractions import Fraction
from math import gcd, lcm
from operator import itemgetter
from typing import Any

from sympy import Symbol
from sympy.polys.domains import QQ, ZZ
from sympy.polys.orderings import lex
from sympy.polys.rings import PolyRing

from multiscale.algebra.polynomial import Frozen
from multiscale.algebra.ring import Exponents, Key, NamedTerms, RingSpec

__all__ = ["Scaled", "SympyRing"]


class Scaled:
    """numerator/denominator with an integer polynomial above and a positive integer below."""

    __slots__ = ("denominator", "numerator")

    def __init__(self, numerator: Any, denominator: int = 1) -> None:
        self.numerator = numerator
        self.denominator = denominator

    def __add__(self, other: Scaled) -> Scaled:
        if self.denominator == other.denominator:
            return Scaled(self.numerator + other.numerator, self.denominator)
        common = lcm(self.denominator, other.denominator)
        return Scaled(
            self.numerator.mul_ground(ZZ(common // self.denominator))
            + other.numerator.mul_ground(ZZ(common // other.denominator)),
            common,
        )

    def __neg__(self) -> Scaled:
        return Scaled(-self.numerator, self.denominator)

    def __sub__(self, other: Scaled) -> Scaled:
        return self + (-other)

    def __mul__(self, other: Scaled) -> Scaled:
        return Scaled(self.numerator * other.numerator, self.denominator * other.denominator)

    def __bool__(self) -> bool:
        return bool(self.numerator)

    def __len__(self) -> int:
        return len(self.numerator)

    def __eq__(self, other: object) -> bool:
        return isinstance(other, Scaled) and not (self - other)

    __hash__ = None  # type: ignore[assignment]


class SympyRing(NamedTerms):
    """A `Ring` on `sympy.polys.rings`; see `multiscale.algebra.ring` for the contract."""

    representation = "sympy"

    def __init__(self, spec: RingSpec) -> None:
        self.spec = spec
        self._ring: Any = PolyRing(tuple(map(Symbol, spec.names)), ZZ, lex)
        self.generators: tuple[Any, ...] = tuple(Scaled(g) for g in self._ring.gens)
        self.zero = Scaled(self._ring.zero)
        self.one = Scaled(self._ring.one)
        self._squares = [(0, -self.one)]
        for name, value in spec.roots:
            self._squares.append((spec.index[name], self.read(dict(value))))

    def constant(self, value: Fraction | int) -> Any:
        value = Fraction(value)
        return Scaled(self._ring.ground_new(ZZ(value.numerator)), value.denominator)

    def rational(self, x: Any) -> Fraction | None:
        if not x.numerator.is_ground:
            return None
        return Fraction(int(x.numerator.LC), x.denominator)

    def from_terms(self, terms: Mapping[Exponents, Fraction]) -> Any:
        common = lcm(*(c.denominator for c in terms.values()))
        return Scaled(
            self._ring.from_dict({m: ZZ(c.numerator * (common // c.denominator)) for m, c in terms.items()}), common
        )

    def terms(self, x: Any) -> list[tuple[Exponents, Fraction]]:
        return [(m, Fraction(int(c), x.denominator)) for m, c in x.numerator.terms()]

    def normal(self, x: Any) -> Any:
        for k, value in self._squares:
            x = self._without_squares(x, k, value)
        for g, h, r in self.spec.squared_moduli:
            x = self._without_products(x, g, h, r)
        for g, h in self.spec.inverses:
            x = self._without_products(x, g, h)
        common = gcd(x.denominator, *(int(c) for c in x.numerator.values()))
        if common > 1:
            x = Scaled(x.numerator.quo_ground(ZZ(common)), x.denominator // common)
        return x

    def _without_squares(self, x: Scaled, k: int, value: Scaled) -> Scaled:
        """Replace g_k**2 by its value; terms are first collected by the power of that value."""
        powers: dict[int, dict[Exponents, Any]] = {}
        for m, c in x.numerator.items():
            power = m[k] >> 1
            if power:
                m = (*m[:k], m[k] & 1, *m[k + 1 :])
            part = powers.setdefault(power, {})
            part[m] = part.get(m, 0) + c
        if not powers or powers.keys() == {0}:
            return x
        result, factor = self.zero, self.one
        for power in range(max(powers) + 1):
            if power in powers:
                result = result + Scaled(self._ring.from_dict(powers[power]), x.denominator) * factor
            factor = factor * value
        return result

    def _without_products(self, x: Scaled, g: int, h: int, r: int | None = None) -> Scaled:
        """Replace g·h by 1, or by the square of the generator r."""
        changed = False
        terms: dict[Exponents, Any] = {}
        for m, c in x.numerator.items():
            common = min(m[g], m[h])
            if common:
                changed = True
                exponents = list(m)
                exponents[g] -= common
                exponents[h] -= common
                if r is not None:
                    exponents[r] += 2 * common
                m = tuple(exponents)
            terms[m] = terms.get(m, 0) + c
        return Scaled(self._ring.from_dict({m: c for m, c in terms.items() if c}), x.denominator) if changed else x

    def conjugate(self, x: Any) -> Any:
        partner = self.spec.partner
        terms = {tuple([m[k] for k in partner]): -c if m[0] & 1 else c for m, c in x.numerator.items()}
        return Scaled(self._ring.from_dict(terms), x.denominator)

    def diff(self, x: Any, generator: int) -> Any:
        return Scaled(x.numerator.diff(self._ring.gens[generator]), x.denominator)

    def split(self, x: Any, indices: tuple[int, ...], key: Mapping[Exponents, Key | None]) -> dict[Key, Any]:
        groups: dict[Key, dict[Exponents, Any]] = {}
        pick = itemgetter(*indices)
        for m, c in x.numerator.items():
            name = key[pick(m)]
            if name is not None:
                groups.setdefault(name, {})[m] = c
        return {name: Scaled(self._ring.from_dict(part), x.denominator) for name, part in groups.items()}

    def quotient(self, x: Any, divisor: Any) -> Any | None:
        if not x:
            return self.zero
        (result,), remainder = self._over_rationals(x).div([self._over_rationals(divisor)])
        if remainder:
            return None
        return self.from_terms({m: Fraction(int(c.numerator), int(c.denominator)) for m, c in result.items()})

    def _over_rationals(self, x: Scaled) -> Any:
        ring = self._ring.clone(domain=QQ)
        return ring.from_dict({m: QQ(int(c), x.denominator) for m, c in x.numerator.items()})

    def factor(self, x: Any) -> tuple[Fraction, list[tuple[Any, int]]]:
        content, factors = x.numerator.factor_list()
        return Fraction(int(content), x.denominator), [(Scaled(p), e) for p, e in factors]

    def extended(self, reciprocals: Sequence[tuple[str, Frozen]]) -> SympyRing:
        return SympyRing(self.spec.with_reciprocals(reciprocals))

    def lift(self, x: Any) -> Any:
        old = [str(s) for s in x.numerator.ring.symbols]
        place = {name: k for k, name in enumerate(old)}
        pick = itemgetter(*(place.get(name, len(old)) for name in self.spec.names))
        return Scaled(self._ring.from_dict({pick((*m, 0)): c for m, c in x.numerator.items()}), x.denominator)
