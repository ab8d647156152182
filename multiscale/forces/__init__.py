"""Forces at a level: everything on the right-hand side, seen by the hierarchy only through `at_level`.

    L_0(d/dt) u = f,      at_level(n, tower) = [εⁿ] f(u, du/dt, d²u/dt²; ε)      component by component

Law: `at_level(n)` uses levels below n only, since f is O(ε). The hierarchy never multiplies fields itself.
"""

from __future__ import annotations

from typing import Protocol

from multiscale.algebra.ring import Ring
from multiscale.tower import Field, Tower

__all__ = ["Force"]


class Force(Protocol):
    """A force; a new kind of force is a new implementation of these two methods."""

    def in_ring(self, ring: Ring) -> Force: ...
    def at_level(self, level: int, tower: Tower) -> Field: ...
