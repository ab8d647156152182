"""Fourier coefficients of the forces that are not polynomial, added to a canonical form.

At the leading level of a law its coefficients are functions of the amplitude. The harmonics that meet the rate of a
mode, m·rate(j) = rate(k), give the slow flow; others are there where asked for, and make the corrections U_n complete
up to a stated tail. One level further a homogeneous law has constants and powers of |z| instead (`homogeneous`). A law
of several phases is averaged over all of them, for the slow flow alone.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field, replace
from fractions import Fraction

import sympy as sp

from multiscale.algebra.polynomial import Frozen
from multiscale.clock import Modulus
from multiscale.forces.polynomial import Term
from multiscale.problem.averaged.closed_forms import AMPLITUDE, FREQUENCY, PowerTerm, U, V, power_terms
from multiscale.problem.averaged.guarded import Power
from multiscale.problem.averaged.homogeneous import (
    DEFAULT_HARMONICS,
    Degree,
    coefficients,
    degree_of,
    roughness,
    slope,
    tail,
)
from multiscale.problem.averaged.laws import LAW, Law
from multiscale.problem.averaged.projection import Harmonic, TorusMean, amplitude_of, harmonic, numeric_harmonic
from multiscale.problem.averaged.several_phases import several_phases, torus_means, turning_of
from multiscale.problem.canonical import Canonical
from multiscale.problem.reading import unsupported
from multiscale.problem.terms import Layout

__all__ = ["with_projections"]


@dataclass
class _Found:
    """What the laws add to the canonical form."""

    harmonics: list[Harmonic] = field(default_factory=list)
    meanings: dict[str, sp.Expr] = field(default_factory=dict)
    numeric: dict[str, sp.Expr] = field(default_factory=dict)
    powers: dict[int, dict[str, Frozen]] = field(default_factory=dict)
    left_out: list[str] = field(default_factory=list)
    torus: list[TorusMean] = field(default_factory=list)

    def named(self, stem: str, shown: Sequence[sp.Expr], numeric: Sequence[sp.Expr]) -> tuple[str, str]:
        """Generators for the real and the imaginary part of a coefficient, "" for zero."""
        names = []
        for letter, plain, safe in zip("cs", shown, numeric, strict=True):
            names.append(f"{stem}{letter}" if plain != 0 else "")
            if plain != 0:
                self.meanings[names[-1]], self.numeric[names[-1]] = plain, safe
        return names[0], names[1]


@dataclass(frozen=True)
class _Stated:
    """A law with the one oscillator it depends on, its force in `U` and `V`, and how it is spelled."""

    number: int
    mode: int
    force: sp.Expr
    shown: sp.Expr
    accelerated: bool


def with_projections(
    canonical: Canonical,
    laws: Sequence[Law],
    layout: Layout,
    shown: Mapping[sp.Symbol, sp.Expr],
    theta: sp.Symbol,
    order: int,
    harmonics: int | None,
    formal: bool,
) -> Canonical:
    """The canonical form with generators for the coefficients of `laws`.

    `harmonics` is the highest harmonic to keep, `formal` admits kinks at second order.
    """
    found = _Found()
    for n, law in enumerate(laws):
        places = [(k, t) for k, terms in enumerate(canonical.force) for t in terms if t.factors == ((n, LAW),)]
        if not places:
            continue
        power = min(t.power for _, t in places)
        if (several := several_phases(law, canonical, layout)) is not None:
            for mean in torus_means(n, law, several, places, order, canonical, layout, shown):
                found.torus.append(mean)
                for name, symbol in zip((mean.real, mean.imag), mean.symbols, strict=True):
                    found.meanings[name] = found.numeric[name] = symbol
            continue
        stated = _stated(n, law, layout, shown)
        if order > power:
            terms = _terms_at_second_order(stated, power, order, canonical, formal)
            _add_constants(found, stated, terms, canonical, DEFAULT_HARMONICS if harmonics is None else harmonics)
        else:
            numbers = _numbers(canonical, stated.mode, places, harmonics)
            _add_functions(found, stated, numbers, canonical, theta)
            found.left_out.append(_remark(stated, power, harmonics))
    spec = canonical.spec
    moduli = []
    for j, powers in sorted(found.powers.items()):
        variable = spec.pairs[j][0]
        name, inverse = f"@r{j}", f"1/(@r{j})"
        spec = replace(
            spec,
            reals=(*spec.reals, name),
            moduli=(*spec.moduli, (variable, name)),
            reciprocals=(*spec.reciprocals, (inverse, ((((name, 1),), Fraction(1)),))),
        )
        found.meanings[name] = found.numeric[name] = amplitude_of(j) / 2
        moduli.append(Modulus(name, inverse, variable, tuple(sorted(powers.items()))))
    new = sorted(found.meanings.keys() - {m.name for m in moduli})
    return replace(
        canonical,
        spec=replace(spec, reals=(*spec.reals, *new)),
        meanings=tuple(sorted((*canonical.meanings, *found.meanings.items()))),
        harmonics=tuple(found.harmonics),
        numeric=tuple(sorted(found.numeric.items())),
        moduli=tuple(moduli),
        left_out=tuple(found.left_out),
        torus=tuple(found.torus),
    )


def _stated(n: int, law: Law, layout: Layout, shown: Mapping[sp.Symbol, sp.Expr]) -> _Stated:
    jets = law.jets(layout)
    k = jets[0][0]
    real = {jet: sp.Symbol(s.name, real=True) for s, jet in layout.jets.items()}
    along = {real[k, 0]: U, real[k, 1]: V, real[k, 2]: -(FREQUENCY**2) * U}
    return _Stated(n, k, law.force.xreplace(along), law.spelled(shown), (k, 2) in jets)


def _numbers(canonical: Canonical, mode: int, places: Sequence[tuple[int, Term]], harmonics: int | None) -> list[int]:
    """The harmonics that meet the rate of an equation's own mode, drives in front included, and those asked for."""
    wanted = set(range(harmonics + 1)) if harmonics is not None else set()
    rates = canonical.bases.rates
    own = rates[mode]
    pivot = next(b for b, x in enumerate(own) if x)
    for k, term in places:
        for turning in turning_of(term.coefficient, canonical):
            for sign in (1, -1):
                target = tuple(sign * y - x for x, y in zip(turning, rates[k], strict=True))
                m, rest = divmod(target[pivot], own[pivot])
                if not rest and all(m * x == y for x, y in zip(own, target, strict=True)):
                    wanted.add(abs(m))
    return sorted(wanted)


def _add_functions(found: _Found, law: _Stated, numbers: Sequence[int], canonical: Canonical, theta: sp.Symbol) -> None:
    own = {AMPLITUDE: amplitude_of(law.mode), FREQUENCY: canonical.frequencies[law.mode]}
    for m in numbers:
        parts = [[x.subs(own) for x in spell(law.force, m, theta)] for spell in (harmonic, numeric_harmonic)]
        real, imag = found.named(f"@F{law.number}.{m}", *parts)
        if real or imag:
            found.harmonics.append(Harmonic(law.number, law.mode, m, real, imag))


def _terms_at_second_order(
    law: _Stated, power: int, order: int, canonical: Canonical, formal: bool
) -> tuple[PowerTerm, ...]:
    """The power terms of a law, refused where its next level has no meaning."""

    def refuse(reason: str, remedy: str = f"Use order={power}") -> Exception:
        return unsupported(law.shown, reason, remedy)

    if order > power + 1:
        raise refuse(
            f"order {order} needs more than first derivatives of a force that is not polynomial",
            f"Use order={power} or {power + 1}",
        )
    terms = power_terms(law.force)
    if terms is None or degree_of(terms) is None or law.accelerated or canonical.slow:
        raise refuse(
            f"order {order} is there for homogeneous forces of displacement and velocity with constant parameters, "
            "such as |v|v, and this is none"
        )
    rough = roughness(terms)
    if any(x.is_zero for x in rough):
        raise refuse(
            f"the force jumps, so that order {order} contains its derivative, an impulse whose harmonics do not fall "
            "off: the sums fall only as 1/K with the number K of harmonics kept"
        )
    if not formal and not all((x - 1).is_positive for x in rough):
        raise refuse(
            f"the force is not known to be once differentiable, so that order {order} is formal",
            f"Use order={power}, or Problem(…, formal=True) to compute it nevertheless; an exponent above one may be "
            "declared as 1 + q with a positive symbol q",
        )
    return terms


def _add_constants(found: _Found, law: _Stated, terms: Sequence[PowerTerm], canonical: Canonical, highest: int) -> None:
    for kind in (None, 0, 1):
        part = terms if kind is None else slope(terms, kind)
        if not part:
            continue
        degree = degree_of(part)
        assert degree is not None
        numbers = coefficients(part, degree, highest + (kind is not None), canonical.frequencies[law.mode])
        for m, values in numbers.items():
            label = "f" if kind is None else "uv"[kind]
            real, imag = found.named(f"@C{law.number}{label}.{m}", values, values)
            factors = _modulus_power(found, law.mode, degree, m)
            found.harmonics.append(Harmonic(law.number, law.mode, m, real, imag, factors, kind))
    rough = roughness(terms)
    note = "" if all((x - 1).is_positive for x in rough) else " Formal: the force has a kink."
    bound = tail(terms, highest)
    size = (
        ""
        if bound is None
        else (
            f" What the left-out harmonics of this force alone add to D_2A at a = omega = 1 and coefficient 1 is below "
            f"{bound:.1e}."
        )
    )
    found.left_out.append(f"the force {law.shown} is carried with its harmonics 0 … {highest}.{size}{note}")


def _modulus_power(found: _Found, mode: int, degree: Degree, m: int) -> tuple[str, ...]:
    """Generators whose product is |z|^{degree − m}."""
    powers = found.powers.setdefault(mode, {})
    whole = degree.whole - m
    factors = [f"@r{mode}" if whole > 0 else f"1/(@r{mode})"] * abs(whole)
    if degree.rest == 0:
        return tuple(factors)
    name = f"@r{mode}^({degree.rest})"
    if name not in powers:
        found.meanings[name] = (amplitude_of(mode) / 2) ** degree.rest
        found.numeric[name] = Power(amplitude_of(mode) / 2, degree.rest)
        if degree.rest.is_Rational:
            powers[name] = (((), Fraction(int(degree.rest.p), int(degree.rest.q))),)
        else:
            exponent = f"@E({degree.rest})"
            found.meanings[exponent] = found.numeric[exponent] = degree.rest
            powers[name] = ((((exponent, 1),), Fraction(1)),)
    return (*factors, name)


def _remark(law: _Stated, power: int, harmonics: int | None) -> str:
    if harmonics is None:
        return (
            f"the harmonics of the force {law.shown} that meet no natural frequency are left out of the level-{power} "
            f"corrections, which the slow flow does not need: pass Problem(…, harmonics=K) for those up to K"
        )
    return f"the force {law.shown} is carried with its harmonics 0 … {harmonics} in the level-{power} corrections"
