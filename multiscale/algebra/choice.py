"""Which representation computes: FLINT where python-flint is installed, SymPy's sparse polynomials otherwise."""

from __future__ import annotations

from importlib.util import find_spec

from multiscale.algebra.ring import Ring, RingSpec
from multiscale.errors import MultiscaleError

__all__ = ["make_ring"]


def make_ring(spec: RingSpec, representation: str = "auto") -> Ring:
    """The ring of `spec`: "sympy", "flint", or "auto" (FLINT when python-flint is installed)."""
    if representation == "auto":
        representation = "flint" if find_spec("flint") else "sympy"
    if representation == "flint":
        from multiscale.algebra.flint_ring import FlintRing

        return FlintRing(spec)
    if representation == "sympy":
        from multiscale.algebra.sympy_ring import SympyRing

        return SympyRing(spec)
    raise MultiscaleError(f"representation is {representation!r}: expected 'auto', 'sympy' or 'flint'")
