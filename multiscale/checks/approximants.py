"""Rational and quadratic approximants of a power series f, and what they say about its singularities.

    rational [L/M]:       P/Q = f + O(x^{L+M+1})
    quadratic [L/M/K]:    P + Q f + R f² = O(x^{L+M+K+2}),     f ≈ (−Q ± √(Q² − 4PR)) / (2R)

The sign, and the sheet of the root, are those of the series at x = 0. Near-cancelling pairs (a pole beside a zero, two
branch points side by side) are usually noise of the last coefficients and no property of f.

Sources: G. A. Baker, Essentials of Padé Approximants, 1975; R. E. Shafer, On quadratic approximation, SIAM J. Numer.
Anal. 11 (1974) 447 (from memory).
"""

from __future__ import annotations

from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass, fields, replace
from functools import cached_property
from typing import Any, TypeVar

import numpy as np
import numpy.typing as npt
import sympy as sp

from multiscale.checks.power_series import exactly, roots_of
from multiscale.errors import EvaluationError

__all__ = ["Approximant", "QuadraticApproximant"]

Array = npt.NDArray[Any]
Pair = tuple[complex, complex]
CLOSE = 0.01
"""Two points are near-cancelling when their distance is below this share of the distance to the next."""
Own = TypeVar("Own", bound="_Algebraic")


@dataclass(frozen=True)
class _Algebraic:
    """What both kinds share: polynomials in `variable` whose coefficients may hold symbols."""

    variable: sp.Symbol
    degrees: tuple[int, ...]
    order: int

    @property
    def _polynomials(self) -> dict[str, sp.Expr]:
        own = {f.name for f in fields(_Algebraic)}
        return {f.name: getattr(self, f.name) for f in fields(self) if f.name not in own}

    @property
    def symbols(self) -> tuple[sp.Symbol, ...]:
        """Symbols in the coefficients, by name."""
        found = set().union(*(x.free_symbols for x in self._polynomials.values())) - {self.variable}
        return tuple(sorted(found, key=str))

    def __repr__(self) -> str:
        return f"{type(self).__name__}[{'/'.join(map(str, self.degrees))}] in {self.variable}"

    def at(self: Own, values: Mapping[Any, Any]) -> Own:
        """The same approximant with values put in for symbols (not for the variable)."""
        named = {s.name: s for s in self.symbols}
        put = {named.get(k, k) if isinstance(k, str) else k: sp.S(v) for k, v in values.items()}
        if strange := [k for k in put if k not in named.values()]:
            raise EvaluationError(f"unknown symbol {strange[0]}: expected {', '.join(named) or 'none'}")
        return replace(self, **{name: x.subs(put) for name, x in self._polynomials.items()})

    def _check_numeric(self) -> None:
        if self.symbols:
            raise EvaluationError(
                f"the coefficients contain {', '.join(map(str, self.symbols))}: put in numbers by `at`"
            )

    def _poly(self, x: sp.Expr) -> sp.Poly:
        """With exact coefficients, for roots."""
        self._check_numeric()
        return sp.Poly(exactly(x), self.variable, extension=True)

    def _horner(self, x: sp.Expr, scale: sp.Expr) -> Callable[[Array], Array]:
        self._check_numeric()
        given = sp.Poly(x, self.variable).all_coeffs()
        coefficients = [sp.N(c / scale, 20) for c in given]
        real = all(c.is_real for c in coefficients)
        numbers = [float(c) if real else complex(c) for c in coefficients]
        return lambda points: np.polyval(numbers, points)


@dataclass(frozen=True, repr=False)
class Approximant(_Algebraic):
    """A rational approximant; made by `pade`.

    Called with numbers or an array, it is evaluated in double precision.

    Attributes
    ----------
    variable : Symbol
    degrees : tuple of int
        (L, M) of numerator and denominator after cancellation.
    order : int
        The re-expansion agrees with the series through this power.
    numerator, denominator : Expr
        Coprime polynomials in the variable.
    """

    numerator: sp.Expr
    denominator: sp.Expr

    @property
    def expression(self) -> sp.Expr:
        """The rational function."""
        return self.numerator / self.denominator

    @cached_property
    def poles(self) -> tuple[complex, ...]:
        """Roots of the denominator, nearest first. Real singularities of f show here, cuts as rows of poles."""
        return roots_of(self._poly(self.denominator))

    @cached_property
    def zeros(self) -> tuple[complex, ...]:
        """Roots of the numerator, nearest first."""
        return roots_of(self._poly(self.numerator))

    @cached_property
    def doublets(self) -> tuple[Pair, ...]:
        """(pole, zero) that nearly cancel: usually noise, and no singularity of the function."""
        return near_pairs(self.poles, self.zeros)

    @cached_property
    def _numeric(self) -> tuple[Callable[[Array], Array], Callable[[Array], Array]]:
        scale = self.denominator.subs(self.variable, 0)
        return self._horner(self.numerator, scale), self._horner(self.denominator, scale)

    def __call__(self, x: npt.ArrayLike) -> Any:
        """Values at x, of the shape of x."""
        above, below = self._numeric
        points = _points(x)
        with np.errstate(divide="ignore", invalid="ignore"):
            return above(points) / below(points)


@dataclass(frozen=True, repr=False)
class QuadraticApproximant(_Algebraic):
    """A quadratic approximant, which can show square-root singularities; made by ``pade(…, kind="quadratic")``.

    Called with numbers or an array, it is evaluated in double precision, following the series outward from x = 0. The
    cut of a branch point runs outward along its ray, that of a near-cancelling pair joins the two points. For real x
    the values are real, and nan beyond a branch point.

    Attributes
    ----------
    variable : Symbol
    degrees : tuple of int
        (L, M, K) of P, Q and R.
    order : int
        P + Q f + R f² vanishes through this power.
    P, Q, R : Expr
        Polynomials in the variable.
    factor, radicand : Expr
        √(Q² − 4PR) on the sheet of the series is factor·√radicand, with radicand 1 at x = 0.
    """

    P: sp.Expr
    Q: sp.Expr
    R: sp.Expr
    factor: sp.Expr
    radicand: sp.Expr

    @property
    def expression(self) -> sp.Expr:
        """The branch of the series; a root changes its sign beyond near-cancelling branch points, values do not."""
        if self.R == 0:
            return -self.P / self.Q
        return (self.factor * sp.sqrt(self.radicand) - self.Q) / (2 * self.R)

    @cached_property
    def branch_points(self) -> tuple[complex, ...]:
        """Where the two branches meet in a square root, nearest first."""
        return roots_of(self._poly(self.radicand))

    @cached_property
    def poles(self) -> tuple[complex, ...]:
        """Poles of this branch, nearest first."""
        roots = roots_of(self._poly(self.R if self.R != 0 else self.Q))
        if self.R == 0 or not roots:
            return roots
        z = np.asarray(roots, dtype=complex)
        _, q, _ = self._values(z)
        root = self._root(z)
        return tuple(complex(x) for x in z[abs(root - q) > abs(root + q)])

    @cached_property
    def doublets(self) -> tuple[Pair, ...]:
        """Pairs of branch points that nearly cancel: usually noise."""
        return near_pairs(self.branch_points, None)

    @cached_property
    def _numeric(self) -> tuple[Callable[[Array], Array], ...]:
        return tuple(self._horner(x, self._scale) for x in (self.P, self.Q, self.R, self.factor))

    @cached_property
    def _scale(self) -> sp.Expr:
        return next(c for x in (self.Q, self.R) for c in sp.Poly(x, self.variable).all_coeffs()[::-1] if c != 0)

    @cached_property
    def _lone(self) -> tuple[complex, ...]:
        """The branch points that are in no doublet."""
        paired = {x for pair in self.doublets for x in pair}
        return tuple(x for x in self.branch_points if x not in paired)

    def _values(self, points: Array) -> tuple[Array, Array, Array]:
        p, q, r = (f(points) for f in self._numeric[:3])
        return p, q, r

    def _root(self, points: Array) -> Array:
        """factor·√radicand, a product over branch points with the cuts that the class describes."""
        root: Array = self._numeric[3](points) * np.ones_like(points, dtype=complex)
        for b in self._lone:
            root = root * np.sqrt(1 - points / b)
        for first, second in self.doublets:
            # √((x − b_1)(x − b_2)) = (x − c)√(1 − h²/(x − c)²), relative to its value at 0.
            c, h = (first + second) / 2, (first - second) / 2
            at_zero = -c * np.sqrt(1 - (h / c) ** 2)
            root = root * (points - c) * np.sqrt(1 - (h / (points - c)) ** 2) / at_zero
        return root

    def __call__(self, x: npt.ArrayLike) -> Any:
        """Values at x, of the shape of x."""
        points = _points(x)
        with np.errstate(divide="ignore", invalid="ignore"):
            p, q, r = self._values(points)
            root = self._root(points.astype(complex))
            # The form in which nothing cancels; they agree because (root − q)(root + q) = −4pr.
            stable = abs(root + q) > abs(root - q)
            values = np.where(stable, -2 * p / (root + q), (root - q) / (2 * r))
            if points.dtype.kind == "c" or any(x.has(sp.I) for x in self._polynomials.values()):
                return values[()]
            real = abs(values.imag) <= 1e-6 * abs(values)
        for b in self._lone:
            if abs(b.imag) < 1e-9 * abs(b):
                real &= ~(points / b.real > 1)
        return np.where(real, values.real, np.nan)[()]


def _points(x: npt.ArrayLike) -> Array:
    points = np.asarray(x)
    if points.dtype.kind not in "fciub":
        raise EvaluationError(f"x is {x!r}: expected numbers")
    return points.astype(complex if points.dtype.kind == "c" else float)


def near_pairs(first: Sequence[complex], second: Sequence[complex] | None) -> tuple[Pair, ...]:
    """Pairs of nearest neighbours much closer to each other than to anything else, the origin included.

    One of each sequence; both of `first` where `second` is None.
    """
    points = np.array([*first, *(second or ())], dtype=complex)
    if len(points) < 2:
        return ()
    apart = abs(points[:, None] - points)
    np.fill_diagonal(apart, np.inf)
    found = []
    for i in range(len(first)):
        j = int(np.argmin(apart[i]))
        if j <= i or int(np.argmin(apart[j])) != i or (second is not None and j < len(first)):
            continue
        others = np.delete(apart[[i, j]], [i, j], axis=1)
        rest = min(float(np.min(others, initial=np.inf)), abs(points[i]), abs(points[j]))
        if apart[i, j] < CLOSE * rest:
            found.append((complex(points[i]), complex(points[j])))
    return tuple(found)
