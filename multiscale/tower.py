"""The levels computed so far: fields, their time derivatives, and every product of them formed once.

    u = U_0 + εU_1 + …,   du/dt = V_0 + εV_1 + …,   d²u/dt² = W_0 + εW_1 + …

    V_n = Σ_{k=0}^{n} D_k U_{n-k},      W_n = Σ_{k=0}^{n} D_k V_{n-k}

At level n the field U_n and the D_nA are unknown, while D_n of drives and slow parameters is known. `pending` gives V_n
and W_n with the unknowns left out; `completed` adds what they contribute once they are known. A tower is never
changed: `completed` and `lifted` return new ones. The products are a memo (their values follow from the fields), so
towers that grow from each other share it.
"""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass, field
from typing import Any, TypeAlias

from multiscale.algebra.derivation import Derivation, convolved_half, doubled
from multiscale.algebra.ring import Ring

__all__ = ["Field", "Jet", "Tower"]

Field: TypeAlias = tuple[Any, ...]
Jet: TypeAlias = tuple[int, int]
"""(unknown, order of the time derivative)."""


@dataclass(frozen=True)
class Tower:
    """`jets[d][n]` is the field of level n in the d-th time derivative; `time[n]` is D_n."""

    ring: Ring
    time: tuple[Derivation, ...]
    jets: tuple[tuple[Field, ...], tuple[Field, ...], tuple[Field, ...]]
    _products: dict[tuple[tuple[Jet, ...], int], Any] = field(default_factory=dict, repr=False, compare=False)

    @classmethod
    def start(cls, ring: Ring, fast: Derivation, displacement: Field) -> Tower:
        """Level 0: U_0 and D_0."""
        velocity = tuple(fast.of_real(ring, u) for u in displacement)
        acceleration = tuple(fast.of_real(ring, v) for v in velocity)
        return cls(ring, (fast,), ((displacement,), (velocity,), (acceleration,)))

    @property
    def height(self) -> int:
        """The number of levels that are complete."""
        return len(self.time)

    def component(self, jet: Jet) -> list[Any]:
        """One unknown or derivative, level by level."""
        unknown, order = jet
        return [level[unknown] for level in self.jets[order]]

    def pending(self, known: Derivation) -> tuple[Field, Field]:
        """(V_n, W_n) of the level n to come, without U_n and with only the known part of D_n."""
        ring, n, fast = self.ring, self.height, self.time[0]
        velocity, acceleration = [], []
        for k in range(len(self.jets[0][0])):
            half = convolved_half(ring, self.time, self.component((k, 0)), n) + known.half(ring, self.jets[0][0][k])
            v = doubled(ring, half)
            half = convolved_half(ring, self.time, self.component((k, 1)), n) + known.half(ring, self.jets[1][0][k])
            velocity.append(v)
            acceleration.append(doubled(ring, half + fast.half(ring, v)))
        return tuple(velocity), tuple(acceleration)

    def completed(
        self, pending: tuple[Field, Field], known: Derivation, displacement: Field, slow: Derivation
    ) -> Tower:
        """The tower with level n added: U_n, the D_nA in `slow`, and what follows from them."""
        ring, fast = self.ring, self.time[0]
        velocity, acceleration = [], []
        for k, u in enumerate(displacement):
            change = doubled(ring, fast.half(ring, u) + slow.half(ring, self.jets[0][0][k]))
            second = doubled(ring, fast.half(ring, change) + slow.half(ring, self.jets[1][0][k]))
            velocity.append(pending[0][k] + change)
            acceleration.append(ring.normal(pending[1][k] + second))
        added = (displacement, tuple(velocity), tuple(acceleration))
        jets = tuple((*levels, new) for levels, new in zip(self.jets, added, strict=True))
        return Tower(ring, (*self.time, known.merged(slow)), jets, self._products)  # type: ignore[arg-type]

    def product(self, factors: tuple[Jet, ...], level: int) -> Any:
        """[ε^level] of a product of jets, `factors` sorted; partial products are shared by all that contain them."""
        if not factors:
            return self.ring.zero if level else self.ring.one
        if len(factors) == 1:
            unknown, order = factors[0]
            return self.jets[order][level][unknown]
        known = self._products.get((factors, level))
        if known is None:
            # Threads that meet here compute the same value; the first one stored is the one all keep.
            known = self._products.setdefault((factors, level), self.ring.normal(self._convolution(factors, level)))
        return known

    def _convolution(self, factors: tuple[Jet, ...], n: int) -> Any:
        first = factors[::2]
        if first == factors[1::2]:
            return _square(self.ring, lambda k: self.product(first, k), n)
        head, last = factors[:-1], factors[-1:]
        result = self.ring.zero
        for k in range(n + 1):
            result = result + self.product(head, k) * self.product(last, n - k)
        return result

    def lifted(self, ring: Ring) -> Tower:
        """The same tower over a ring with more generators."""

        def lift(levels: Sequence[Field]) -> tuple[Field, ...]:
            return tuple(tuple(ring.lift(x) for x in level) for level in levels)

        products = {key: ring.lift(x) for key, x in list(self._products.items())}
        time = tuple(d.lifted(ring) for d in self.time)
        return Tower(ring, time, (lift(self.jets[0]), lift(self.jets[1]), lift(self.jets[2])), products)


def _square(ring: Ring, series: Callable[[int], Any], n: int) -> Any:
    result = ring.zero
    for k in range((n + 1) // 2):
        result = result + series(k) * series(n - k)
    result = result + result
    if n % 2 == 0:
        middle = series(n // 2)
        result = result + middle * middle
    return result
