"""Waves as tables of coefficients, over any field or ring whose elements have + − * and truth: no extra is needed."""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass
from fractions import Fraction
from operator import not_, truediv
from typing import Any, TypeAlias

__all__ = ["PlainWaves", "Scalars"]

Table: TypeAlias = dict[int, tuple[Any, Any]]


@dataclass(frozen=True)
class Scalars:
    """The field: how a rational is read, and what differs from field to field."""

    read: Callable[[Any], Any] = Fraction
    tidy: Callable[[Any], Any] | None = None
    quotient: Callable[[Any, Any], Any] = truediv
    vanishes: Callable[[Any], bool] = not_


class PlainWaves:
    """`Waves` as {k: (α_k, β_k)} over k ≥ 0."""

    gathers = False

    def __init__(self, scalars: Scalars | None = None, square: int = 1) -> None:
        self._scalars = scalars or Scalars()
        self._square = self.scalar(square)
        self._null = self.scalar(0)
        self.zero: Table = {}

    def scalar(self, value: Any) -> Any:
        return self._scalars.read(value)

    def tidy(self, x: Any) -> Any:
        return x if self._scalars.tidy is None else self._scalars.tidy(x)

    def quotient(self, x: Any, y: Any) -> Any:
        return self._scalars.quotient(x, y)

    def is_null(self, x: Any) -> bool:
        return not x

    def vanishes(self, x: Any) -> bool:
        return self._scalars.vanishes(x)

    def unit(self) -> Table:
        return {1: (self.scalar(1), self._null)}

    def constant(self) -> Table:
        return {0: (self.scalar(1), self._null)}

    def _cleaned(self, sums: dict[int, list[Any]]) -> Table:
        if self._scalars.tidy is not None:
            sums = {k: [self.tidy(x) for x in pair] for k, pair in sums.items()}
        return {k: (pair[0], pair[1] if k else self._null) for k, pair in sums.items() if pair[0] or pair[1]}

    def products(self, terms: Sequence[tuple[Any, Table, Table]], limit: int) -> Table:
        sums: dict[int, list[Any]] = {}
        for c, x, y in terms:
            for k, (a, b) in x.items():
                a, b = c * a, c * b
                for m, (p, q) in y.items():
                    # e^{ikθ} meets e^{imθ} and, unless either is constant, e^{−imθ} too.
                    if k + m <= limit:
                        self._add(sums, k + m, (a, b), (p, q))
                    if k and m and abs(k - m) <= limit:
                        if k >= m:
                            self._add(sums, k - m, (a, b), (p, -q))
                        if m >= k:
                            self._add(sums, m - k, (a, -b), (p, q))
        return self._cleaned(sums)

    def runs(self, x: Sequence[Table], y: Sequence[Table], limits: Sequence[int]) -> list[Table]:
        one = self.scalar(1)
        return [
            self.products([(one, a, y[m - i]) for i, a in enumerate(x) if 0 <= m - i < len(y)], limit)
            for m, limit in enumerate(limits)
        ]

    def _add(self, sums: dict[int, list[Any]], k: int, x: tuple[Any, Any], y: tuple[Any, Any]) -> None:
        (a, b), (p, q) = x, y
        pair = sums.setdefault(k, [self._null, self._null])
        if a:
            pair[0] = pair[0] + a * p if p else pair[0]
            pair[1] = pair[1] + a * q if q else pair[1]
        if b:
            pair[0] = pair[0] - self._square * (b * q) if q else pair[0]
            pair[1] = pair[1] + b * p if p else pair[1]

    def combination(self, terms: Sequence[tuple[Any, Table]], limit: int) -> Table:
        sums: dict[int, list[Any]] = {}
        for c, x in terms:
            for k, (a, b) in x.items():
                if k <= limit:
                    pair = sums.setdefault(k, [self._null, self._null])
                    pair[0], pair[1] = pair[0] + c * a, pair[1] + c * b
        return self._cleaned(sums)

    def derivative(self, x: Table) -> Table:
        return {k: (-(self._square * self.scalar(k) * b), self.scalar(k) * a) for k, (a, b) in x.items() if k}

    def solved(self, x: Table) -> Table:
        factor = {k: self.scalar(Fraction(1, 1 - k * k)) for k in x if k != 1}
        return {k: (factor[k] * a, factor[k] * b) for k, (a, b) in x.items() if k != 1}

    def first(self, x: Table) -> tuple[Any, Any]:
        return x.get(1, (self._null, self._null))

    def table(self, x: Table) -> Table:
        return dict(sorted(x.items()))
