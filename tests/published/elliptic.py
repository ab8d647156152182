"""Elliptic functions of mpmath put as series in the square of an amplitude.

For cn with parameter m, nome q and quarter period K (NIST DLMF 22.11.2)

    cn(z) = 2π/(K√m) Σ q^{n+1/2}/(1 + q^{2n+1}) cos (2n+1)ζ,    ζ = πz/(2K).
"""

from __future__ import annotations

from fractions import Fraction
from typing import Any

import mpmath

from .rational_series import Series, in_terms_of, product, taylor

F = Fraction


def cubic_parameter(s: Any) -> Any:
    """m of u'' + u + εu³ = 0, s = εA²."""
    return s / (2 * (1 + s))


def cubic_frequency(s: Any) -> Any:
    """ω = π√(1+s)/(2K(m))."""
    return mpmath.pi * mpmath.sqrt(1 + s) / (2 * mpmath.ellipk(cubic_parameter(s)))


def cubic_fundamental_ratio(s: Any) -> Any:
    """a/A: the coefficient of cos ζ in cn."""
    m = cubic_parameter(s)
    q = mpmath.qfrom(m=m)
    return 2 * mpmath.pi / mpmath.ellipk(m) * mpmath.sqrt(q / m) / (1 + q)


def cubic_harmonic_ratio(k: int, s: Any) -> Any:
    """a_k/a, k odd."""
    q = mpmath.qfrom(m=cubic_parameter(s))
    return q ** ((k - 1) // 2) * (1 + q) / (1 + q**k)


def cubic_in_fundamental(function: Any, count: int) -> Series:
    """A function of the peak, εA², as a series in εa²."""
    ratio = taylor(cubic_fundamental_ratio, count)
    square = [F(0), *product(ratio, ratio)][:count]
    return in_terms_of(taylor(function, count), square)
