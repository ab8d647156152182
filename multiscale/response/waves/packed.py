"""Waves on FLINT: each part one polynomial in y = e^{isθ}, palindromic or antipalindromic (python-flint, optional).

    part = (Σ_j c_j y^j e^{−iKθ})/den,     c_j = ±c_{L−j},  L = 2K/s;      s = 2 when every harmonic has the parity of K

Of a product only the half k ≤ 0 is formed, from those coefficients of the factors that can reach |k| ≤ limit; sums are
formed on one common denominator and reduced once. `ExactParts` has integers, `BallParts` balls and no denominator.
"""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass
from fractions import Fraction
from typing import Any

try:
    from flint import arb, arb_poly, fmpq, fmpz, fmpz_poly
except ImportError as error:  # pragma: no cover - exercised by the bare-environment check
    raise ImportError(
        "this representation needs python-flint: pip install 'multiscale-expansions[fast]'"
    ) from error

__all__ = ["BallParts", "ExactParts", "PackedWaves", "Wave"]


@dataclass(frozen=True)
class Wave:
    """Highest harmonic, and the parts in cosines and in sines as (polynomial, denominator), None for zero."""

    top: int
    even: Any
    odd: Any


class ExactParts:
    """Integer polynomials over common denominators."""

    @staticmethod
    def scalar(value: Any) -> Any:
        return fmpq(value.numerator, value.denominator) if isinstance(value, int | Fraction) else value

    @staticmethod
    def polynomial(coefficients: Sequence[Any]) -> tuple[Any, Any] | None:
        """From rational coefficients."""
        if not any(coefficients):
            return None
        common = fmpz(1)
        for c in coefficients:
            common = common.lcm(c.q)
        return fmpz_poly([c.p * (common // c.q) for c in coefficients]), common

    @staticmethod
    def coefficients(part: Any, count: int) -> list[Any]:
        polynomial, below = part
        found = [fmpq(c, below) for c in polynomial.coeffs()[:count]]
        return found + [fmpq(0)] * (count - len(found))

    @staticmethod
    def cut(part: Any, first: int, count: int) -> Any:
        return part[0].right_shift(first).truncate(count), part[1]

    @staticmethod
    def product(x: Any, y: Any, count: int) -> tuple[Any, Any]:
        return x[0].mul_low(y[0], count), x[1] * y[1]

    @staticmethod
    def total(terms: Sequence[tuple[Any, Any]]) -> Any:
        """Σ scalar · part, reduced; None for zero."""
        common = fmpz(1)
        for c, (_, below) in terms:
            common = common.lcm(below * c.q)
        above = fmpz_poly([0])
        for c, (polynomial, below) in terms:
            factor = c.p * (common // (below * c.q))
            above = above + (polynomial if factor == 1 else polynomial * factor)
        if not above:
            return None
        shared = above.content().gcd(common)
        return (above, common) if shared == 1 else (above // shared, common // shared)

    @staticmethod
    def rebuilt(part: Any, change: Callable[[list[Any]], list[Any]]) -> Any:
        polynomial, below = part
        return fmpz_poly(change(polynomial.coeffs())), below


class BallParts:
    """Polynomials of balls at the working precision of FLINT's context."""

    @staticmethod
    def scalar(value: Any) -> Any:
        return arb(fmpq(value.numerator, value.denominator)) if isinstance(value, int | Fraction) else value

    @staticmethod
    def polynomial(coefficients: Sequence[Any]) -> Any:
        return (arb_poly(list(coefficients)), None) if any(c != 0 for c in coefficients) else None

    @staticmethod
    def coefficients(part: Any, count: int) -> list[Any]:
        found = part[0].coeffs()[:count]
        return found + [arb(0)] * (count - len(found))

    @staticmethod
    def cut(part: Any, first: int, count: int) -> Any:
        return part[0].right_shift(first).truncate(count), None

    @staticmethod
    def product(x: Any, y: Any, count: int) -> tuple[Any, Any]:
        return (x[0].truncate(count) * y[0].truncate(count)).truncate(count), None

    @staticmethod
    def total(terms: Sequence[tuple[Any, Any]]) -> Any:
        above = arb_poly([0])
        for c, (polynomial, _) in terms:
            above = above + (polynomial if c == 1 else polynomial * c)
        return (above, None) if above.length() else None

    @staticmethod
    def rebuilt(part: Any, change: Callable[[list[Any]], list[Any]]) -> Any:
        return arb_poly(change(part[0].coeffs())), None


class PackedWaves:
    """`Waves` on FLINT polynomials; `step` is s, `square` is d."""

    def __init__(self, parts: type[ExactParts] | type[BallParts], step: int, square: int = 1) -> None:
        self._parts, self._step, self._square = parts, step, parts.scalar(-square)
        self.scalar = parts.scalar
        self.zero = Wave(0, None, None)

    def unit(self) -> Wave:
        one, null = self.scalar(1), self.scalar(0)
        line = [one, one] if self._step == 2 else [one, null, one]
        return Wave(1, self._parts.polynomial(line), None)

    def _top(self, reach: int, limit: int) -> int:
        """The highest harmonic ≤ limit of a wave that goes up to `reach`."""
        return reach if reach <= limit else limit - (reach - limit) % self._step

    def _within(self, x: Wave, limit: int) -> Wave:
        top = self._top(x.top, limit)
        if top == x.top:
            return x
        if top < 0:
            return self.zero
        first, count = (x.top - top) // self._step, 2 * top // self._step + 1
        even, odd = (part and self._parts.cut(part, first, count) for part in (x.even, x.odd))
        return Wave(top, even, odd)

    def _mirrored(self, half: Any, top: int, sign: int) -> Any:
        """The whole part from its coefficients at −top … 0 (or −1)."""
        if half is None:
            return None
        count = top // self._step + 1
        whole = 2 * top // self._step + 1

        def change(low: list[Any]) -> list[Any]:
            low = (low + [low[0] * 0] * count)[:count]
            high = low[: whole - count][::-1]
            return low + (high if sign > 0 else [-c for c in high])

        return self._parts.rebuilt(half, change)

    def products(self, terms: Sequence[tuple[Any, Wave, Wave]], limit: int) -> Wave:
        step, parts = self._step, self._parts
        reach = max((x.top + y.top for _, x, y in terms), default=0)
        top = self._top(reach, limit)
        if top < 0:
            return self.zero
        even: list[tuple[Any, Any]] = []
        odd: list[tuple[Any, Any]] = []
        for c, x, y in terms:
            x = self._within(x, top + y.top)
            y = self._within(y, top + x.top)
            shift = (x.top + y.top - top) // step
            count = top // step + 1 + shift
            for a, b, into, factor in (
                (x.even, y.even, even, c),
                (x.odd, y.odd, even, c * self._square),
                (x.even, y.odd, odd, c),
                (x.odd, y.even, odd, c),
            ):
                if a is not None and b is not None and count > 0:
                    polynomial, below = parts.product(a, b, count)
                    moved = polynomial.right_shift(shift) if shift >= 0 else polynomial.left_shift(-shift)
                    into.append((factor, (moved, below)))
        halves = [parts.total(found) if found else None for found in (even, odd)]
        return Wave(top, self._mirrored(halves[0], top, 1), self._mirrored(halves[1], top, -1))

    def combination(self, terms: Sequence[tuple[Any, Wave]], limit: int) -> Wave:
        cut = [(c, self._within(x, limit)) for c, x in terms if x.even is not None or x.odd is not None]
        top = max((x.top for _, x in cut), default=0)
        found: list[Any] = []
        for which in ("even", "odd"):
            own = [(c, x, getattr(x, which)) for c, x in cut]
            moved = [
                (c, (part[0].left_shift((top - x.top) // self._step), part[1])) for c, x, part in own if part is not None
            ]
            found.append(self._parts.total(moved) if moved else None)
        return Wave(top, *found)

    def _scaled(self, x: Wave, part: Any, factor: Callable[[int], Any]) -> Any:
        """Coefficients times an integer that depends on the harmonic."""
        if part is None:
            return None
        return self._parts.rebuilt(
            part, lambda line: [c * factor(self._step * j - x.top) for j, c in enumerate(line)]
        )

    def derivative(self, x: Wave) -> Wave:
        odd = self._scaled(x, x.even, lambda k: k)
        even = self._scaled(x, x.odd, lambda k: k)
        return Wave(x.top, even and self._parts.total([(self._square, even)]), odd and self._parts.total([(self.scalar(1), odd)]))

    def solved(self, x: Wave) -> Wave:
        def divided(part: Any) -> Any:
            if part is None:
                return None
            count = 2 * x.top // self._step + 1
            line = self._parts.coefficients(part, count)
            null = self.scalar(0)
            ks = [self._step * j - x.top for j in range(count)]
            return self._parts.polynomial(
                [null if abs(k) == 1 else c / (1 - k * k) for k, c in zip(ks, line, strict=True)]
            )

        return Wave(x.top, divided(x.even), divided(x.odd))

    def first(self, x: Wave) -> tuple[Any, Any]:
        return self.table(x).get(1, (self.scalar(0), self.scalar(0)))

    def table(self, x: Wave) -> dict[int, tuple[Any, Any]]:
        count = 2 * x.top // self._step + 1
        null = [self.scalar(0)] * count
        even, odd = (null if part is None else self._parts.coefficients(part, count) for part in (x.even, x.odd))
        found = {self._step * j - x.top: pair for j, pair in enumerate(zip(even, odd, strict=True))}
        return {k: pair for k, pair in sorted(found.items()) if k >= 0}
