"""Boundaries of the instability tongues of a parametrically excited oscillator.

    M(t) u'' + C(t) u' + K(t) u = 0,  coefficients of period 2π/Ω:   tongue n begins where D(nΩ/2; p_0) = 0 at ε = 0

On a boundary a motion of period 2π/Ω (n even) or 4π/Ω (n odd) exists: a Floquet multiplier is 1 or −1. With
p = p_0 + εσ the reduced equation (`reduction`) is |d|² = |o|² at the frequency nΩ/2, and (`discriminant`)

    |d|² − |o|² ∝ σ² + a_1(ε)σ + a_0(ε),      p = p_0 + ε(−a_1 ± √Δ)/2,   Δ = a_1² − 4a_0 = ε^i(Δ_i + εΔ_{i+1} + …)

Where d and o are real (drives of cosines, no damping) the boundaries are d + o = 0, of the motion in cosines, and
d − o = 0, of that in sines, and no root is taken. Tongue 0 is d = 0. With damping, Δ_i > 0 is the condition that the
tongue is open, and Δ = 0 is its tip: the threshold.

Source: W. Magnus and S. Winkler, *Hill's Equation*, 1966, ch. 1–2, for the boundaries as periodic solutions.
"""

from __future__ import annotations

from collections.abc import Sequence
from fractions import Fraction
from operator import index
from typing import Any

import sympy as sp

from multiscale.errors import ProblemError, UnsupportedTermError
from multiscale.response.tongues.discriminant import Spelling, added, half_root, monic, quadratic_factor
from multiscale.response.tongues.hill import Hill, Parametric, read_hill
from multiscale.response.tongues.preparation import prepared
from multiscale.response.tongues.reduction import Reduced, reduced_equation

__all__ = ["threshold", "transition_curves"]


def transition_curves(
    problem: Parametric, parameter: sp.Symbol, *, order: int, tongue: int, representation: str = "auto"
) -> tuple[sp.Expr, ...]:
    """The boundaries of an instability tongue, as series in the small parameter for `parameter`.

    The equation is linearised about rest: nonlinear terms are dropped, as they do not move the boundaries of linear
    stability. Everything is exact; the two boundaries are told apart at whatever order they split.

    Parameters
    ----------
    problem : Problem
        One oscillator, its small parameter written in the equation, with drives cos and sin of commensurable
        frequencies in its coefficients (of u, u' or u''). Any consistent units.
    parameter : Symbol
        What to solve for. It stands affinely in the stiffness or mass of order ε⁰, and polynomially elsewhere.
    order : int ≥ 1
        The highest power of the small parameter kept.
    tongue : int ≥ 0
        n: the tongue that begins where the natural frequency is nΩ/2, Ω being the highest frequency of which every
        drive is a multiple.
    representation : str
        The ring that computes, as in `expand`: "auto", "sympy" or "flint". The result is the same.

    Returns
    -------
    tuple of Expr
        Two boundaries, for tongue 0 one. The lower one for small positive ε comes first where the assumptions on the
        symbols decide it, else that of the motion even in time, else that with the negative root. Where the two agree
        to the order asked for they are equal. With damping or with phases both contain the root of the leading
        discriminant, from the second order on in denominators too: they hold where it is positive, and the symbols in
        it are taken as they stand, not as small.

    Raises
    ------
    ProblemError
        No parametric drive, a parameter that is absent or cannot be solved for, excitation below threshold.
    UnsupportedTermError
        Several unknowns, incommensurable drives, damping that outweighs the drive as ε → 0 (tongues n ≥ 2 with damping
        of order ε: write it with a factor ε**n), boundaries in fractional powers of ε.

    Examples
    --------
    >>> import sympy as sp, multiscale as ms
    >>> from multiscale.response.tongues.transition_curves import transition_curves
    >>> t = sp.Symbol("t", real=True)
    >>> eps, delta = sp.symbols("epsilon delta", positive=True)
    >>> u = sp.Function("u")(t)
    >>> mathieu = ms.Problem(u.diff(t, 2) + (delta + 2*eps*sp.cos(2*t))*u, u, small=eps)
    >>> ms.transition_curves(mathieu, delta, order=2, tongue=1)
    (-epsilon**2/8 - epsilon + 1, -epsilon**2/8 + epsilon + 1)
    """
    order, tongue = _integer("order", order, 1), _integer("tongue", tongue, 0)
    hill = read_hill(problem, parameter, representation)
    equation = reduced_equation(hill, tongue, order)
    start = Spelling(hill, equation.ring).expression(equation.start)
    if tongue == 0:
        return (start + _simple(hill, equation, equation.diagonal),)
    if _is_even(equation):
        opposite = [[-x for x in level] for level in equation.coupling]
        curves = [_simple(hill, equation, added(equation.diagonal, o)) for o in (equation.coupling, opposite)]
    else:
        curves = _double(hill, tongue, order)
    first, second = (start + curve for curve in curves)
    return (second, first) if _is_below(second, first, hill.small) else (first, second)


def threshold(problem: Parametric, parameter: sp.Symbol, drive: sp.Symbol, *, order: int, tongue: int) -> sp.Expr:
    """The least positive `drive` for which the tongue is open at some value of `parameter`, as a series in ε.

    It is where the two boundaries meet, Δ = 0, solved for the drive order by order (`order` ≥ 0 is the highest power
    of ε kept). `drive` is a factor of the excitation that opens the tongue; the other arguments are those of
    `transition_curves`. The damping must be of the order at which the tongue opens: ε**n for tongue n of one harmonic.
    Without damping the threshold is 0.

    Raises
    ------
    ProblemError
        The drive is absent, or does not open the tongue at leading order.
    UnsupportedTermError
        The leading discriminant is not of the form A·drive**k − B, or damping and drive are of different order.

    Examples
    --------
    >>> import sympy as sp, multiscale as ms
    >>> from multiscale.response.tongues.transition_curves import threshold
    >>> t = sp.Symbol("t", real=True)
    >>> eps, delta, mu, h = sp.symbols("epsilon delta mu h", positive=True)
    >>> u = sp.Function("u")(t)
    >>> equation = u.diff(t, 2) + 2*eps*mu*u.diff(t) + (delta + 2*eps*h*sp.cos(2*t))*u
    >>> damped = ms.Problem(equation, u, small=eps)
    >>> ms.threshold(damped, delta, h, order=1, tongue=1)
    2*mu
    """
    order, tongue = _integer("order", order, 0), _integer("tongue", tongue, 1)
    hill = read_hill(problem, parameter)
    if not isinstance(drive, sp.Symbol) or drive not in problem.equations[0].free_symbols - {parameter, hill.small}:
        raise ProblemError(f"drive={drive!r}: expected the symbol of a factor of the excitation in the equation")
    quadratic = quadratic_factor(hill, tongue, order + 1 + 2 * (tongue - 1))
    leading = quadratic.leading()
    if leading is not None and len(quadratic.discriminant) <= leading + order:
        quadratic = quadratic_factor(hill, tongue, leading + order + 1)
    if leading is None:
        raise ProblemError(f"tongue {tongue} does not open at the order asked for: raise `order`")
    levels = [quadratic.writer.expression(x) for x in quadratic.discriminant[leading:][: order + 1]]
    return _tip(levels, drive, hill.small)


def _integer(name: str, value: Any, least: int) -> int:
    try:
        integer = least - 1 if isinstance(value, bool) else index(value)
    except TypeError:
        integer = least - 1
    if integer < least:
        raise ProblemError(f"{name}={value!r}: expected an integer ≥ {least}")
    return integer


def _is_even(equation: Reduced) -> bool:
    """Whether d and o are real, so that motions in cosines and in sines separate."""
    ring = equation.ring
    return not any(
        ring.normal(x - ring.conjugate(x)) for part in (equation.diagonal, equation.coupling) for y in part for x in y
    )


def _simple(hill: Hill, equation: Reduced, series: list[list[Any]]) -> sp.Expr:
    """εσ for the root of a series of degree 1 at ε⁰."""
    ring, unit = monic(equation.ring, series, 1)
    writer = Spelling(hill, ring)
    return writer.series([writer.expression(-x) for (x,) in prepared(ring, unit, 1)], first=1)


def _double(hill: Hill, tongue: int, order: int) -> list[sp.Expr]:
    """εσ = ε(−a_1 ∓ √Δ)/2 for both signs."""
    quadratic = quadratic_factor(hill, tongue, order)
    leading = quadratic.leading()
    if leading is None:
        # √Δ counts from ε^order on only if Δ begins beyond ε^(2·order − 2).
        quadratic = quadratic_factor(hill, tongue, 2 * order - 1)
        leading = quadratic.leading()
    if leading is not None and len(quadratic.discriminant) < order + leading // 2:
        quadratic = quadratic_factor(hill, tongue, order + leading // 2)
    half = quadratic.ring.constant(Fraction(1, 2))
    mean = [quadratic.writer.expression(-x * half) for x in quadratic.linear[:order]]
    if leading is None or leading // 2 >= order:
        return [quadratic.writer.series(mean, first=1)] * 2
    root = [sp.Integer(0)] * (leading // 2) + half_root(quadratic, leading, order - leading // 2)
    return [
        quadratic.writer.series([m + sign * x for m, x in zip(mean, root, strict=True)], first=1) for sign in (-1, 1)
    ]


def _is_below(x: sp.Expr, y: sp.Expr, small: sp.Symbol) -> bool:
    """Whether x < y for small positive ε, as far as assumptions decide."""
    difference = sp.Poly(sp.expand(x - y), small)
    lowest = difference.coeff_monomial(small ** min(m for (m,) in difference.monoms()))
    return bool(sp.factor_terms(lowest).is_negative or sp.factor(lowest).is_negative)


def _tip(levels: Sequence[sp.Expr], drive: sp.Symbol, small: sp.Symbol) -> sp.Expr:
    """The root h = h_0 + εh_1 + … of Σ ε^j levels_j(h), levels_0 being A·h^k − B."""
    polynomials = [sp.Poly(x, drive) for x in levels]
    if all(p.is_zero or not p.eval(0) for p in polynomials):
        return sp.Integer(0)
    leading = polynomials[0]
    monomials = leading.monoms()
    if len(monomials) != 2 or monomials[1] != (0,):
        raise UnsupportedTermError(
            f"term {levels[0]} of the discriminant: the threshold is given where it is A*{drive}**k − B, with drive "
            f"and damping of equal weight. Let {drive} be a common factor of the excitation, and give the damping the "
            f"power of {small} at which the tongue opens without it"
        )
    power = monomials[0][0]
    first = sp.root(sp.cancel(-leading.coeffs()[1] / leading.coeffs()[0]), power)
    h = sp.Dummy(positive=True)
    slope = leading.diff(drive).eval(h)
    corrections = [h]
    for j in range(1, len(levels)):
        rest = sum((_coefficient(p, corrections, j - i) for i, p in enumerate(polynomials[: j + 1])), sp.Integer(0))
        corrections.append(sp.cancel(-rest / slope))
    return sp.Add(*(sp.cancel(sp.radsimp(c.subs(h, first))) * small**j for j, c in enumerate(corrections)))


def _coefficient(polynomial: sp.Poly, series: Sequence[sp.Expr], order: int) -> sp.Expr:
    """The coefficient of ε^order in polynomial(Σ ε^j series_j)."""
    total = [sp.Integer(0)] * (order + 1)
    padded = [*series, *[sp.Integer(0)] * order][: order + 1]
    for c in polynomial.all_coeffs():
        total = [
            sp.expand(sum((total[i] * padded[j - i] for i in range(j + 1)), sp.Integer(0))) for j in range(order + 1)
        ]
        total[0] += c
    return total[order]
