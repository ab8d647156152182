"""Harmonic drives: cos and sin of a fast angle become phasors.

    cos(Ωt + φ) = ½ (e h + 1/(e h)),      e = exp(iΩt) a phasor of rate Ω,  h = exp(iφ) of rate 0

Phasors of one problem are a Z-basis of the rates of all its drives, so that cos Ωt, cos 2Ωt and cos(Ω_1 + Ω_2)t need no
more of them than there are independent frequencies. A rate may change slowly: θ' = Ω + r·(εt) for a chirp.
"""

from __future__ import annotations

from dataclasses import dataclass
from fractions import Fraction
from math import lcm

import sympy as sp

from multiscale.algebra.polynomial import Frozen
from multiscale.linear_part import Rate
from multiscale.problem.lattice import lattice_basis
from multiscale.problem.reading import IMAGINARY_UNIT, decimals, unsupported

__all__ = ["Drive", "Phasor", "with_phasors"]


@dataclass(frozen=True)
class Phasor:
    """A symbol that stands for exp(i angle), with angle' = rate in the user's symbols; a constant phase has rate 0."""

    symbol: sp.Symbol
    rate: sp.Expr
    angle: sp.Expr


@dataclass(frozen=True)
class Drive:
    """A phasor: its generator, its leading rate, the later terms Ω_1, Ω_2, … of its frequency, and the frequency and
    the angle in the user's symbols (an eliminated frequency under its own name) and in the remaining ones."""

    generator: str
    rate: Rate
    detunings: tuple[Frozen, ...]
    frequency: sp.Expr
    angle: sp.Expr
    reduced_frequency: sp.Expr


@dataclass(frozen=True)
class _Wave:
    """One cos or sin: its angle at t = 0 and its rate."""

    phase: sp.Expr
    rate: sp.Expr


def _wave(x: sp.Expr, time: sp.Symbol, small: sp.Symbol) -> _Wave | None:
    """The wave in cos(angle) or sin(angle), None where the angle is slow (a function of small*time)."""
    angle = decimals(x.args[0])
    rate = sp.expand(sp.diff(angle.doit(), time))
    slow = rate.subs(time, sp.Symbol("@s") / small) if time in rate.free_symbols else rate
    if small in slow.free_symbols and sp.expand(slow).subs(small, 0).has(sp.nan, sp.zoo):
        raise unsupported(
            x,
            f"its frequency changes with {time} other than through {small}*{time}",
            f"Write the frequency as a function of {small}*{time}",
        )
    if slow.subs(small, 0) == 0:
        return None
    return _Wave(angle.doit().subs(time, 0), rate)


def _vector(rate: sp.Expr, monomials: list[sp.Expr]) -> dict[int, Fraction]:
    result = {}
    for monomial, c in rate.as_coefficients_dict().items():
        if not c.is_Rational:
            monomial, c = monomial * c, sp.Integer(1)
        if monomial not in monomials:
            monomials.append(monomial)
        result[monomials.index(monomial)] = Fraction(int(c.p), int(c.q))
    return result


def with_phasors(
    equations: list[sp.Expr], time: sp.Symbol, small: sp.Symbol, jets: set[sp.Symbol]
) -> tuple[list[sp.Expr], list[Phasor]]:
    """The equations with phasors for their drives, and the phasors: fast ones first, then constant phases."""
    found = sorted(
        {x for e in equations for x in e.atoms(sp.cos, sp.sin) if time in x.free_symbols and not x.free_symbols & jets},
        key=str,
    )
    waves = {x: w for x in found if (w := _wave(x, time, small)) is not None}
    monomials: list[sp.Expr] = []
    vectors = {x: _vector(w.rate, monomials) for x, w in waves.items()}
    scale = lcm(*(c.denominator for v in vectors.values() for c in v.values()))
    rows = {x: tuple(int(v.get(k, 0) * scale) for k in range(len(monomials))) for x, v in vectors.items()}
    basis, coordinates = lattice_basis(list(rows.values()))
    fast = []
    for k, row in enumerate(basis):
        rate = sp.Add(*(sp.Rational(n, scale) * m for n, m in zip(row, monomials, strict=True)))
        fast.append(Phasor(sp.Symbol(f"@e{k}"), rate, _angle(rate, time)))
    phases: dict[sp.Expr, Phasor] = {}
    replacements = {}
    for x, numbers in zip(rows, coordinates, strict=True):
        e = sp.Mul(*(p.symbol**n for p, n in zip(fast, numbers, strict=True)))
        replacements[x] = _exponential(x, e * _phase_factor(waves[x].phase, phases))
    return [x.xreplace(replacements) for x in equations], [*fast, *phases.values()]


def _angle(rate: sp.Expr, time: sp.Symbol) -> sp.Expr:
    if time not in rate.free_symbols:
        return rate * time
    return sp.integrate(rate, (time, 0, time))


def _phase_factor(phase: sp.Expr, phases: dict[sp.Expr, Phasor]) -> sp.Expr:
    """exp(i phase) as a product of unit generators, one for each symbolic term of the phase."""
    factor = sp.Integer(1)
    for term, c in sp.expand(phase).as_coefficients_dict().items():
        if term.free_symbols and c.is_Integer:
            known = phases.setdefault(term, Phasor(sp.Symbol(f"@h{len(phases)}"), sp.Integer(0), term))
            factor *= known.symbol ** int(c)
        elif term.free_symbols:
            known = phases.setdefault(c * term, Phasor(sp.Symbol(f"@h{len(phases)}"), sp.Integer(0), c * term))
            factor *= known.symbol
        else:
            factor *= sp.cos(c * term) + IMAGINARY_UNIT * sp.sin(c * term)
    return factor


def _exponential(x: sp.Expr, phasor: sp.Expr) -> sp.Expr:
    """cos or sin as ½(P + P̄) or (P − P̄)/2i; numeric phase factors carry i and are conjugated here."""
    i = IMAGINARY_UNIT
    numeric = [f for f in sp.Mul.make_args(phasor) if i in f.free_symbols]
    symbolic = [f for f in sp.Mul.make_args(phasor) if i not in f.free_symbols]
    mirrored = sp.Mul(*(f.subs(i, -i) for f in numeric)) / sp.Mul(*(f for f in symbolic if f.free_symbols))
    mirrored *= sp.Mul(*(f for f in symbolic if not f.free_symbols))
    if isinstance(x, sp.cos):
        return (phasor + mirrored) / 2
    return -i * (phasor - mirrored) / 2
