"""The singularities of a power series nearest to the origin, estimated from its coefficients.

Coefficients that come from one algebraic or logarithmic singularity x_0, or from a pair, obey for large m

    c_m = Σ_{i=1}^R Σ_{j=0}^J p_{ij} m^{−j} c_{m−i},      1 = Σ_i p_{i0} x_0^i,      R = 1 or 2

(the ratio of successive coefficients in powers of 1/m; with R = 2 that of a conjugate pair, whose coefficients change
sign irregularly). The p_{ij} are solved for from the last R(J + 1) equations, for several R and J, once with all
coefficients and once without the last; the estimate is the one that changes least. Estimates that contradict the root
test, |c_m|^{−1/m}, are left out.

Source of the ratio: C. Domb and M. F. Sykes, On the susceptibility of a ferromagnetic above the Curie point, Proc. Roy.
Soc. A 240 (1957) 214.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from math import gcd
from typing import Any

import mpmath
import sympy as sp

__all__ = ["Singularities", "nearest_singularities"]

LEAST = 8
"""Non-zero coefficients below which nothing is estimated."""
DEPTH = 6
"""The largest J."""


@dataclass(frozen=True)
class Singularities:
    """An estimate.

    Attributes
    ----------
    stride : int
        The series is one in x = ε^stride.
    points : tuple of complex
        The nearest singularities in x: one that is real, or a conjugate pair.
    spread : float
        Relative change of the modulus when the last coefficient is left out: how far the estimate is to be trusted.
    """

    stride: int
    points: tuple[complex, ...]
    spread: float

    @property
    def radius(self) -> float:
        """The radius of convergence in ε."""
        return float(min(abs(x) for x in self.points) ** (1 / self.stride))


def nearest_singularities(coefficients: Sequence[sp.Expr]) -> Singularities | None:
    """The estimate for Σ c_n εⁿ with numeric c_n; None for too few coefficients, or where none is consistent."""
    present = [n for n, c in enumerate(coefficients) if n and c != 0]
    if len(present) < LEAST:
        return None
    stride = gcd(*present)
    digits = 30 + 2 * len(present)
    with mpmath.workdps(digits):
        series = [mpmath.mpf(0) + _number(c, digits) for c in coefficients[::stride]][: present[-1] // stride + 1]
        rough = _root_test(series)
        best: tuple[Any, list[Any]] | None = None
        for depth in range(DEPTH + 1):
            for reach in (1, 2):
                found = _estimate(series, reach, depth, rough)
                if found is not None and (best is None or found[0] < best[0]):
                    best = found
        if best is None:
            return None
        return Singularities(stride, tuple(complex(x) for x in best[1]), float(best[0]))


def _number(x: sp.Expr, digits: int) -> Any:
    if x.is_Rational:
        return mpmath.mpf(int(x.p)) / int(x.q)
    return sp.N(x, digits)._to_mpmath(mpmath.mp.prec)


def _root_test(series: Sequence[Any]) -> Any:
    """The smallest |c_m|^{−1/m} over the last third."""
    last = range(2 * len(series) // 3, len(series))
    return min(abs(series[m]) ** (-mpmath.mpf(1) / m) for m in last if series[m])


def _estimate(series: Sequence[Any], reach: int, depth: int, rough: Any) -> tuple[Any, list[Any]] | None:
    """(relative change, nearest singularities) for one R and J, None where there is no consistent estimate."""
    count = reach * (depth + 1)
    if len(series) < count + reach + 4:
        return None
    pair = [_roots(series[: len(series) - drop], reach, depth) for drop in (0, 1)]
    if pair[0] is None or pair[1] is None:
        return None
    now, before = (min(map(abs, points)) for points in pair if points is not None)
    if not rough / 2 < now < 2 * rough:
        return None
    points = [x for x in pair[0] if abs(x) < now * (1 + mpmath.mpf(10) ** -8)]
    points = [x.real if abs(x.imag) < mpmath.mpf(10) ** -8 * abs(x) else x for x in map(mpmath.mpc, points)]
    return abs(now - before) / now, sorted(points, key=lambda x: (x.imag, x.real))


def _roots(series: Sequence[Any], reach: int, depth: int) -> list[Any] | None:
    """The x with 1 = Σ p_{i0} x^i."""
    last, count = len(series) - 1, reach * (depth + 1)
    levels = range(last - count + 1, last + 1)
    powers = [[mpmath.mpf(m) ** -j for j in range(depth + 1)] for m in levels]
    rows = [
        [series[m - i] * w for i in range(1, reach + 1) for w in row] for m, row in zip(levels, powers, strict=True)
    ]
    try:
        solved = mpmath.lu_solve(mpmath.matrix(rows), mpmath.matrix([series[m] for m in levels]))
        line = [-solved[i * (depth + 1)] for i in range(reach)]
        roots = mpmath.polyroots([*reversed(line), 1], maxsteps=200, extraprec=mpmath.mp.prec)
    except (ZeroDivisionError, mpmath.libmp.libhyper.NoConvergence):
        return None
    return list(roots) or None
