"""Times taken in turns: in every round each candidate runs once, and ratios are formed within the round."""

from __future__ import annotations

import gc
from collections.abc import Callable, Mapping
from dataclasses import dataclass
from itertools import repeat
from math import ceil
from statistics import median
from time import perf_counter
from typing import Any

__all__ = ["Rounds", "empty_sympy_cache", "in_turns"]

SHORTEST = 0.02
"""Seconds that one measurement should last; quicker calls are repeated and averaged."""


@dataclass(frozen=True)
class Rounds:
    """Seconds for one call of each candidate, round by round."""

    seconds: Mapping[str, list[float]]

    def median(self, name: str) -> float:
        return median(self.seconds[name])

    def ratio(self, above: str, below: str) -> float:
        """Median over the rounds of the ratio within each round."""
        return median(a / b for a, b in zip(self.seconds[above], self.seconds[below], strict=True))


def empty_sympy_cache() -> None:
    """As at the start of a script: without it a repeat would be handed the answers of the one before."""
    from sympy.core.cache import clear_cache

    clear_cache()


def _seconds(call: Callable[[], Any], number: int, prepare: Callable[[], None] | None) -> float:
    """Mean time of `number` calls; `prepare` runs before each and is not counted."""
    gc.collect()
    if prepare is None:
        start = perf_counter()
        for _ in repeat(None, number):
            call()
        return (perf_counter() - start) / number
    total = 0.0
    for _ in repeat(None, number):
        prepare()
        start = perf_counter()
        call()
        total += perf_counter() - start
    return total / number


def in_turns(
    candidates: Mapping[str, Callable[[], Any]], repeats: int = 7, prepare: Callable[[], None] | None = None
) -> Rounds:
    """Time all candidates in alternation, after one call of each that is not counted."""
    number = {}
    for name, call in candidates.items():
        call()
        number[name] = max(1, ceil(SHORTEST / _seconds(call, 1, prepare)))
    seconds: dict[str, list[float]] = {name: [] for name in candidates}
    for _ in range(repeats):
        for name, call in candidates.items():
            seconds[name].append(_seconds(call, number[name], prepare))
    return Rounds(seconds)
