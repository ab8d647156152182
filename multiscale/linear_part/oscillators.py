"""L_0 = diag(s² + ω_k²): uncoupled oscillators at leading order, one mode for each unknown.

    D_nA_k = (i/2ω_k) · part_k           at rate ω_k
    U_k    = part_k / (r² − ω_k²)        at every other rate r,   r² − ω_k² = (r − ω_k)(r + ω_k)

The convention covector ℓ_k is the oscillator's own displacement, so U_k has no part at rate ω_k for n ≥ 1.
"""

from __future__ import annotations

from collections.abc import Iterable, Mapping, Sequence
from fractions import Fraction
from typing import Any

from multiscale.algebra.polynomial import Polynomial
from multiscale.algebra.reciprocals import inverse
from multiscale.algebra.ring import Ring
from multiscale.linear_part import Mode, Rate
from multiscale.tower import Field

__all__ = ["Oscillators"]


class Oscillators:
    """A `LinearPart`. Rates count in units of the base frequencies (polynomials by name) divided by `unit`."""

    def __init__(self, rates: Sequence[Rate], bases: Sequence[Polynomial], unit: int, ring: Ring) -> None:
        self._rates, self._bases, self._unit, self._ring = tuple(rates), tuple(bases), unit, ring
        self.size = size = len(self._rates)
        one = (((), Fraction(1)),)
        self.modes = tuple(
            Mode(rate, tuple(one if j == k else () for j in range(size))) for k, rate in enumerate(self._rates)
        )
        scale = Fraction(1, unit)
        self._values = [ring.read({m: c * scale for m, c in base.items()}) for base in self._bases]
        self._inverses: dict[tuple[int, Rate], Any] = {}

    def in_ring(self, ring: Ring) -> Oscillators:
        lifted = Oscillators(self._rates, self._bases, self._unit, ring)
        lifted._inverses.update((key, ring.lift(x)) for key, x in self._inverses.items())
        return lifted

    def value(self, rate: Rate) -> Any:
        """The frequency that a rate stands for, as a ring element."""
        total = self._ring.zero
        for count, value in zip(rate, self._values, strict=True):
            if count:
                total = total + self._ring.constant(count) * value
        return total

    def apply(self, pending: tuple[Field, Field]) -> Field:
        return pending[1]

    def modes_at(self, rate: Rate) -> tuple[int, ...]:
        return tuple(k for k, own in enumerate(self._rates) if own == rate)

    def _divisors_of(self, k: int, rate: Rate) -> tuple[Any, ...]:
        own = self._rates[k]
        if own == rate:
            return (self.value(own),)
        below = tuple(r - w for r, w in zip(rate, own, strict=True))
        above = tuple(r + w for r, w in zip(rate, own, strict=True))
        return self.value(below), self.value(above)

    def divisors(self, pairs: Iterable[tuple[int, Rate]]) -> list[Any]:
        """What stands in the denominators for the (equation, rate) pairs of a level."""
        return [x for k, rate in pairs if (k, rate) not in self._inverses for x in self._divisors_of(k, rate)]

    def _factor(self, k: int, rate: Rate) -> Any:
        """1/(r² − ω_k²), or i/(2ω_k) at the oscillator's own rate."""
        if (k, rate) not in self._inverses:
            ring = self._ring
            factor = ring.one if self._rates[k] != rate else ring.generators[0] * ring.constant(Fraction(1, 2))
            for divisor in self._divisors_of(k, rate):
                factor = ring.normal(factor * inverse(ring, divisor))
            self._inverses[k, rate] = factor
        return self._inverses[k, rate]

    def project(self, part: Mapping[int, Any], rate: Rate) -> dict[int, Any]:
        return {k: self._ring.normal(x * self._factor(k, rate)) for k, x in part.items() if self._rates[k] == rate}

    def solve(self, part: Mapping[int, Any], rate: Rate) -> dict[int, Any]:
        return {k: x * self._factor(k, rate) for k, x in part.items() if self._rates[k] != rate}

    def act(self, part: Mapping[int, Any], rate: Rate) -> dict[int, Any]:
        square = self.value(rate) * self.value(rate)
        own = [self.value(w) for w in self._rates]
        return {k: self._ring.normal((own[k] * own[k] - square) * x) for k, x in part.items()}

    def bracket(self, changes: Mapping[int, Any]) -> dict[int, Any]:
        twice_i = self._ring.generators[0] * self._ring.constant(2)
        return {a: self._ring.normal(twice_i * self.value(self._rates[a]) * change) for a, change in changes.items()}
