"""Rows of L_0: which terms of the equations stand at leading order, and the matrices M, C and K of these.

The terms of L_0 in an equation are those that are linear in the unknowns, undriven, and of the lowest power of ε among
all such terms.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence

import sympy as sp

from multiscale.algebra.polynomial import Frozen
from multiscale.linear_part.general import FrozenMatrix, General, Operator
from multiscale.problem.canonical import Working
from multiscale.problem.coupled.spectrum import Found
from multiscale.problem.frequencies import Bases, bases_of, denested
from multiscale.problem.leading import is_driven
from multiscale.problem.reading import Reader
from multiscale.problem.terms import Entry, Layout, tabulate

__all__ = ["leading_terms", "linear_part", "matrix"]


def _linear(table: list[Entry]) -> list[Entry]:
    return [e for e in table if len(e.factors) == 1 and not is_driven(e)]


def leading_terms(table: list[Entry]) -> tuple[int, list[Entry]]:
    """(power of the row, the terms of L_0 in it)."""
    linear = _linear(table)
    power = min((e.power for e in linear), default=0)
    return power, [e for e in linear if e.power == power]


def matrix(tables: Sequence[list[Entry]], reader: Reader, order: int) -> sp.Matrix:
    """M, C or K as expressions."""
    size = len(tables)
    entries = [[sp.Integer(0)] * size for _ in tables]
    for k, table in enumerate(tables):
        for e in leading_terms(table)[1]:
            unknown, derivative = e.factors[0]
            if derivative == order:
                entries[k][unknown] = reader.expression(e.coefficient)
    return sp.Matrix(entries)


def _frozen(tables: Sequence[list[Entry]], order: int) -> FrozenMatrix:
    size = len(tables)
    rows: list[tuple[Frozen, ...]] = []
    for table in tables:
        row: list[Frozen] = [()] * size
        for e in leading_terms(table)[1]:
            if e.factors[0][1] == order:
                row[e.factors[0][0]] = e.coefficient
        rows.append(tuple(row))
    return tuple(rows)


def linear_part(
    working: Working, layout: Layout, shown: Mapping[sp.Symbol, sp.Expr], found: list[Found]
) -> tuple[Reader, list[list[Entry]], Bases, General]:
    """The equations over all their leaves, the rates of modes and phasors, and L_0 without its roots."""
    frequencies = denested([f.frequency for f in found])
    flat = [x for series in working.rates for x in series]
    reader = Reader(
        [*working.equations, *frequencies, *flat, *working.slow.values()],
        (*layout.jets, layout.small),
        shown,
        working.relations,
    )
    reader.numbers = {s: working.hidden[s] for s in working.numbers}
    tables = [tabulate(reader, x, layout) for x in working.equations]
    bases = bases_of(reader, [*frequencies, *(series[0] for series in working.rates)])
    mass, damping, stiffness = (_frozen(tables, order) for order in (2, 1, 0))
    operator = Operator(mass, damping, stiffness, (), bool(working.numbers))
    linear = General(operator, [dict(b) for b in bases.values], bases.unit, reader.ring)
    return reader, tables, bases, linear
