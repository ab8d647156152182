"""The equations as a table of terms, each with its power of the small parameter, and which oscillator each belongs to.

equation k:   Σ ε^p · c · Π jets = 0
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any

import sympy as sp

from multiscale.algebra.polynomial import Frozen, freeze
from multiscale.errors import ProblemError
from multiscale.problem.reading import Reader, unsupported
from multiscale.tower import Jet

__all__ = ["Entry", "Layout", "match", "tabulate"]


@dataclass(frozen=True)
class Entry:
    """One term: power of ε, jets (sorted, one entry for each power), coefficient by name."""

    power: int
    factors: tuple[Jet, ...]
    coefficient: Frozen


@dataclass(frozen=True)
class Layout:
    """Which symbols stand for what: `jets[symbol]` and the small parameter, which `ordered` says the library made."""

    jets: Mapping[sp.Symbol, Jet]
    small: sp.Symbol
    ordered: bool


class _Same(dict[tuple[int, ...], tuple[int, ...]]):
    def __missing__(self, key: tuple[int, ...]) -> tuple[int, ...]:
        return key


def tabulate(reader: Reader, expression: sp.Expr, layout: Layout) -> list[Entry]:
    """The terms of one equation, before division by the power of its unknown."""
    ring = reader.ring
    indices = tuple(ring.spec.index[s.name] for s in reader.dynamic)
    entries: dict[tuple[int, tuple[Jet, ...]], Any] = {}
    for exponents, part in ring.split(ring.normal(reader.read(expression)), (*indices, 0), _Same()).items():
        powers = dict(zip(reader.dynamic, exponents[:-1], strict=True))
        factors = tuple(sorted(jet for s, jet in layout.jets.items() for _ in range(powers[s])))
        bare = ring.from_terms({_cleared(m, indices): c for m, c in ring.terms(part)})
        key = (powers[layout.small], factors)
        entries[key] = entries.get(key, ring.zero) + bare
    reduced = {key: freeze(reader.reduced(x)) for key, x in sorted(entries.items())}
    return [Entry(power, factors, coefficient) for (power, factors), coefficient in reduced.items() if coefficient]


def _cleared(exponents: tuple[int, ...], indices: tuple[int, ...]) -> tuple[int, ...]:
    return tuple(0 if k in indices else e for k, e in enumerate(exponents))


def show(entry: Entry, reader: Reader, layout: Layout) -> sp.Expr:
    """A term as the user wrote it."""
    symbol = {jet: s for s, jet in layout.jets.items()}
    power = sp.Integer(1) if layout.ordered else layout.small**entry.power
    return reader.show(power * reader.expression(entry.coefficient) * sp.Mul(*(symbol[jet] for jet in entry.factors)))


def match(tables: list[list[Entry]], reader: Reader, layout: Layout, names: list[sp.Expr]) -> list[int]:
    """For each equation the unknown whose second derivative leads it; every unknown must lead exactly one."""
    leaders: list[int] = []
    for number, table in enumerate(tables):
        inertial = [e for e in table if len(e.factors) == 1 and e.factors[0][1] == 2]
        if not inertial:
            raise ProblemError(
                f"equation {number + 1} has no second derivative of an unknown standing alone: "
                "each equation must describe one oscillator, u'' + omega**2*u + … = 0"
            )
        lowest = min(e.power for e in inertial)
        leading = [e for e in inertial if e.power == lowest]
        if len(leading) > 1:
            both = ", ".join(str(show(e, reader, layout)) for e in leading)
            raise unsupported(
                both,
                f"equation {number + 1} couples accelerations at leading order",
                "Solve the equations for the accelerations so that each has one",
            )
        leaders.append(leading[0].factors[0][0])
    for k, name in enumerate(names):
        if leaders.count(k) != 1:
            where = [n + 1 for n, leader in enumerate(leaders) if leader == k]
            raise ProblemError(
                f"the second derivative of {name} leads {'no equation' if not where else f'equations {where}'}: "
                "every unknown needs exactly one equation in which its own second derivative stands at leading order"
            )
    return leaders
