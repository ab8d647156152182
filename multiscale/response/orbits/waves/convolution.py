"""The product of two series of waves whose levels become known one after the other.

    c_n = Σ_{i+j=n} a_i b_j,      asked for at n = 0, 1, 2, … when a and b are known through n

Taken level by level that is n + 1 products of waves each time. But every pair (i, j) with i, j ≥ s lies in one square
of a tiling of (i − s + 1, j − s + 1),

    {2^v, …, 2^{v+1} − 1} × {q 2^v, …, (q + 1) 2^v − 1},     v ≥ 0, q ≥ 1,     or in its mirror image

whose levels are known by the time the first of its sums, n = 2s − 2 + (q + 1) 2^v, is asked for. A square is one
product of two runs of levels (`Waves.runs`), which hands its share to all its sums at once: a level takes part in few
products of many levels, for which fast multiplication pays. The pairs with i < s or j < s are taken one by one.

Invariant: the squares formed when level n is asked for know nothing of levels above n − s, so that the last s levels
may still be changed. (The tiling is that of M. J. Fischer and L. J. Stockmeyer, Fast on-line integer multiplication,
J. Comput. System Sci. 9, 1974; for power series, J. van der Hoeven, Relax, but don't be too lazy, J. Symbolic Comput.
34, 2002.)
"""

from __future__ import annotations

from collections.abc import Callable, Sequence
from typing import Any

from multiscale.response.orbits.waves import Waves

__all__ = ["Convolution"]


class Convolution:
    """Σ a_i b_{n−i} for two growing lists; `limit(n)` is the highest harmonic wanted, −1 for none.

    `order` is the last level that will be asked for, `lag` is s ≥ 1.
    """

    def __init__(
        self, waves: Waves, first: list[Any], second: list[Any], limit: Callable[[int], int], order: int, lag: int
    ) -> None:
        self._waves, self._first, self._second, self._limit = waves, first, second, limit
        self._order, self._lag = order, lag
        self._one, self._two = waves.scalar(1), waves.scalar(2)
        self._shares: dict[int, list[tuple[Any, Any]]] = {}
        self._formed = -1

    def level(self, n: int) -> Any:
        """c_n; to be asked for in turn, and again after the last levels have been changed."""
        limit = self._limit(n)
        if limit < 0:
            return self._waves.zero
        if not self._waves.gathers:
            return self._single(n, range(n + 1), limit)
        if self._formed < n:
            self._squares(n)
            self._formed = n
        s = self._lag
        edge = range(n + 1) if n < 2 * s else [*range(s), *range(n - s + 1, n + 1)]
        return self._waves.combination([(self._one, self._single(n, edge, limit)), *self._shares.get(n, ())], limit)

    def _single(self, n: int, indices: Sequence[int], limit: int) -> Any:
        a, b = self._first, self._second
        if a is not b:
            return self._waves.products([(self._one, a[i], b[n - i]) for i in indices], limit)
        terms = [(self._one if 2 * i == n else self._two, a[i], a[n - i]) for i in indices if 2 * i <= n]
        return self._waves.products(terms, limit)

    def _squares(self, n: int) -> None:
        """The squares whose first sum is n."""
        a, b = self._first, self._second
        start = n - 2 * self._lag + 2
        size = 1
        while start >= 2 * size and start % size == 0:
            near, far = self._lag - 1 + size, self._lag - 1 + start - size
            weight = self._two if a is b and near != far else self._one
            self._share(n, weight, a[near : near + size], b[far : far + size])
            if a is not b and near != far:
                self._share(n, weight, a[far : far + size], b[near : near + size])
            size *= 2

    def _share(self, n: int, weight: Any, x: list[Any], y: list[Any]) -> None:
        """weight · Σ x_i y_j for the sums n, n + 1, …"""
        limits = [self._limit(m) for m in range(n, min(n + len(x) + len(y) - 2, self._order) + 1)]
        while limits and limits[-1] < 0:
            limits.pop()
        if limits:
            for m, wave in enumerate(self._waves.runs(x[: len(limits)], y[: len(limits)], limits), n):
                self._shares.setdefault(m, []).append((weight, wave))
