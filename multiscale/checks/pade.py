"""Approximants from the coefficients of a series.

Rational ones by Euclid's algorithm on x^{L+M+1} and f: its remainders r = s x^{L+M+1} + t f have

    t f = r + O(x^{L+M+1}),

and the first r of degree ≤ L has deg t ≤ M. It finds them in degenerate tables too; [L/M] does not exist exactly when
t(0) = 0. Quadratic ones from the kernel of the linear equations for Q and R. All of it is exact.
"""

from __future__ import annotations

from collections.abc import Iterator
from operator import index
from typing import Any, Literal, SupportsIndex, overload

import sympy as sp
from sympy.polys.matrices import DomainMatrix

from multiscale.checks.approximants import Approximant, QuadraticApproximant
from multiscale.checks.power_series import Series, ascending, power, read_series
from multiscale.errors import EvaluationError

__all__ = ["pade"]


@overload
def pade(
    series: Any, variable: sp.Symbol, degrees: tuple[int, int] | None = None, *, kind: Literal["rational"] = "rational"
) -> Approximant: ...


@overload
def pade(
    series: Any, variable: sp.Symbol, degrees: tuple[int, int, int] | None = None, *, kind: Literal["quadratic"]
) -> QuadraticApproximant: ...


def pade(
    series: Any, variable: sp.Symbol, degrees: tuple[int, ...] | None = None, *, kind: str = "rational"
) -> Approximant | QuadraticApproximant:
    """The rational function, or the quadratic one, that continues a power series beyond its radius of convergence.

    Parameters
    ----------
    series : Expr or sequence
        A polynomial or series in `variable` (``O(x**8)`` is understood), or the coefficients by rising powers.
        Coefficients may be exact numbers or hold symbols, and the result is exact; floats give floats.
    variable : Symbol
    degrees : (L, M) or (L, M, K), optional
        Degrees of numerator and denominator, or of P, Q and R in P + Q f + R f² = O(x^{L+M+K+2}). By default as equal
        as the known coefficients allow, in the powers that the series has (x² for an even one).
    kind : "rational" or "quadratic"
        A quadratic approximant has square-root branch points, and suits series whose nearest singularities are such.

    Returns
    -------
    Approximant or QuadraticApproximant

    Raises
    ------
    EvaluationError
        Too few coefficients for the degrees; an approximant that does not exist (the message names one that does).

    Examples
    --------
    >>> import sympy as sp, multiscale as ms
    >>> x = sp.Symbol("x")
    >>> near = ms.pade(sp.log(1 + x).series(x, 0, 4), x, (1, 1))
    >>> near.expression
    2*x/(x + 2)
    >>> near.poles, near.zeros, near.doublets
    (((-2+0j),), (0j,), ())
    >>> ms.pade(sp.sqrt(1 - 4*x).series(x, 0, 4), x, kind="quadratic").branch_points
    ((0.25+0j),)
    """
    found = read_series(series, variable)
    if kind not in ("rational", "quadratic"):
        raise EvaluationError(f"kind is {kind!r}: expected 'rational' or 'quadratic'")
    count = 2 if kind == "rational" else 3
    if degrees is not None:
        degrees = _checked(degrees, count, found.order)
    if kind == "rational":
        return _rational(found, degrees)
    return _quadratic(found, degrees)


def _checked(degrees: Any, count: int, order: int) -> tuple[int, ...]:
    try:
        given = tuple(degrees)
    except TypeError:
        given = ()
    whole = all(isinstance(d, SupportsIndex) and not isinstance(d, bool) for d in given)
    given = tuple(map(index, given)) if whole else ()
    if len(given) != count or any(d < 0 for d in given):
        names = "(L, M)" if count == 2 else "(L, M, K)"
        raise EvaluationError(f"degrees={degrees!r}: expected {count} integers {names} ≥ 0")
    needed = sum(given) + count - 2
    if needed > order:
        raise EvaluationError(
            f"degrees={given} need the series through power {needed}, but it is known through power {order}: "
            "lower the degrees, or give more coefficients (zeros too, or an O(…) term)"
        )
    return given


# Rational approximants


def _rational(series: Series, degrees: tuple[int, ...] | None) -> Approximant:
    stride = series.stride
    if degrees is None:
        thin = series.thinned(stride)
        # The last of them, [0/0] with the first coefficient alone, always exists.
        tried = ((d, _euclid(thin, *d)) for d in _near_diagonal(thin.order))
        (above, below), first = next((d, found) for d, found in tried if found is not None)
        return _approximant(series, first, stride, (above + below) * stride + stride - 1)
    above, below = degrees
    if stride > 1 and above % stride == 0 and below % stride == 0:
        pair = _euclid(series.thinned(stride), above // stride, below // stride)
    else:
        pair, stride = _euclid(series, above, below), 1
    if pair is None:
        near = next(d for d in _neighbours(above, below) if _euclid(series, *d) is not None)
        raise EvaluationError(
            f"the approximant [{above}/{below}] does not exist for this series (the coefficients make its equations "
            f"singular): take degrees={near}"
        )
    return _approximant(series, pair, stride, above + below)


def _near_diagonal(order: int) -> Iterator[tuple[int, int]]:
    """(L, M) with L + M = order, most equal first; then with one term less, and so on."""
    for total in range(order, -1, -1):
        yield from sorted(((total - m, m) for m in range(total + 1)), key=lambda d: (abs(d[0] - d[1]), -d[0]))


def _neighbours(above: int, below: int) -> Iterator[tuple[int, int]]:
    """Degrees that need no more coefficients, nearest first; [L+M/0] always exists."""
    yield from sorted(
        ((a, b) for a in range(above + below + 1) for b in range(above + below + 1 - a)),
        key=lambda d: (abs(d[0] - above) + abs(d[1] - below), d[1]),
    )


def _euclid(series: Series, above: int, below: int) -> tuple[sp.Poly, sp.Poly] | None:
    """(numerator, denominator) of [above/below], None where it does not exist."""
    order = above + below
    x = series.variable
    old, new = sp.Poly({(order + 1,): 1}, x, domain=series.field), series.polynomial(order)
    before, now = sp.Poly(0, x, domain=series.field), sp.Poly(1, x, domain=series.field)
    while new and new.degree() > above:
        quotient, rest = old.div(new)
        old, new, before, now = new, rest, now, before - quotient * now
        if new and series.field.is_QQ:
            # Numbers stay short when each remainder is made primitive.
            content, new = new.primitive()
            now = now.quo_ground(content)
    if not now.eval(0):
        return None
    return new, now


def _approximant(series: Series, pair: tuple[sp.Poly, sp.Poly], stride: int, order: int) -> Approximant:
    above, below = (power(p, stride) for p in _cleared(series, *pair))
    degrees = (max(above.degree(), 0), below.degree()) if above else (0, 0)
    return Approximant(series.variable, degrees, min(order, series.order), series.written(above), series.written(below))


def _cleared(series: Series, *polynomials: sp.Poly) -> tuple[sp.Poly, ...]:
    """Multiplied so that the coefficients are short: integers without common factor; floats: the last is 1 at x = 0."""
    last = polynomials[-1]
    if series.digits is not None:
        lead = last.eval(0) or last.LC()
        return tuple(p.quo_ground(lead) for p in polynomials)
    expressions = [c for p in polynomials for c in p.all_coeffs()]
    together = sp.Integer(1)
    for c in expressions:
        together = sp.lcm(together, sp.together(c).as_numer_denom()[1])
    scaled = [sp.cancel(c * together) for c in expressions]
    common = sp.gcd_list(scaled) or sp.Integer(1)
    sign = -1 if (lead := last.eval(0) or last.LC()).is_number and (lead * together / common).is_negative else 1
    return tuple(p.mul_ground(series.field.from_sympy(sp.cancel(sign * together / common))) for p in polynomials)


# Quadratic approximants


def _quadratic(series: Series, degrees: tuple[int, ...] | None) -> QuadraticApproximant:
    stride = series.stride
    if degrees is None:
        degrees = _even_shares((series.order // stride - 1) if series.order >= stride else 0)
        if series.order < stride:
            raise EvaluationError("a quadratic approximant needs at least two coefficients")
        thin = series.thinned(stride)
    elif all(d % stride == 0 for d in degrees):
        # One more power than the thinned degrees count: x^s is one equation, x … x^{s−1} are none.
        degrees, thin = tuple(d // stride for d in degrees), series.thinned(stride)
        if sum(degrees) + 1 > thin.order:
            raise EvaluationError(
                f"degrees={tuple(d * stride for d in degrees)} need the series through power "
                f"{(sum(degrees) + 1) * stride}, but it is known through power {series.order}"
            )
    else:
        stride, thin = 1, series
    P, Q, R = _kernel(thin, degrees)
    factor, radicand = _branch(thin, P, Q, R)
    P, Q, R, factor, radicand = (power(p, stride) for p in (P, Q, R, factor, radicand))
    shown = tuple(max(p.degree(), 0) if p else 0 for p in (P, Q, R))
    order = (sum(degrees) + 1) * stride + stride - 1
    written = [series.written(p) for p in (P, Q, R, factor, radicand)]
    return QuadraticApproximant(series.variable, shown, min(order, series.order), *written)


def _even_shares(total: int) -> tuple[int, ...]:
    return tuple((total + 2 - k) // 3 for k in range(3))


def _kernel(series: Series, degrees: tuple[int, ...]) -> tuple[sp.Poly, sp.Poly, sp.Poly]:
    """(P, Q, R) without common factor."""
    p, q, r = degrees
    top = p + q + r + 1
    f = series.polynomial(top)
    first = [*ascending(f), *[series.field.zero] * (top + 1)][: top + 1]
    second = [*ascending(f * f), *[series.field.zero] * (top + 1)][: top + 1]
    zero = series.field.zero
    rows = [
        [first[n - j] if n >= j else zero for j in range(q + 1)]
        + [second[n - j] if n >= j else zero for j in range(r + 1)]
        for n in range(p + 1, top + 1)
    ]
    found = DomainMatrix(rows, (len(rows), q + r + 2), series.field).nullspace().to_list()[0]
    Q, R = series.poly(found[: q + 1]), series.poly(found[q + 1 :])
    rest = Q * f + R * f * f
    P = series.poly([-c for c in ascending(rest)[: p + 1]])
    common = P.gcd(Q).gcd(R)
    P, Q, R = (x.quo(common) for x in (P, Q, R))
    return _cleared(series, P, Q, R) if R else (*_cleared(series, P, Q), R)


def _branch(series: Series, P: sp.Poly, Q: sp.Poly, R: sp.Poly) -> tuple[sp.Poly, sp.Poly]:
    """(factor, radicand): 2R f + Q = factor·√radicand near x = 0, radicand(0) = 1."""
    one = sp.Poly(1, series.variable, domain=series.field)
    if not R:
        return Q, one
    square = Q * Q - 4 * P * R
    own = ascending(2 * R * series.polynomial(series.order) + Q)[: series.order + 1]
    lowest = next((n for n, c in enumerate(own) if c), None)
    if not square or lowest is None:
        return sp.Poly(0, series.variable, domain=series.field), one
    factor, radicand = one, one
    for p, multiplicity in square.sqf_list()[1]:
        factor *= p ** (multiplicity // 2)
        radicand *= p ** (multiplicity % 2)
    start = radicand.eval(0)
    if not start:
        raise EvaluationError(
            "the two branches of this quadratic approximant meet at 0 in a square root, which no power series has: "
            "the series is known to too few terms for these degrees, or take other degrees"
        )
    lead = factor.all_coeffs()[::-1][lowest] if lowest <= factor.degree() else 0
    if not lead:
        raise EvaluationError("the series does not choose a branch of this quadratic approximant: take other degrees")
    scale = own[lowest] / series.field.from_sympy(lead)
    return factor.mul_ground(scale), radicand.quo_ground(start)
