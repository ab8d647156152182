"""Fourier coefficients of the forces that are not polynomial, added to a canonical form.

A law enters through the harmonics that meet the rate of a mode, m·rate(j) = rate(k), and where asked for through all up
to a given number: those make the corrections U_n complete up to a stated tail, while the slow flow does not need them.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, replace

import sympy as sp

from multiscale.linear_part import Rate
from multiscale.problem.canonical import Canonical
from multiscale.problem.closed_forms import AMPLITUDE, FREQUENCY, U, V
from multiscale.problem.laws import LAW, Law
from multiscale.problem.projection import Harmonic, amplitude_of, harmonic, numeric_harmonic
from multiscale.problem.reading import unsupported
from multiscale.problem.terms import Layout

__all__ = ["with_projections"]


@dataclass(frozen=True)
class _Motion:
    """The one oscillator that a law depends on, and its force in `U` and `V`."""

    mode: int
    force: sp.Expr


def with_projections(
    canonical: Canonical,
    laws: Sequence[Law],
    layout: Layout,
    shown: Mapping[sp.Symbol, sp.Expr],
    theta: sp.Symbol,
    order: int,
    harmonics: int | None,
) -> Canonical:
    """The canonical form with generators for the coefficients of `laws`; `harmonics`: the highest one to keep."""
    found: list[Harmonic] = []
    meanings: dict[str, sp.Expr] = {}
    numeric: dict[str, sp.Expr] = {}
    for n, law in enumerate(laws):
        equations = [k for k, terms in enumerate(canonical.force) for t in terms if t.factors == ((n, LAW),)]
        powers = [t.power for terms in canonical.force for t in terms if t.factors == ((n, LAW),)]
        if not equations:
            continue
        _refuse_order(law, min(powers), order, shown, layout)
        motion = _motion(law, canonical, layout, shown)
        for m in _numbers(canonical.bases.rates, motion.mode, equations, harmonics):
            frequency = canonical.frequencies[motion.mode]
            own = {AMPLITUDE: amplitude_of(motion.mode), FREQUENCY: frequency}
            names = []
            plain, safe = harmonic(motion.force, m, theta), numeric_harmonic(motion.force, m, theta)
            for letter, formula, guarded in zip("cs", plain, safe, strict=True):
                name = f"@F{n}.{m}{letter}" if formula != 0 else ""
                names.append(name)
                if name:
                    meanings[name], numeric[name] = formula.subs(own), guarded.subs(own)
            found.append(Harmonic(n, motion.mode, m, names[0], names[1]))
    spec = replace(canonical.spec, reals=(*canonical.spec.reals, *sorted(meanings)))
    return replace(
        canonical,
        spec=spec,
        meanings=tuple(sorted((*canonical.meanings, *meanings.items()))),
        harmonics=tuple(found),
        numeric=tuple(sorted(numeric.items())),
    )


def _motion(law: Law, canonical: Canonical, layout: Layout, shown: Mapping[sp.Symbol, sp.Expr]) -> _Motion:
    jets = law.jets(layout)
    modes = sorted({k for k, _ in jets})
    driven = [k for k in modes if any(not t.power and not t.factors for t in canonical.force[k])]
    if len(modes) > 1 or driven:
        raise unsupported(
            law.force.xreplace({sp.Symbol(s.name, real=True): x for s, x in shown.items()}),
            "a force that is not polynomial depends on more than one phase",
            "Such a force may depend on one oscillator without a drive at leading order",
        )
    k = modes[0]
    real = {jet: sp.Symbol(s.name, real=True) for s, jet in layout.jets.items()}
    along = {real[k, 0]: U, real[k, 1]: V, real[k, 2]: -(FREQUENCY**2) * U}
    return _Motion(k, law.force.xreplace(along))


def _numbers(rates: Sequence[Rate], mode: int, equations: Sequence[int], harmonics: int | None) -> list[int]:
    """The harmonics that meet the rate of an equation's own mode, and those asked for."""
    wanted = set(range(harmonics + 1)) if harmonics is not None else set()
    own = rates[mode]
    pivot = next(b for b, x in enumerate(own) if x)
    for k in equations:
        m, rest = divmod(abs(rates[k][pivot]), abs(own[pivot]))
        sign = 1 if rates[k][pivot] * own[pivot] > 0 else -1
        if not rest and m and all(sign * m * x == y for x, y in zip(own, rates[k], strict=True)):
            wanted.add(m)
    return sorted(wanted)


def _refuse_order(law: Law, power: int, order: int, shown: Mapping[sp.Symbol, sp.Expr], layout: Layout) -> None:
    if order > power:
        raise unsupported(
            law.force.xreplace({sp.Symbol(s.name, real=True): x for s, x in shown.items()}),
            f"a force that is not polynomial is carried to its leading order {power} only, order {order} was asked for",
            f"Use order={power}",
        )
