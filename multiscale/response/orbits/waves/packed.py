"""Waves on FLINT: of each part the half k ≥ 0, one polynomial (python-flint, optional).

    part = X(e^{iθ}) ± X(e^{−iθ}),     X = Σ_r c_r e^{i(sr + o)θ}/den,    c of harmonic 0 being half the mean

s = 2 when the harmonics of a wave are all even (o = 0) or all odd (o = 1), else s = 1 and o = 0. A product is

    (X + σX̄)(Y + τȲ) = XY + τ XȲ + (mirror image),     for k ≥ 0:  [XY]_k + τ [XȲ]_k + σ [XȲ]_{−k}

where [XȲ]_0 counts once, or not at all if στ = −1. XȲ is formed with the coefficients of Y reversed; where few
harmonics are kept, XY is short and that one product of half-length is nearly all the work. Sums are formed on one
common denominator and reduced once. The coefficients are integers or balls (`parts`).
"""

from __future__ import annotations

from collections.abc import Sequence
from functools import partial
from typing import Any

from multiscale.response.orbits.waves.parts import Parts, low, shifted
from multiscale.response.orbits.waves.runs import products_of_runs

__all__ = ["PackedWaves", "Wave"]


class Wave:
    """Offset o and the parts in cosines and in sines as (polynomial, denominator), None for zero; never changed."""

    __slots__ = ("_reversed", "even", "odd", "offset")

    def __init__(self, offset: int, even: Any, odd: Any) -> None:
        self.offset, self.even, self.odd = offset, even, odd
        self._reversed: dict[int, Any] = {}

    @property
    def parts(self) -> tuple[tuple[int, Any], ...]:
        """(sign under θ → −θ, part) of the parts that are not zero."""
        return tuple((sign, part) for sign, part in ((1, self.even), (-1, self.odd)) if part is not None)

    def backwards(self, sign: int, parts: Parts) -> Any:
        """A part with its coefficients in reverse order."""
        if sign not in self._reversed:
            part = self.even if sign > 0 else self.odd
            self._reversed[sign] = parts.rebuilt(part, lambda line: line[::-1])
        return self._reversed[sign]


class PackedWaves:
    """`Waves` on FLINT polynomials; `step` is s, `square` is d."""

    gathers = True

    def __init__(self, parts: Parts, step: int, square: int = 1) -> None:
        self._parts, self._step, self._square = parts, step, parts.scalar(-square)
        self.scalar = parts.scalar
        self._one, self._null = parts.scalar(1), parts.scalar(0)
        self.zero = Wave(0, None, None)

    def unit(self) -> Wave:
        if self._step == 2:
            return Wave(1, self._parts.polynomial([self._one]), None)
        return Wave(0, self._parts.polynomial([self._null, self._one]), None)

    def constant(self) -> Wave:
        return Wave(0, self._parts.polynomial([self._one / 2]), None)

    def tidy(self, x: Any) -> Any:
        return x

    def quotient(self, x: Any, y: Any) -> Any:
        return x / y

    def is_null(self, x: Any) -> bool:
        return bool(x == 0)

    def vanishes(self, x: Any) -> bool:
        return self._parts.vanishes(x)

    def _count(self, limit: int, offset: int) -> int:
        """How many coefficients stand for harmonics up to a limit."""
        return max(0, (limit - offset) // self._step + 1)

    def products(self, terms: Sequence[tuple[Any, Wave, Wave]], limit: int) -> Wave:
        found = {sign: _Sum([], []) for sign in (1, -1)}
        offset = 0
        for c, x, y in terms:
            for sigma, a in x.parts:
                for tau, b in y.parts:
                    offset = (x.offset + y.offset) % self._step
                    factor = c * self._square if sigma < 0 and tau < 0 else c
                    self._product(found[sigma * tau], factor, (x, sigma, a), (y, tau, b), limit)
        halves = []
        for into in found.values():
            total = self._parts.total(into.ahead) if into.ahead else None
            if into.behind and (mirrored := self._parts.total(into.behind)) is not None:
                count = self._count(limit, offset)
                mirrored = self._parts.rebuilt(mirrored, partial(_reversed, count))
                pair = [(self._one, part) for part in (total, mirrored) if part is not None]
                total = self._parts.total(pair)
            halves.append(total)
        return Wave(offset, *halves)

    def _product(
        self, into: _Sum, c: Any, first: tuple[Wave, int, Any], second: tuple[Wave, int, Any], limit: int
    ) -> None:
        (x, sigma, a), (y, tau, b) = first, second
        if a[0].length() > b[0].length():
            # The shorter factor is the one not reversed, so that reversals are shared among products.
            (x, sigma, a), (y, tau, b) = (y, tau, b), (x, sigma, a)
        step, parts = self._step, self._parts
        offset = (x.offset + y.offset) % step
        count = self._count(limit, offset)
        if not count:
            return
        lift = (x.offset + y.offset) // step
        if count > lift:
            polynomial, below = parts.product(a, b, count - lift)
            into.ahead.append((c, (shifted(polynomial, lift), below)))
        # Coefficients of X that no coefficient of Y brings within the limit are left out, and the other way round.
        top_x, top_y = (w.offset + step * (part[0].length() - 1) for w, part in ((x, a), (y, b)))
        kept = min(b[0].length(), self._count(limit + top_x, y.offset))
        a = parts.cut(a, 0, self._count(limit + top_y, x.offset))
        backwards = parts.cut(y.backwards(tau, parts), b[0].length() - kept, kept)
        # Index kept − 1 + m of the product is the harmonic step·m + x.offset − y.offset.
        ahead = kept - 1 + (offset - x.offset + y.offset) // step
        behind = kept - 1 - (offset + x.offset - y.offset) // step
        polynomial, below = parts.product(a, backwards, ahead + count)
        skipped = 1 if offset == 0 and sigma * tau < 0 else 0
        into.ahead.append((c * tau, (_moved(polynomial, ahead + skipped, skipped), below)))
        last = behind - (offset == 0)
        # The mirror image of index r is index count − 1 − r until the sum is reversed.
        into.behind.append((c * sigma, (_window(polynomial, last, count, offset == 0), below)))

    def runs(self, x: Sequence[Wave], y: Sequence[Wave], limits: Sequence[int]) -> list[Wave]:
        offset, levels = products_of_runs(self._parts, self._step, self._square, x, y, limits)
        return [Wave(offset, *(self._sum(level.get(sign, [])) for sign in (1, -1))) for level in levels]

    def _sum(self, terms: list[tuple[Any, Any]]) -> Any:
        """Σ scalar · part, reduced if something is added up."""
        if not terms:
            return None
        return self._parts.times(*terms[0]) if len(terms) == 1 else self._parts.total(terms)

    def combination(self, terms: Sequence[tuple[Any, Wave]], limit: int) -> Wave:
        present = [(c, x) for c, x in terms if x.parts]
        if not present:
            return self.zero
        offset = present[0][1].offset
        count = self._count(limit, offset)
        found: list[Any] = []
        for which in ("even", "odd"):
            own = [(c, part) for c, x in present if (part := getattr(x, which)) is not None]
            cut = [(c, self._parts.cut(part, 0, count)) for c, part in own]
            found.append(self._sum([(c, part) for c, part in cut if part[0].length()]))
        return Wave(offset, *found)

    def derivative(self, x: Wave) -> Wave:
        def turned(part: Any, factor: Any) -> Any:
            if part is None:
                return None
            risen = self._parts.rebuilt(
                part, lambda line: [c * (self._step * r + x.offset) for r, c in enumerate(line)]
            )
            return self._parts.times(factor, risen)

        return Wave(x.offset, turned(x.odd, self._square), turned(x.even, self._one))

    def solved(self, x: Wave) -> Wave:
        def divided(part: Any) -> Any:
            if part is None:
                return None
            ks = range(x.offset, x.offset + self._step * part[0].length(), self._step)
            return self._parts.divided(part, [1 - k * k for k in ks])

        return Wave(x.offset, divided(x.even), divided(x.odd))

    def first(self, x: Wave) -> tuple[Any, Any]:
        index = (1 - x.offset) // self._step
        if (1 - x.offset) % self._step:
            return self._null, self._null
        even, odd = (
            self._null if part is None else self._parts.coefficients(self._parts.cut(part, index, 1), 1)[0]
            for part in (x.even, x.odd)
        )
        return even, odd

    def table(self, x: Wave) -> dict[int, tuple[Any, Any]]:
        count = max((part[0].length() for _, part in x.parts), default=0)
        even, odd = (
            [self._null] * count if part is None else self._parts.coefficients(part, count) for part in (x.even, x.odd)
        )
        found = {self._step * r + x.offset: pair for r, pair in enumerate(zip(even, odd, strict=True))}
        return {k: ((a + a, b) if k == 0 else (a, b)) for k, (a, b) in found.items()}


class _Sum:
    """Terms to be added up for k ≥ 0, and those whose coefficients stand in reverse order."""

    __slots__ = ("ahead", "behind")

    def __init__(self, ahead: list[tuple[Any, Any]], behind: list[tuple[Any, Any]]) -> None:
        self.ahead, self.behind = ahead, behind


def _reversed(count: int, line: list[Any]) -> list[Any]:
    """The coefficients in reverse order, filled up to `count` first."""
    return (line + [0] * (count - len(line)))[::-1]


def _moved(polynomial: Any, first: int, place: int) -> Any:
    """The coefficients from index `first` on (zeros below index 0), put at `place`."""
    if first >= 0:
        return shifted(shifted(polynomial, -first), place)
    return shifted(polynomial, place - first)


def _window(polynomial: Any, last: int, count: int, spared: bool) -> Any:
    """Coefficients last, last − 1, … for r = 0 (1 if `spared`), 1, … put at count − 1 − r."""
    size = count - spared
    return low(shifted(polynomial, size - 1 - last), max(0, size))
