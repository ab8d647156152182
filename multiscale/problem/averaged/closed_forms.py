"""Fourier coefficients of a force along a harmonic motion, in closed form.

    C_m = (1/2π) ∫_0^{2π} f(a cos θ, −aω sin θ) e^{−imθ} dθ

Three families, each times a polynomial in u and u'; a force is a sum of terms of any of them:

    powers    |u|^p, |u'|^p, with or without their sign:   a^p and Beta functions of p
    waves     exp, sin, cos, sinh, cosh of κu or κu':      Bessel functions of κa (NIST DLMF 10.9.2, 10.32.3)
    steps     switched on beyond u = g or u' = g:          elementary functions of g/a (arc −θ_c … θ_c, cos θ_c = g/a)

With θ' = θ + π/2, u' = aω cos θ': a function of u' is one of u at amplitude aω, its e^{ijθ} multiplied by (−i)^j.
"""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass, replace

import sympy as sp

from multiscale.problem.averaged.steps import with_steps

__all__ = [
    "AMPLITUDE",
    "FREQUENCY",
    "Closed",
    "PowerTerm",
    "U",
    "V",
    "closed_form",
    "power_coefficient",
    "power_terms",
]

U, V = sp.symbols("@u @v", real=True)
"""Displacement and velocity of the one oscillator that a force depends on."""
AMPLITUDE = sp.Symbol("@a", positive=True)
FREQUENCY = sp.Symbol("@w", positive=True)

_WAVES = (sp.exp, sp.sin, sp.cos, sp.sinh, sp.cosh)
_ZERO = sp.Integer(0)


@dataclass(frozen=True)
class Closed:
    """C_m = smooth + Σ inside(c_j), c_j = g_j/a cut off to −1 … 1.

    `steps` maps |g| to a list of (c = ±|g|/scale, coefficient by cosine number of the arc |θ| < arccos c).
    """

    smooth: sp.Expr
    steps: tuple[tuple[sp.Expr, tuple[tuple[int, sp.Expr], ...]], ...] = ()


@dataclass(frozen=True)
class PowerTerm:
    """factor · |u|^x sgn(u)^s · |u'|^y sgn(u')^r · special."""

    factor: sp.Expr
    x: sp.Expr
    s: int
    y: sp.Expr
    r: int
    special: sp.Expr | None


def _of(h: sp.Expr) -> tuple[sp.Symbol, sp.Expr, sp.Expr] | None:
    """(variable, slope, offset) of an affine function of u or of u' alone."""
    for x, other in ((U, V), (V, U)):
        if x in h.free_symbols and other not in h.free_symbols:
            slope = sp.diff(h, x)
            if x in slope.free_symbols:
                return None
            return x, slope, h.subs(x, 0)
    return None


def _term(x: sp.Expr) -> PowerTerm | None:
    factor, special = sp.Integer(1), None
    powers = {U: [_ZERO, 0], V: [_ZERO, 0]}
    for f in sp.Mul.make_args(x):
        base, power = f.as_base_exp() if not isinstance(f, sp.exp) else (f, sp.Integer(1))
        if not f.free_symbols & {U, V}:
            factor *= f
        elif base in powers and power.is_Integer and power.is_positive:
            powers[base][0] += power
            powers[base][1] += int(power)
        elif isinstance(base, sp.Abs | sp.sign) and (found := _of(base.args[0])) and found[2] == 0:
            if isinstance(base, sp.sign):
                if not (power.is_Integer and power.is_positive):
                    return None
                factor *= sp.sign(found[1]) ** power
                powers[found[0]][1] += int(power)
            else:
                factor *= sp.Abs(found[1]) ** power
                powers[found[0]][0] += power
        elif special is None and isinstance(base, sp.Heaviside) and power.is_Integer and power.is_positive:
            if not _of(base.args[0]):
                return None
            special = base
        elif special is None and power == 1 and isinstance(f, _WAVES) and _of(f.args[0]):
            special = f
        else:
            return None
    if not all(exponent.is_nonnegative for exponent, _ in powers.values()):
        return None
    return PowerTerm(factor, powers[U][0], powers[U][1] % 2, powers[V][0], powers[V][1] % 2, special)


def _beta(x: sp.Expr, y: sp.Expr) -> sp.Expr:
    """(1/2π) ∫ |cos θ|^x |sin θ|^y dθ."""
    half = sp.Rational(1, 2)
    return sp.gamma((x + 1) * half) * sp.gamma((y + 1) * half) / (sp.pi * sp.gamma((x + y) * half + 1))


def _pure(p: sp.Expr, m: int) -> sp.Expr:
    """(1/2π) ∫ |cos θ|^p sgn(cos θ)^m cos mθ dθ (Γ-function form of the Fourier series of a power of the cosine)."""
    if p.is_Integer and p.is_nonnegative and (p - m).is_even and m > p:
        return _ZERO
    above, below = 1 + (p + m) / 2, 1 + (p - m) / 2
    return sp.gamma(p + 1) / (2**p * sp.gamma(above) * sp.gamma(below))


def power_coefficient(t: PowerTerm, m: int) -> sp.Expr:
    """C_m of a term without special factor."""
    size = t.factor * AMPLITUDE ** (t.x + t.y) * FREQUENCY**t.y
    if m > 1:
        # One factor that is no polynomial: the other is a short sum of e^{ijθ}.
        if t.y.is_Integer and t.y % 2 == t.r:
            series = _laurent(replace(t, x=_ZERO, s=0), m)
            return size * sp.Add(*(q * _pure(t.x, abs(j)) for j, q in series.items() if (j - t.s) % 2 == 0))
        if t.x.is_Integer and t.x % 2 == t.s:
            series = _laurent(replace(t, y=_ZERO, r=0), m)
            parts = [(-1) ** t.r * q * sp.I**j * _pure(t.y, abs(j)) for j, q in series.items() if (j - t.r) % 2 == 0]
            return size * sp.Add(*parts)
    c = sp.Symbol("@c")
    if t.r:
        wave = sp.Poly(sp.chebyshevu(m - 1, c) if m else _ZERO, c)
        turned = sp.I
    else:
        wave, turned = sp.Poly(sp.chebyshevt(m, c), c), sp.Integer(1)
    parts = [q * _beta(t.x + j, t.y + t.r) for (j,), q in wave.terms() if (t.s + j) % 2 == 0]
    return size * turned * sp.Add(*parts)


def _laurent(t: PowerTerm, m: int) -> dict[int, sp.Expr]:
    """cos^x θ (−sin θ)^y e^{−imθ} = Σ_j q_j e^{ijθ} for powers that are polynomials."""
    series = {-m: sp.Integer(1)}
    half, turn = sp.Rational(1, 2), sp.I / 2
    for count, up, down in ((int(t.x), half, half), (int(t.y), turn, -turn)):
        for _ in range(count):
            following: dict[int, sp.Expr] = {}
            for j, q in series.items():
                following[j + 1] = following.get(j + 1, _ZERO) + q * up
                following[j - 1] = following.get(j - 1, _ZERO) + q * down
            series = following
    return {j: q for j, q in series.items() if q != 0}


def _wave_means(function: sp.Expr, j: int, x: sp.Expr) -> sp.Expr:
    """(1/2π) ∫ function(x cos θ) cos jθ dθ."""
    j = abs(j)
    if function is sp.sin:
        return (-1) ** ((j - 1) // 2) * sp.besselj(j, x) if j % 2 else _ZERO
    if function is sp.cos:
        return _ZERO if j % 2 else (-1) ** (j // 2) * sp.besselj(j, x)
    if function is sp.exp or (function is sp.sinh) == bool(j % 2):
        return sp.besseli(j, x)
    return _ZERO


def _wave(function: sp.Expr, j: int, x: sp.Expr, offset: sp.Expr) -> sp.Expr:
    """The same for function(x cos θ + offset)."""
    if offset == 0:
        return _wave_means(function, j, x)
    if function is sp.exp:
        return sp.exp(offset) * _wave_means(function, j, x)
    partner = {sp.sin: sp.cos, sp.cos: sp.sin, sp.sinh: sp.cosh, sp.cosh: sp.sinh}[function]
    even = sp.cos if function in (sp.sin, sp.cos) else sp.cosh
    sign = -1 if function is sp.cos else 1
    return _wave_means(function, j, x) * even(offset) + sign * _wave_means(partner, j, x) * partner_at(partner, offset)


def partner_at(partner: sp.Expr, offset: sp.Expr) -> sp.Expr:
    """sin(x + φ) = sin x cos φ + cos x sin φ, and so on: the factor of the partner's mean."""
    odd = sp.sin if partner in (sp.sin, sp.cos) else sp.sinh
    return odd(offset)


def _scale(x: sp.Symbol) -> sp.Expr:
    return AMPLITUDE if x == U else AMPLITUDE * FREQUENCY


def _terms(f: sp.Expr) -> Iterator[PowerTerm | None]:
    for x in sp.Add.make_args(f):
        yield _term(x)


def power_terms(f: sp.Expr) -> tuple[PowerTerm, ...] | None:
    """A force as a sum of power terms, or None where it is more than that."""
    terms = tuple(_terms(with_steps(f, (U, V))))
    found = tuple(t for t in terms if t is not None and t.special is None)
    return found if len(found) == len(terms) else None


def closed_form(f: sp.Expr, m: int) -> Closed | None:
    """C_m of a force f(U, V), or None where no family above holds it."""
    f = with_steps(f, (U, V))
    smooth = []
    steps: dict[sp.Expr, dict[int, sp.Expr]] = {}
    for t in _terms(f):
        if t is None:
            return None
        if t.special is None:
            smooth.append(power_coefficient(t, m))
            continue
        if not (t.x.is_Integer and t.y.is_Integer and t.x % 2 == t.s and t.y % 2 == t.r):
            return None
        series = _laurent(t, m)
        x, slope, offset = _of(t.special.args[0])  # type: ignore[misc]
        size = t.factor * AMPLITUDE ** (t.x + t.y) * FREQUENCY**t.y
        turned = {j: size * q * ((-sp.I) ** j if x == V else 1) for j, q in series.items()}
        if isinstance(t.special, sp.Heaviside):
            if not (slope.is_positive or slope.is_negative):
                return None
            # H(−x) = 1 − H(x): the part below the threshold is the whole less the part above.
            sign = 1 if slope.is_positive else -1
            if sign < 0:
                smooth.append(turned.get(0, _ZERO))
            arc = steps.setdefault(-offset / slope / _scale(x), {})
            for j, q in turned.items():
                arc[abs(j)] = arc.get(abs(j), _ZERO) + sign * q
        else:
            smooth += [q * _wave(t.special.func, j, slope * _scale(x), offset) for j, q in turned.items()]
    cleaned = tuple(
        (c, tuple((j, q) for j, x in sorted(arc.items()) if (q := sp.expand(x)) != 0)) for c, arc in steps.items()
    )
    return Closed(sp.Add(*smooth), tuple((c, arc) for c, arc in cleaned if arc))
