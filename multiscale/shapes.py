"""Modes of the leading order as an analyst reads them: u = φ A e^{iωt} + conjugate, for each mode."""

from __future__ import annotations

from dataclasses import dataclass

import sympy as sp

from multiscale.computed import Computation
from multiscale.expressions import Writer
from multiscale.problem import Problem

__all__ = ["ModeShape", "mode_shapes"]


@dataclass(frozen=True)
class ModeShape:
    """A mode of the leading order.

    Attributes
    ----------
    frequency : Expr
    shape : dict
        {unknown: its component of φ}; complex where components are out of phase.
    reference : Expr
        The unknown whose component is 1: ``|2A|`` is the amplitude of the fundamental in it, to all orders.
    """

    frequency: sp.Expr
    shape: dict[sp.Expr, sp.Expr]
    reference: sp.Expr


def mode_shapes(problem: Problem, computation: Computation, writer: Writer) -> tuple[ModeShape, ...]:
    """The modes carried, in their order."""
    canonical = computation.canonical
    if canonical.operator is None:
        references = list(range(computation.modes))
    else:
        references = [root.references[k] for root, k in canonical.operator.carried]
    modes = []
    for mode, frequency, k in zip(
        computation.hierarchy.linear_part.modes, computation.frequencies, references, strict=True
    ):
        components = (writer.named(x) for x in mode.shape)
        shape = dict(zip(problem.unknowns, components, strict=True))
        modes.append(ModeShape(frequency, shape, problem.unknowns[k]))
    return tuple(modes)
