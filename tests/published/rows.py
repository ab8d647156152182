"""A published value as a row: what was expanded, how far, the exact value, where it is from, what confirms it."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from typing import Any

import pytest
import sympy as sp

import multiscale as ms


@dataclass(frozen=True)
class Row:
    """One published value.

    `quantity` takes it from the expansion; `value` writes it in the symbols of the expansion, with integers and
    rationals only. `confirmed` names the second route, which stands as a test in the same module.
    """

    name: str
    problem: ms.Problem
    order: int
    quantity: Callable[[ms.Expansion], Any]
    value: Callable[[Any], Any]
    source: str
    confirmed: str

    def difference(self) -> list[sp.Expr]:
        """What remains of library − published, entry by entry; empty when they agree."""
        expansion = ms.expand(self.problem, self.order)
        return difference(self.quantity(expansion), self.value(expansion.symbols))


def difference(got: Any, wanted: Any) -> list[sp.Expr]:
    """The non-zero entries of got − wanted, decided exactly."""
    got, wanted = (x if isinstance(x, tuple | list) else (x,) for x in (got, wanted))
    remainders = [sp.cancel(sp.expand(sp.sympify(g) - w)) for g, w in zip(got, wanted, strict=True)]
    for x in remainders:
        # A float in either side would turn an exact comparison into an approximate one without a sound.
        assert not x.atoms(sp.Float)
    return [x for x in remainders if x != 0]


def over(rows: list[Row]) -> pytest.MarkDecorator:
    """Parametrise a test named with the argument `row`."""
    return pytest.mark.parametrize("row", [pytest.param(r, id=r.name) for r in rows])
