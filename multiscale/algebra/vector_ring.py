"""Ring elements whose coefficients are vectors: fields of a large model, one entry for each degree of freedom.

An element is {exponents: c}, c a complex number or an array of shape (n,). Numbers multiply vectors; two vectors
multiply entry by entry, which is what springs need, whose force is a product of elongations. Generators whose value is
a number (i, frequencies, their reciprocals) are numbers here; amplitudes, phasors and parameters stay generators.

Laws: those of `ring`, for coefficients in this algebra. `normal` removes monomials whose whole coefficient is below
`ROUNDING` times the largest: what is left of a cancellation must not count as a term.

Real fields cost half: `real_product` multiplies out one of each pair of conjugate monomials.
"""

from __future__ import annotations

from collections.abc import Callable, Mapping, Sequence
from fractions import Fraction
from operator import add, itemgetter
from typing import Any

import numpy as np
import numpy.typing as npt

from multiscale.algebra.complex_ring import ROUNDING, ComplexRing
from multiscale.algebra.polynomial import Frozen
from multiscale.algebra.ring import Exponents, Key, RingSpec
from multiscale.errors import MultiscaleError

__all__ = ["VectorElement", "VectorRing", "columns_of", "mapped"]


Array = npt.NDArray[Any]


class VectorElement:
    """A polynomial with numbers or vectors as coefficients; never changed."""

    __slots__ = ("terms",)

    def __init__(self, terms: Mapping[Exponents, Any]) -> None:
        self.terms = terms

    def __add__(self, other: VectorElement) -> VectorElement:
        terms = dict(self.terms)
        for m, c in other.terms.items():
            terms[m] = terms[m] + c if m in terms else c
        return VectorElement({m: c for m, c in terms.items() if m not in other.terms or _some(c)})

    def __neg__(self) -> VectorElement:
        return VectorElement({m: -c for m, c in self.terms.items()})

    def __sub__(self, other: VectorElement) -> VectorElement:
        return self + (-other)

    def __mul__(self, other: VectorElement) -> VectorElement:
        terms: dict[Exponents, Any] = {}
        for m, c in self.terms.items():
            for n, d in other.terms.items():
                both = tuple(map(add, m, n))
                terms[both] = terms[both] + c * d if both in terms else c * d
        return VectorElement({m: c for m, c in terms.items() if _some(c)})

    def __bool__(self) -> bool:
        return bool(self.terms)

    def __len__(self) -> int:
        return len(self.terms)

    def __eq__(self, other: object) -> bool:
        return (
            isinstance(other, VectorElement)
            and self.terms.keys() == other.terms.keys()
            and all(np.array_equal(c, other.terms[m]) for m, c in self.terms.items())
        )

    __hash__ = None  # type: ignore[assignment]


class VectorRing(ComplexRing):
    """A `Ring` of numbers and vectors; `values` are the generators that are numbers."""

    def __init__(self, spec: RingSpec, values: Mapping[str, float]) -> None:
        super().__init__(spec, values)
        zero, one = VectorElement({}), VectorElement({self._empty: 1.0})
        self.zero, self.one = zero, one  # type: ignore[assignment]
        self.generators = tuple(VectorElement(x.terms) for x in self.generators)

    def constant(self, value: Any) -> Any:
        if isinstance(value, int | Fraction):
            value = float(value)
        return VectorElement({self._empty: value} if _some(value) else {})

    def from_terms(self, terms: Mapping[Exponents, Any]) -> Any:
        result: dict[Exponents, Any] = {}
        for m, c in terms.items():
            value = float(c) if isinstance(c, int | Fraction) else c
            for k, number in self._values.items():
                if m[k]:
                    value = value * number ** m[k]
                    m = (*m[:k], 0, *m[k + 1 :])
            result[m] = result[m] + value if m in result else value
        return VectorElement({m: c for m, c in result.items() if _some(c)})

    def terms(self, x: Any) -> list[tuple[Exponents, Any]]:
        """Of elements with numbers as coefficients."""
        if any(isinstance(c, np.ndarray) for c in x.terms.values()):
            raise MultiscaleError(
                "this works on numbers, but the fields of a large model are vectors: take displacement() at the "
                "degrees of freedom that matter, or the slow flow"
            )
        return super().terms(x)

    def normal(self, x: Any) -> Any:
        terms: dict[Exponents, Any] = {}
        for m, c in x.terms.items():
            m = self._lowered(m)
            terms[m] = terms[m] + c if m in terms else c
        sizes = {m: float(np.max(np.abs(c))) for m, c in terms.items()}
        least = ROUNDING * max(sizes.values(), default=0.0)
        return VectorElement({m: _clean(c, least) for m, c in terms.items() if sizes[m] > least})

    def _lowered(self, m: Exponents) -> Exponents:
        """The exponents with e·ē and s·(1/s) cancelled."""
        for g, h in self.spec.inverses:
            if common := min(m[g], m[h]):
                lowered = list(m)
                lowered[g] -= common
                lowered[h] -= common
                m = tuple(lowered)
        return m

    def conjugate(self, x: Any) -> Any:
        pick = itemgetter(*self.spec.partner)
        return VectorElement({pick(m): _conjugate(c) for m, c in x.terms.items()})

    def diff(self, x: Any, generator: int) -> Any:
        k = generator
        return VectorElement({(*m[:k], m[k] - 1, *m[k + 1 :]): c * m[k] for m, c in x.terms.items() if m[k]})

    def split(self, x: Any, indices: tuple[int, ...], key: Mapping[Exponents, Key | None]) -> dict[Key, Any]:
        return {name: VectorElement(part.terms) for name, part in super().split(x, indices, key).items()}

    def extended(self, reciprocals: Sequence[tuple[str, Frozen]]) -> VectorRing:
        return VectorRing(self.spec.with_reciprocals(reciprocals), self._numbers)

    def lift(self, x: Any) -> Any:
        more = len(self.spec.names) - max((len(m) for m in x.terms), default=0)
        return VectorElement({(*m, *(0,) * more): c for m, c in x.terms.items()}) if more else x

    def real_product(self, x: Any, y: Any) -> Any:
        """x·y for elements that are their own conjugates."""
        pick = itemgetter(*self.spec.partner)
        terms: dict[Exponents, Any] = {}
        for m, c in x.terms.items():
            for n, d in y.terms.items():
                both = tuple(map(add, m, n))
                if both < pick(both):
                    continue
                terms[both] = terms[both] + c * d if both in terms else c * d
        return self.normal(self.completed(terms))

    def completed(self, half: Mapping[Exponents, Any]) -> Any:
        """The element that is its own conjugate, from one of each pair of conjugate monomials."""
        pick = itemgetter(*self.spec.partner)
        terms = dict(half)
        terms.update((pick(m), _conjugate(c)) for m, c in half.items() if pick(m) != m)
        return VectorElement(terms)

    def entry(self, x: Any, k: int) -> Any:
        """The element of numbers that one degree of freedom has in a field."""
        picked = {m: c[k] for m, c in x.terms.items()}
        return VectorElement({m: c for m, c in picked.items() if c})


def mapped(act: Callable[[Array], Array], element: VectorElement) -> VectorElement:
    """A linear map on every coefficient, all in one product of matrices."""
    if not element.terms:
        return element
    monomials, columns = columns_of(element)
    return VectorElement(dict(zip(monomials, np.ascontiguousarray(act(columns).T), strict=True)))


def columns_of(element: VectorElement) -> tuple[list[Exponents], Array]:
    """The monomials, and their coefficients as the columns of one array."""
    return list(element.terms), np.stack(list(element.terms.values())).T


def _some(c: Any) -> bool:
    return bool(c.any()) if isinstance(c, np.ndarray) else bool(c)


def _conjugate(c: Any) -> Any:
    return c.conjugate() if np.iscomplexobj(c) else c


def _clean(c: Any, least: float) -> Any:
    """A number without real or imaginary part below `least`; a vector is kept as it is, real where it can be."""
    if isinstance(c, np.ndarray):
        return c.real.copy() if np.iscomplexobj(c) and not np.any(np.abs(c.imag) > least) else c
    c = complex(c)
    return complex(c.real if abs(c.real) > least else 0.0, c.imag if abs(c.imag) > least else 0.0)
