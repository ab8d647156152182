"""Expansions as plain data before an examination, and what is altered in them."""

from __future__ import annotations

from dataclasses import replace

import sympy as sp

from multiscale.checks.residual.claim import claim_of
from multiscale.checks.residual.examination import Examination
from multiscale.checks.residual.statement import stated


def examination_of(expansion, points=1, seed=0):
    return Examination(stated(expansion.problem), claim_of(expansion), seed, points)


def with_flow(claim, level, mode, value):
    """The claim with D_level of an amplitude put equal to `value`."""
    rows = [list(row) for row in claim.flow]
    rows[level - 1][mode] = value
    return replace(claim, flow=tuple(map(tuple, rows)))


def with_field(claim, level, unknown, value):
    """The claim with U_level of an unknown put equal to `value`."""
    rows = [list(row) for row in claim.fields]
    rows[level][unknown] = value
    return replace(claim, fields=tuple(map(tuple, rows)))


def flow_raised(claim, level, change, mode=0):
    return with_flow(claim, level, mode, claim.flow[level - 1][mode] + change)


def field_raised(claim, level, change, unknown=0):
    return with_field(claim, level, unknown, claim.fields[level][unknown] + change)


def terms(x):
    """The terms of an expression multiplied out, c · A^p Ā^q · wave with a product of parameters as c."""
    return [term for term in sp.Add.make_args(sp.expand(x)) if term != 0]
