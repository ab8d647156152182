"""The products of the field and its derivatives that the force consists of, and the force's sums of them, by levels.

Above half the order the recursion is linear. With h = ⌊(N − p)/2⌋, p the lowest power of ε in the force F, write
Y = U + V, U the levels up to h and V those above. In F, V² begins above ε^N, so that to this order

    F(Y) = F(U) + Σ_j (∂F/∂δ^jY)(U) δ^jV

The products of U have shorter coefficients than those of Y, and each derivative of F is one series times one.
"""

from __future__ import annotations

from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass
from functools import partial
from typing import Any, TypeAlias

from multiscale.response.orbits.waves import Waves
from multiscale.response.orbits.waves.convolution import Convolution

__all__ = ["FieldProducts", "Key", "Part"]

Jets: TypeAlias = tuple[int, ...]
Key: TypeAlias = tuple[int, bool]
"""(power of w, whether the derivative of the sum is meant)."""
Part: TypeAlias = tuple[int, Jets, Any]
"""(power of ε, jets, scalar)."""

EVERY = 10**9
"""No limit to the harmonics."""


@dataclass
class _Gradient:
    """∂/∂δ^jY of the terms of one key, without ε^p: its levels, and its product with δ^jV."""

    parts: list[Part]
    levels: list[Any]
    with_late: Convolution


class FieldProducts:
    """Y, its derivatives and products through the levels known so far.

    `limit(n, D)` is the highest harmonic wanted of a product of D fields at level n; the last `lag` levels may change.
    """

    def __init__(
        self,
        waves: Waves,
        filed: Mapping[Key, Sequence[Part]],
        limit: Callable[..., int],
        order: int,
        lag: int,
    ) -> None:
        self._waves, self._filed, self._limit, self._order, self._lag = waves, filed, limit, order, lag
        terms = [part for parts in filed.values() for part in parts]
        self.lowest = min((power for power, _, _ in terms), default=1)
        self.half = max(0, order - self.lowest) // 2
        jets = range(1 + max((j for _, jets, _ in terms for j in jets), default=0))
        self._whole: dict[int, list[Any]] = {j: [] for j in jets}
        self._early: dict[int, list[Any]] = {j: [] for j in jets}
        self._late: dict[int, list[Any]] = {j: [] for j in jets}
        self._constants = [waves.constant(), *[waves.zero] * order]
        self._made: dict[Jets, list[Any]] = {}
        self._convolutions: dict[Jets, Convolution] = {}
        for _, factors, _ in terms:
            self._register(factors)
        self._lasting = set(self._made)
        self._gradients = {key: self._differentiated(parts) for key, parts in filed.items()}
        self._one = waves.scalar(1)
        self.extend(waves.unit())

    @property
    def fields(self) -> list[Any]:
        return self._whole[0]

    @staticmethod
    def _halves(jets: Jets) -> tuple[Jets, Jets]:
        cut = (len(jets) + 1) // 2
        return jets[:cut], jets[cut:]

    def _register(self, jets: Jets) -> None:
        if len(jets) > 1 and jets not in self._made:
            halves = self._halves(jets)
            for part in halves:
                self._register(part)
            self._made[jets] = []
            a, b = map(self.of_early, halves)
            limit = partial(self._limit, degree=len(jets))
            self._convolutions[jets] = Convolution(self._waves, a, b, limit, self._order, self._lag)

    def _differentiated(self, parts: Sequence[Part]) -> dict[int, _Gradient]:
        found: dict[int, list[Part]] = {}
        for power, jets, c in parts:
            for j in sorted(set(jets)):
                at = jets.index(j)
                rest = jets[:at] + jets[at + 1 :]
                self._register(rest)
                found.setdefault(j, []).append((power - self.lowest, rest, c * self._waves.scalar(jets.count(j))))
        return {j: self._gradient(j, parts) for j, parts in found.items()}

    def _gradient(self, j: int, parts: list[Part]) -> _Gradient:
        levels: list[Any] = []

        def limit(n: int) -> int:
            return self._limit(n + self.lowest)

        convolution = Convolution(self._waves, levels, self._late[j], limit, self._order - self.lowest, self._lag)
        return _Gradient(parts, levels, convolution)

    def of_early(self, jets: Jets) -> list[Any]:
        """The levels of a product of U and its derivatives."""
        if not jets:
            return self._constants
        return self._early[jets[0]] if len(jets) == 1 else self._made[jets]

    def extend(self, wave: Any) -> None:
        """The next level of the field, and of every product of it."""
        level = len(self.fields)
        for j, whole in self._whole.items():
            whole.append(self._waves.derivative(self._whole[j - 1][level]) if j else wave)
            early = level <= self.half
            self._early[j].append(whole[level] if early else self._waves.zero)
            self._late[j].append(self._waves.zero if early else whole[level])
        for jets, made in self._made.items():
            wanted = level <= self.half or jets in self._lasting
            made.append(self._convolutions[jets].level(level) if wanted else self._waves.zero)
        for gradient in self._each_gradient():
            gradient.levels.append(self._slope(gradient, level))

    def _each_gradient(self) -> list[_Gradient]:
        return [gradient for found in self._gradients.values() for gradient in found.values()]

    def _slope(self, gradient: _Gradient, level: int) -> Any:
        if level > self.half:
            return self._waves.zero
        terms = [(c, self.of_early(jets)[level - power]) for power, jets, c in gradient.parts if power <= level]
        return self._waves.combination(terms, EVERY)

    def shorten(self, levels: int) -> None:
        """Forget everything from a level on."""
        for kind in (self._whole, self._early, self._late):
            for known in kind.values():
                del known[levels:]
        for known in (*self._made.values(), *(gradient.levels for gradient in self._each_gradient())):
            del known[levels:]

    def shift(self, level: int, change: Any) -> None:
        """Add change·Y_0 to the field at a level that is the last one, and to every product of it."""
        early = level <= self.half
        for j, whole in self._whole.items():
            whole[level] = self._shifted(whole, level, change, 1)
            (self._early if early else self._late)[j][level] = whole[level]
        if early:
            for jets, made in self._made.items():
                made[level] = self._shifted(made, level, self._waves.scalar(len(jets)) * change, len(jets))
            for gradient in self._each_gradient():
                gradient.levels[level] = self._slope(gradient, level)

    def _shifted(self, series: list[Any], level: int, factor: Any, degree: int) -> Any:
        limit = self._limit(level, degree)
        return self._waves.combination([(self._one, series[level]), (factor, series[0])], limit)

    def sum(self, key: Key, level: int) -> Any:
        """[ε^level] of the terms filed under a key, from the levels of the field below."""
        terms = [(c, self.of_early(jets)[level - p]) for p, jets, c in self._filed[key] if p <= level]
        n = level - self.lowest
        if n > self.half:
            terms += [(self._one, gradient.with_late.level(n)) for gradient in self._gradients[key].values()]
        return self._waves.combination(terms, self._limit(level))
