"""Homogeneous forces to second order: exact Fourier coefficients as constants, powers of |z| as generators.

For g(λu, λu') = λ^d g(u, u') and ρ = |z|, u = 2ρ cos θ,

    g = Σ_m c_m ρ^{d−m} z^m + conjugate,     c_m = 2^d × (the coefficient at unit amplitude)

and g_u, g_v are the same with d − 1. The constants are known for every m; they fall off as m^{−x−1} for a factor |u|^x
or |u'|^x, so the sums over their products converge, and the same formulas bound what a truncation leaves out:

    |D_2A| gets from the harmonics k > K at most   (1/2ω) Σ_k |c_k|/((k² − 1)ω²) · Σ_± (|c^u_{k±1}| + kω |c^v_{k±1}|)
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, replace

import sympy as sp

from multiscale.problem.averaged.closed_forms import AMPLITUDE, FREQUENCY, PowerTerm, power_coefficient
from multiscale.problem.averaged.projection import complex_parts

__all__ = ["DEFAULT_HARMONICS", "Degree", "coefficients", "degree_of", "roughness", "slope", "tail"]

DEFAULT_HARMONICS = 21
Terms = Sequence[PowerTerm]


@dataclass(frozen=True)
class Degree:
    """d = whole + rest with an integer `whole`; `rest` is zero where d is an integer."""

    whole: int
    rest: sp.Expr

    @property
    def value(self) -> sp.Expr:
        return self.whole + self.rest


def degree_of(terms: Terms) -> Degree | None:
    """d, where all terms have one degree."""
    degrees = {sp.expand(t.x + t.y) for t in terms}
    if len(degrees) != 1:
        return None
    d = degrees.pop()
    if d.is_Rational:
        return Degree(int(sp.floor(d)), d - sp.floor(d))
    whole, rest = d.as_coeff_Add()
    return Degree(int(whole), rest) if whole.is_Integer else Degree(0, d)


def roughness(terms: Terms) -> list[sp.Expr]:
    """The exponents of |u| and |u'| that are no polynomials: the force is once differentiable where all exceed 1."""
    factors = [pair for t in terms for pair in ((t.x, t.s), (t.y, t.r))]
    return [x for x, s in factors if not (x.is_Integer and x % 2 == s)]


def slope(terms: Terms, variable: int) -> tuple[PowerTerm, ...]:
    """∂g/∂u (0) or ∂g/∂u' (1): d(|x|^p sgn(x)^s) = p |x|^{p−1} sgn(x)^{s+1} dx."""
    result = []
    for t in terms:
        if variable == 0 and t.x != 0:
            result.append(replace(t, factor=t.factor * t.x, x=t.x - 1, s=(t.s + 1) % 2))
        elif variable == 1 and t.y != 0:
            result.append(replace(t, factor=t.factor * t.y, y=t.y - 1, r=(t.r + 1) % 2))
    return tuple(result)


def coefficients(terms: Terms, degree: Degree, highest: int, frequency: sp.Expr) -> dict[int, tuple[sp.Expr, sp.Expr]]:
    """{m: real and imaginary part of c_m}, m = 0 … highest, zeros left out."""
    result = {}
    for m in range(highest + 1):
        total = sp.Add(*(power_coefficient(t, m) for t in terms))
        parts = complex_parts(2**degree.value * total.subs({AMPLITUDE: 1, FREQUENCY: frequency}))
        if any(x != 0 for x in parts):
            result[m] = parts
    return result


def tail(terms: Terms, highest: int) -> float | None:
    """The bound at the head of this module for K = `highest` and a = ω = 1; None where symbols stand in the force."""
    if any(x.free_symbols for t in terms for x in (t.factor, t.x, t.y)):
        return None

    def size(part: Terms, m: int) -> float:
        total = sp.Add(*(power_coefficient(t, m) for t in part)).subs({AMPLITUDE: 1, FREQUENCY: 1})
        return float(abs(complex(sp.N(total))))

    by_displacement, by_velocity = slope(terms, 0), slope(terms, 1)
    last = 3 * highest + 10
    found = []
    for k in range(highest + 1, last + 1):
        inner = sum(size(by_displacement, k + s) + k * size(by_velocity, k + s) for s in (-1, 1))
        found.append(size(terms, k) / (k * k - 1) * inner / 2)
    # The terms fall at least as k^{−3}: what lies beyond is less than the last two of them over the integral of that.
    return sum(found) + max(found[-2:]) * last / 2
