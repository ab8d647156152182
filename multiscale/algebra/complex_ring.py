"""Ring elements with complex floating-point coefficients, for linear parts that have no closed form.

Two representations: "complex" has double precision, "mpmath" has `DIGITS` digits, for checks that need small ε.

An element is {exponents: complex}. Generators whose value is a number (i, square roots, constants, frequencies) are
numbers here; amplitudes, phasors and symbolic parameters stay generators, so that the slow flow remains a polynomial in
them. Results carry floats, correct to rounding: this is the one representation that is not exact.

`normal` removes coefficients below `ROUNDING` times the largest one, real and imaginary parts apart: what is left of a
cancellation must not count as a term.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from fractions import Fraction
from operator import add, itemgetter
from typing import Any

import numpy as np
import sympy as sp
from mpmath.ctx_mp import MPContext

from multiscale.algebra.polynomial import Frozen
from multiscale.algebra.ring import Exponents, Key, NamedTerms, RingSpec
from multiscale.errors import MultiscaleError

__all__ = ["DIGITS", "ComplexRing", "MpmathRing"]

ROUNDING = 1e-14
DIGITS = 50
"""Digits of the representation "mpmath"."""


class Element:
    """A polynomial with complex coefficients; never changed."""

    __slots__ = ("terms",)

    def __init__(self, terms: Mapping[Exponents, complex]) -> None:
        self.terms = terms

    def __add__(self, other: Element) -> Element:
        terms = dict(self.terms)
        for m, c in other.terms.items():
            terms[m] = terms.get(m, 0) + c
        return Element({m: c for m, c in terms.items() if c})

    def __neg__(self) -> Element:
        return Element({m: -c for m, c in self.terms.items()})

    def __sub__(self, other: Element) -> Element:
        return self + (-other)

    def __mul__(self, other: Element) -> Element:
        terms: dict[Exponents, complex] = {}
        for m, c in self.terms.items():
            for n, d in other.terms.items():
                both = tuple(map(add, m, n))
                terms[both] = terms.get(both, 0) + c * d
        return Element({m: c for m, c in terms.items() if c})

    def __bool__(self) -> bool:
        return bool(self.terms)

    def __len__(self) -> int:
        return len(self.terms)

    def __eq__(self, other: object) -> bool:
        return isinstance(other, Element) and dict(self.terms) == dict(other.terms)

    __hash__ = None  # type: ignore[assignment]


class ComplexRing(NamedTerms):
    """A `Ring` of floating-point numbers; `values` are the generators that are numbers, as SymPy numbers."""

    representation = "complex"
    rounding: Any = ROUNDING

    def __init__(self, spec: RingSpec, values: Mapping[str, sp.Expr]) -> None:
        self.spec, self._numbers = spec, dict(values)
        self._empty = (0,) * len(spec.names)
        unit = self.number(1)
        self.zero, self.one = Element({}), Element({self._empty: unit})
        known = _with_reciprocals(spec, values)
        self._values: dict[int, Any] = {spec.index[g]: self.number(v) for g, v in known.items() if g in spec.index}
        self._values[0] = self.number(1j)
        self.generators = tuple(
            self.constant(self._values[k]) if k in self._values else Element({self._single(k): unit})
            for k in range(len(spec.names))
        )

    def number(self, value: Any) -> Any:
        """A coefficient from an exact number, a Python or a SymPy one."""
        return float(value) if isinstance(value, int | Fraction | sp.Expr) else value

    def written(self, part: Any) -> Any:
        """A real or imaginary part as it stands in finished coefficients."""
        return float(part)

    def inverted(self, matrix: list[list[Any]]) -> list[list[Any]]:
        return [list(row) for row in np.linalg.inv(np.array(matrix, dtype=complex))]

    def _single(self, k: int) -> Exponents:
        return tuple(int(j == k) for j in range(len(self.spec.names)))

    def constant(self, value: Any) -> Any:
        value = self.number(value)
        return Element({self._empty: value} if value else {})

    def rational(self, x: Any) -> Any:
        """The value of a constant, a complex number here."""
        if not x.terms:
            return 0.0
        return x.terms.get(self._empty) if len(x.terms) == 1 else None

    def from_terms(self, terms: Mapping[Exponents, Any]) -> Any:
        result: dict[Exponents, complex] = {}
        for m, c in terms.items():
            value = self.number(c)
            for k, number in self._values.items():
                if m[k]:
                    value *= number ** m[k]
                    m = (*m[:k], 0, *m[k + 1 :])
            result[m] = result.get(m, 0) + value
        return Element({m: c for m, c in result.items() if c})

    def terms(self, x: Any) -> list[tuple[Exponents, Any]]:
        """Real coefficients, those of i apart, as in the exact rings."""
        found = []
        for m, c in x.terms.items():
            if c.real:
                found.append((m, self.written(c.real)))
            if c.imag:
                found.append(((1, *m[1:]), self.written(c.imag)))
        return found

    def normal(self, x: Any) -> Any:
        terms: dict[Exponents, complex] = {}
        for m, c in x.terms.items():
            for g, h, r in self.spec.squared_moduli:
                if common := min(m[g], m[h]):
                    lowered = list(m)
                    lowered[g] -= common
                    lowered[h] -= common
                    lowered[r] += 2 * common
                    m = tuple(lowered)
            for g, h in self.spec.inverses:
                if common := min(m[g], m[h]):
                    lowered = list(m)
                    lowered[g] -= common
                    lowered[h] -= common
                    m = tuple(lowered)
            terms[m] = terms.get(m, 0) + c
        least = self.rounding * max((abs(c) for c in terms.values()), default=0.0)
        cut = {m: _without_rounding(c, least) for m, c in terms.items()}
        return Element({m: c for m, c in cut.items() if c})

    def conjugate(self, x: Any) -> Any:
        partner = self.spec.partner
        return Element({tuple([m[k] for k in partner]): c.conjugate() for m, c in x.terms.items()})

    def diff(self, x: Any, generator: int) -> Any:
        return Element(
            {
                (*m[:generator], m[generator] - 1, *m[generator + 1 :]): c * m[generator]
                for m, c in x.terms.items()
                if m[generator]
            }
        )

    def split(self, x: Any, indices: tuple[int, ...], key: Mapping[Exponents, Key | None]) -> dict[Key, Any]:
        groups: dict[Key, dict[Exponents, complex]] = {}
        pick = itemgetter(*indices)
        for m, c in x.terms.items():
            name = key[pick(m)]
            if name is not None:
                groups.setdefault(name, {})[m] = c
        return {name: Element(part) for name, part in groups.items()}

    def quotient(self, x: Any, divisor: Any) -> Any | None:
        """None: no division of floating-point polynomials is exact."""
        return None

    def factor(self, x: Any) -> tuple[Fraction, list[tuple[Any, int]]]:
        raise MultiscaleError(
            "a divisor with symbols cannot be split in floating point: give numbers for the parameters that stand in "
            "the linear part or in denominators"
        )

    def extended(self, reciprocals: Sequence[tuple[str, Frozen]]) -> ComplexRing:
        return type(self)(self.spec.with_reciprocals(reciprocals), self._numbers)

    def lift(self, x: Any) -> Any:
        more = len(self.spec.names) - max((len(m) for m in x.terms), default=0)
        return Element({(*m, *(0,) * more): c for m, c in x.terms.items()}) if more else x


def _with_reciprocals(spec: RingSpec, values: Mapping[str, sp.Expr]) -> dict[str, sp.Expr]:
    """The values, and those of the reciprocals of polynomials in them, to more digits than any ring here has."""
    known = dict(values)
    for h, p in spec.reciprocals:
        if all(g in known for m, _ in p for g, _ in m):
            terms = [sp.Rational(c.numerator, c.denominator) * sp.Mul(*(known[g] ** e for g, e in m)) for m, c in p]
            known[h] = sp.N(1 / sp.Add(*terms), DIGITS + 10)
    return known


class MpmathRing(ComplexRing):
    """The same with `DIGITS` digits, in an mpmath context of its own; finished coefficients are SymPy floats."""

    representation = "mpmath"
    context = MPContext()
    context.dps = DIGITS + 5
    rounding = context.mpf(10) ** (3 - DIGITS)

    def number(self, value: Any) -> Any:
        if isinstance(value, Fraction):
            return self.context.mpf(value.numerator) / value.denominator
        if isinstance(value, sp.Expr):
            return self.context.make_mpf(sp.N(value, self.context.dps)._mpf_)
        return self.context.convert(value)

    def written(self, part: Any) -> Any:
        return sp.Float._new(part._mpf_, sp.Float("1", DIGITS)._prec)

    def inverted(self, matrix: list[list[Any]]) -> list[list[Any]]:
        return self.context.inverse(self.context.matrix(matrix)).tolist()  # type: ignore[no-any-return]


def _without_rounding(c: Any, least: Any) -> Any:
    """c without a part that only rounding left; a real number stays real."""
    if abs(c.imag) <= least:
        return c.real if abs(c.real) > least else 0
    return c if abs(c.real) > least else c - c.real
