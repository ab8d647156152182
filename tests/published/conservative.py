"""Views of the expansion of one symmetric conservative oscillator, as exact series in the square of an amplitude.

With the phase zero such an oscillator is at its peak at t = 0, so the peak is the sum of its cosine coefficients.
Results are homogeneous: ε and the amplitude a enter as εa² alone, so that ε = 1 loses nothing.
"""

from __future__ import annotations

from fractions import Fraction

import sympy as sp

import multiscale as ms

from .rational_series import Series, in_terms_of, product, terms


def _in_square(expression: sp.Expr, a: sp.Symbol, count: int) -> Series:
    nothing = sp.Symbol("nothing")
    found = {i: c for (i, _), c in terms(expression, a, nothing).items()}
    assert not any(i % 2 for i in found), f"odd powers of {a} in {expression}"
    return [found.get(2 * n, Fraction(0)) for n in range(count)]


def fundamental_frequency(expansion: ms.Expansion, count: int) -> Series:
    """ω as a series in s = εa²."""
    (a,) = expansion.symbols.a
    return _in_square(sp.Add(*expansion.frequency_corrections()), a, count)


def _motion(expansion: ms.Expansion) -> sp.Expr:
    (unknown,) = expansion.problem.unknowns
    (beta,) = expansion.symbols.beta
    return expansion.solution("polar")[unknown].subs({beta: 0, expansion.problem.small: 1})


def harmonic_ratio(expansion: ms.Expansion, k: int, count: int) -> Series:
    """The amplitude of cos kωt divided by a, as a series in s = εa²."""
    (a,) = expansion.symbols.a
    wave = sp.cos(k * expansion.problem.time)
    return _in_square(sp.expand(sp.expand(_motion(expansion)).coeff(wave) / a), a, count)


def peak_frequency(expansion: ms.Expansion, count: int) -> Series:
    """ω as a series in s = εA², A the peak: s_peak(s) is formed from the motion at t = 0 and inverted."""
    (a,) = expansion.symbols.a
    peak = _in_square(sp.expand(_motion(expansion).subs(expansion.problem.time, 0) / a), a, count)
    square = [Fraction(0), *product(peak, peak)][:count]
    return in_terms_of(fundamental_frequency(expansion, count), square)
