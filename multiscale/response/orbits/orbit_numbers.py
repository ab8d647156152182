"""The field of numbers in which a periodic orbit is calculated, and the scaled force in it.

With u = (a_0/2) Y, ω_0 = r√d and δ = √d d/dθ a term c ε^p Π d^j u/dt^j of D factors, J derivatives in all, becomes

    c (a_0/2)^{D−1} r^J/ω_0² · ε^p w^J Π δ^j Y

In rationals d is the square-free integer for which r is rational. Where a parameter or the amplitude is a symbol the
coefficients are elements of a ring of the library, a_0/2 one of its generators, and d = 1; where a number of digits is
asked for they are balls, or numbers of mpmath, and d = 1.
"""

from __future__ import annotations

from collections.abc import Callable, Iterator
from contextlib import contextmanager
from dataclasses import dataclass, replace
from fractions import Fraction
from typing import Any

import mpmath
import sympy as sp

from multiscale.algebra.choice import make_ring
from multiscale.algebra.polynomial import freeze
from multiscale.algebra.quotient import reduced
from multiscale.algebra.reciprocals import inverse, missing
from multiscale.algebra.ring import Ring, RingSpec
from multiscale.errors import UnsupportedTermError
from multiscale.expressions import Writer
from multiscale.linear_part.oscillators import Oscillators
from multiscale.response.orbits.leading import Leading
from multiscale.response.orbits.lindstedt import Monomial, response_rate
from multiscale.response.orbits.orbit_statement import Statement
from multiscale.response.orbits.waves import Waves
from multiscale.response.orbits.waves.plain import PlainWaves, Scalars

__all__ = ["Numbers", "PrecisionError", "ball_numbers", "exact_numbers", "plain_numbers", "ring_numbers"]

HALF = "@half"


@dataclass(frozen=True)
class Numbers:
    """Waves, the force with coefficients in their field, d, and how a scalar is written."""

    waves: Waves
    force: list[Monomial]
    square: int
    write: Callable[[Any], sp.Expr]


def _scaled(statement: Statement, r: sp.Expr) -> list[tuple[int, tuple[int, ...], sp.Expr]]:
    """(power, jets, coefficient) in the user's symbols."""
    found = []
    for term, c in statement.terms:
        jets = tuple(d for _, d in term.factors)
        value = c * (statement.start / 2) ** (len(jets) - 1) * r ** sum(jets) / statement.natural**2
        found.append((term.power, jets, value))
    return found


def exact_numbers(statement: Statement, flint: bool) -> Numbers | None:
    """Rationals; None where a coefficient is not rational."""
    if not (statement.natural**2).is_Rational:
        return None
    r, radical = sp.sqrt(statement.natural**2).as_coeff_Mul()
    square = int(radical**2)
    force = []
    for power, jets, value in _scaled(statement, r):
        number = sp.radsimp(sp.expand(value))
        if not number.is_Rational:
            return None
        force.append(Monomial(power, jets, Fraction(int(number.p), int(number.q))))
    if not flint:
        return Numbers(PlainWaves(square=square), force, square, lambda x: sp.Rational(x.numerator, x.denominator))
    from multiscale.response.orbits.waves.packed import PackedWaves
    from multiscale.response.orbits.waves.parts import ExactParts

    waves = PackedWaves(ExactParts, 2 if statement.has_odd_degrees else 1, square)
    return Numbers(waves, force, square, lambda x: sp.Rational(int(x.p), int(x.q)))


def _value(x: sp.Expr, bits: int) -> Any:
    """A number of mpmath with `bits` correct binary digits."""
    with mpmath.workprec(bits):
        return sp.N(x, int(bits / 3.3) + 3)._to_mpmath(bits)


class PrecisionError(ArithmeticError):
    """Fewer correct digits than were asked for: more working precision is needed."""


def _digits(value: Any, digits: int, bits: int) -> sp.Expr:
    """A number of mpmath to `digits` digits; what is smaller than half the precision is zero."""
    if abs(value) < mpmath.mpf(2) ** (-bits // 2):
        return sp.Integer(0)
    return sp.Float(mpmath.nstr(value, digits, strip_zeros=False), digits)


@contextmanager
def ball_numbers(statement: Statement, bits: int, digits: int) -> Iterator[Numbers]:
    """Balls, `bits` being FLINT's working precision inside the context; writing raises `PrecisionError`."""
    from flint import arb, ctx, fmpq, fmpz

    from multiscale.response.orbits.waves.packed import PackedWaves
    from multiscale.response.orbits.waves.parts import BallParts

    def write(x: Any) -> sp.Expr:
        if x == 0:
            return sp.Integer(0)
        small = bool(abs(x) < arb(2) ** (-bits // 2))
        if not small and x.rel_accuracy_bits() < 3.33 * digits + 4:
            raise PrecisionError
        mantissa, exponent = x.mid().man_exp()
        return _digits(mpmath.ldexp(int(mantissa), int(exponent)), digits, bits)

    with ctx.workprec(bits), mpmath.workprec(bits):
        force = []
        for power, jets, value in _scaled(statement, statement.natural):
            if value.is_Rational:
                number = arb(fmpq(int(value.p), int(value.q)))
            else:
                sign, mantissa, exponent, _ = _value(value, bits + 20)._mpf_
                middle = arb(fmpz(-int(mantissa) if sign else int(mantissa))) * arb(2) ** exponent
                number = middle + arb(0, abs(middle).upper() * arb(2) ** (8 - bits))
            force.append(Monomial(power, jets, number))
        waves = PackedWaves(BallParts, 2 if statement.has_odd_degrees else 1)
        yield Numbers(waves, force, 1, write)


@contextmanager
def plain_numbers(statement: Statement, bits: int, digits: int) -> Iterator[Numbers]:
    """Numbers of mpmath, `bits` being its working precision inside the context; errors are not tracked."""

    def read(x: Any) -> Any:
        return mpmath.mpf(x.numerator) / x.denominator if isinstance(x, int | Fraction) else x

    with mpmath.workprec(bits):
        tiny = mpmath.mpf(2) ** (-bits // 2)
        scalars = Scalars(read, vanishes=lambda x: bool(abs(x) < tiny))
        force = [Monomial(p, jets, _value(x, bits + 20)) for p, jets, x in _scaled(statement, statement.natural)]
        yield Numbers(PlainWaves(scalars), force, 1, lambda x: _digits(x, digits, bits))


def ring_numbers(statement: Statement, representation: str) -> Numbers:
    """Polynomials in parameters, reciprocals and a_0/2: free, or the root of the leading condition's solution."""
    canonical = statement.canonical
    spec = canonical.spec
    if statement.leading is None:
        spec = replace(spec, reals=(*spec.reals, HALF))
    else:
        spec = _with_amplitude(statement, statement.leading, representation)
    ring = make_ring(spec, representation)
    constant = any(not term.factors for term, _ in statement.terms)
    ring = _dividing(ring, _natural(ring, statement), *([_half(ring)] if constant else []))
    force = _ring_force(ring, statement)
    if statement.damping is not None:
        if statement.damping != min(term.power for term, _ in statement.terms):
            raise UnsupportedTermError(
                f"symbolic parameters where damping first acts at order {statement.damping} and other terms before "
                "it: substitute numbers for them, or use limit_cycles on an expansion"
            )
        rate = response_rate(_ring_waves(ring), force, statement.damping)
        ring = _dividing(ring, rate)
        force = _ring_force(ring, statement)
    writer = Writer(dict(canonical.meanings) | {HALF: statement.start / 2})
    return Numbers(_ring_waves(ring), force, 1, lambda x: writer.quotient(reduced(ring, ring.normal(x))))


def _ring_waves(ring: Ring) -> PlainWaves:
    def read(x: Any) -> Any:
        return ring.constant(x) if isinstance(x, int | Fraction) else x

    return PlainWaves(Scalars(read, ring.normal, lambda x, y: ring.normal(x * inverse(ring, y))))


def _natural(ring: Ring, statement: Statement) -> Any:
    bases = statement.canonical.bases
    return Oscillators(bases.rates, [dict(b) for b in bases.values], bases.unit, ring).value(bases.rates[0])


def _half(ring: Ring) -> Any:
    return ring.generators[ring.spec.index[HALF]]


def _dividing(ring: Ring, *divisors: Any) -> Ring:
    more = missing(ring, divisors)
    return ring.extended(more) if more else ring


def _ring_force(ring: Ring, statement: Statement) -> list[Monomial]:
    natural, half = _natural(ring, statement), _half(ring)
    below = inverse(ring, natural)
    force = []
    for term, _ in statement.terms:
        jets = tuple(d for _, d in term.factors)
        c = ring.read(dict(term.coefficient)) * below * below
        for factor in [natural] * sum(jets) + [half] * (len(jets) - 1) + ([] if jets else [inverse(ring, half)]):
            c = ring.normal(c * factor)
        force.append(Monomial(term.power, jets, ring.normal(c)))
    return force


def _with_amplitude(statement: Statement, leading: Leading, representation: str) -> RingSpec:
    """The generators with a_0/2 as the root of ρ_0 = −c_m/c_{m+1}."""
    powers = sorted(leading.terms)
    if len(powers) != 2 or powers[1] - powers[0] != 1:
        symbols = ", ".join(sorted(map(str, statement.symbols)))
        raise UnsupportedTermError(
            f"the leading amplitude {statement.start} is not the square root of a rational number or of a rational "
            "function of the parameters: "
            + (f"substitute numbers for {symbols} and give `digits`" if symbols else "give `digits`")
            + ", or use limit_cycles on an expansion"
        )
    ring = make_ring(statement.canonical.spec, representation)
    known = sorted({p for q in leading.terms.values() for p, _ in q.denominator})
    ring = _dividing(ring, *(ring.read(dict(p)) for p in known))
    values = []
    for m in powers:
        q = leading.terms[m]
        x = ring.read(dict(q.numerator))
        for p, e in q.denominator:
            for _ in range(e):
                x = ring.normal(x * inverse(ring, ring.read(dict(p))))
        values.append(x)
    larger = _dividing(ring, values[1])
    above, below = (x if larger is ring else larger.lift(x) for x in values)
    square = larger.normal(-above * inverse(larger, below))
    return replace(larger.spec, roots=(*larger.spec.roots, (HALF, freeze(larger.write(square)))))
