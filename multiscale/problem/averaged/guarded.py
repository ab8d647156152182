"""Functions for the numeric spelling of a Fourier coefficient, defined also where the plain formula divides by zero.

    Inverse(x)      1/x, and 0 at x = 0
    Reciprocal(x)   1/x, and a huge number at x = 0
    Root(x)         √x, whose slope at x = 0 counts as zero
    Power(x, e)     x**e for x > 0, and 0 at x = 0
    Clipped(x)      x cut off to −1 … 1
    Magnitude(x)    |x| inside an average, where its slope is the sign of x and zero at x = 0

A force that is singular at rest, such as Coulomb friction, thereby counts as zero at zero amplitude.
"""

from __future__ import annotations

import sympy as sp

__all__ = ["Clipped", "Inverse", "Magnitude", "Power", "Reciprocal", "Root", "guarded"]


class Inverse(sp.Function):  # type: ignore[misc]
    """1/x, and 0 at x = 0."""

    nargs = 1


class Reciprocal(sp.Function):  # type: ignore[misc]
    """1/x, and a huge number at x = 0."""

    nargs = 1


class Root(sp.Function):  # type: ignore[misc]
    """√x, with slope 0 at x = 0."""

    nargs = 1


class Power(sp.Function):  # type: ignore[misc]
    """x**e for x > 0, and 0 at x = 0."""

    nargs = 2


class Magnitude(sp.Function):  # type: ignore[misc]
    """|x| inside an average, with slope 0 at x = 0."""

    nargs = 1


class Clipped(sp.Function):  # type: ignore[misc]
    """x cut off to −1 … 1."""

    nargs = 1


def guarded(x: sp.Expr, amplitude: sp.Symbol) -> sp.Expr:
    """x with every power of the amplitude that is not a whole positive one guarded at zero."""

    def replaced(p: sp.Expr) -> sp.Expr:
        if p.exp.is_Integer:
            return Inverse(amplitude) ** (-p.exp)
        return Power(amplitude, p.exp)

    def unsafe(p: sp.Expr) -> bool:
        return isinstance(p, sp.Pow) and p.base == amplitude and not (p.exp.is_Integer and p.exp.is_positive)

    return x.replace(unsafe, replaced)
