"""Linear parts: kernel, adjoint projection and inversion at a rate. The only rooms that know L_0(s).

`size` counts unknowns and equations, `modes` the oscillations that are carried (fewer, where others decay). The
contract, for residual = Σ_r residual|_r of rate r (a rate is an integer vector in units of the base frequencies):

    apply(pending)       [εⁿ] L_0(d/dt) u with U_n and the unknown D_nA left out
    modes_at(r)          the modes a whose rate is r
    project(part, r)     {a: D_nA_a} from the solvability condition  Σ_a [ψ_b^H L_0'(ir) φ_a] D_nA_a = −ψ_b^H part
    solve(part, r)       the particular solution of  L_0(ir) U = −(part + Σ_a L_0'(ir) φ_a D_nA_a)  with ℓ_a^H U = 0
    act(part, r)         L_0(ir) part
    bracket(changes)     Σ_a L_0'(iω_a) φ_a D_nA_a for given D_nA
    value(r)             the frequency that a rate stands for, as a ring element
    divisors(pairs)      what `project` and `solve` divide by for the (equation, rate) pairs of a level

    Law:  act(solve(part, r), r) + bracket(project(part, r)) + part = 0
"""

from __future__ import annotations

from collections.abc import Iterable, Mapping
from dataclasses import dataclass
from typing import Any, Protocol, TypeAlias

from multiscale.algebra.polynomial import Frozen
from multiscale.algebra.ring import Ring
from multiscale.tower import Field

__all__ = ["LinearPart", "Mode", "Rate"]

Rate: TypeAlias = tuple[int, ...]


@dataclass(frozen=True)
class Mode:
    """One oscillation of the leading-order problem: its rate and its shape φ, component by component (by name)."""

    rate: Rate
    shape: tuple[Frozen, ...]


class LinearPart(Protocol):
    """What the hierarchy asks of L_0; see the head of this module."""

    modes: tuple[Mode, ...]
    size: int

    def value(self, rate: Rate) -> Any: ...
    def in_ring(self, ring: Ring) -> LinearPart: ...
    def apply(self, pending: tuple[Field, Field]) -> Field: ...
    def modes_at(self, rate: Rate) -> tuple[int, ...]: ...
    def divisors(self, pairs: Iterable[tuple[int, Rate]]) -> list[Any]: ...
    def project(self, part: Mapping[int, Any], rate: Rate) -> dict[int, Any]: ...
    def solve(self, part: Mapping[int, Any], rate: Rate) -> dict[int, Any]: ...
    def act(self, part: Mapping[int, Any], rate: Rate) -> dict[int, Any]: ...
    def bracket(self, changes: Mapping[int, Any]) -> dict[int, Any]: ...
