"""What is called the amplitude of one undriven oscillator: an equivariant change of a finished computation.

With A the amplitude in use and C = 1 + ε c_1(|A|²) + ε² c_2(|A|²) + … real, the new amplitude is

    B = A C(|A|²),      A = B S(|B|²),      S(σ) C(σ S(σ)²) = 1
    U_n(B), all n:      Σ εⁿ U_n(z S, z̄ S), sorted by power of ε again
    dB/dt:              d(z C)/dt at z → z S, sorted likewise

Both series are cut after ε^N, where all of this is exact. The phase is the same. C is read from the fields:

    to the peak          2r C(r²) = odd part in r of the value of Σ εⁿU_n at its extremum near θ = 0, z = r e^{iθ}
    to the fundamental   z C(z z̄) = the part of Σ εⁿU_n at the natural frequency

The odd part is half the distance from peak to peak: r → −r exchanges the maximum and the minimum, half a turn away.
With damping the extremum stands at θ = O(ε), and its value, being stationary, changes at O(ε²).
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import replace
from fractions import Fraction
from math import factorial
from typing import Any

from multiscale.algebra.derivation import Derivation
from multiscale.algebra.ring import Exponents, Ring
from multiscale.computed import Computation
from multiscale.tower import Tower

__all__ = ["CONVENTIONS", "obstacle", "rebuilt", "to_fundamental", "to_peak"]

CONVENTIONS = ("fundamental", "peak")
Series = list[Any]
"""Ring elements, index = power of ε."""


def obstacle(computation: Computation) -> str:
    """Why a motion of this problem has no peak that depends on its amplitude alone, "" if it has one."""
    canonical, tower = computation.canonical, computation.hierarchy.tower
    if computation.modes != 1:
        return f"the problem has {computation.modes} modes, and an extremum depends on the phases between them"
    if len(tower.jets[0][0]) != 1:
        return f"the problem has {len(tower.jets[0][0])} unknowns, each with an extremum of its own"
    if moving := [d.frequency for d in canonical.drives if d.frequency != 0]:
        return f"the problem has a drive of frequency {moving[0]}, and an extremum depends on the phase to it"
    if canonical.slow:
        return "the problem has parameters that vary slowly, and the peak would vary with them"
    # Names with "@" are the library's own: a coefficient that contains one is no constant.
    inner = {s.name for _, meaning in canonical.meanings for s in meaning.free_symbols if s.name.startswith("@")}
    if inner or len(tower.ring.spec.pairs) != 1 or any(d.real_images for d in tower.time[1:]):
        return "its coefficients depend on the amplitude otherwise than by powers"
    return ""


def to_peak(computation: Computation) -> Computation:
    """From the amplitude of the fundamental to half the distance from peak to peak."""
    return _changed(computation, _peak_factor(computation.hierarchy.tower))


def to_fundamental(computation: Computation) -> Computation:
    """From any amplitude of this kind to that of the fundamental."""
    return _changed(computation, _fundamental_factor(computation.hierarchy.tower))


def rebuilt(computation: Computation, fields: Sequence[Sequence[Any]], changes: Sequence[Sequence[Any]]) -> Computation:
    """The computation with other U_1 … U_N (`fields`, by unknown) and other D_1A … D_NA (`changes`, by mode)."""
    hierarchy = computation.hierarchy
    tower = hierarchy.tower
    names = [pair[0] for pair in computation.canonical.spec.pairs]
    new = Tower.start(tower.ring, tower.time[0], tower.jets[0][0])
    for field, change in zip(fields, changes, strict=True):
        known = hierarchy.clock.at_level(new.height)
        slow = Derivation(dict(zip(names, change, strict=False)))
        new = new.completed(new.pending(known), known, tuple(field), slow)
    return replace(computation, hierarchy=replace(hierarchy, tower=new))


def _changed(computation: Computation, factor: Series) -> Computation:
    tower = computation.hierarchy.tower
    ring, levels = tower.ring, len(factor)
    z = ring.generators[ring.spec.first_pair]
    inverse = _inverse(ring, factor)
    changes: Series = [ring.zero]
    for n in range(1, levels):
        change = ring.zero
        for k in range(1, n + 1):
            change = change + tower.time[k](ring, z * factor[n - k])
        changes.append(ring.normal(change))
    fields = _substituted(ring, tower.component((0, 0)), inverse)
    changes = _substituted(ring, changes, inverse)
    return rebuilt(computation, [(u,) for u in fields[1:]], [(d,) for d in changes[1:]])


def _product(ring: Ring, x: Series, y: Series) -> Series:
    result = []
    for n in range(len(x)):
        total = ring.zero
        for k in range(n + 1):
            if x[k] and y[n - k]:
                total = total + x[k] * y[n - k]
        result.append(ring.normal(total))
    return result


class _Degree(dict[Exponents, int]):
    """Total degree of the monomial z^p z̄^q."""

    def __missing__(self, exponents: Exponents) -> int:
        self[exponents] = sum(map(int, exponents))
        return self[exponents]


def _substituted(ring: Ring, series: Series, factor: Series) -> Series:
    """Σ εⁿ x_n at z → z·factor, sorted by power of ε: a monomial of total degree d takes the factor to the d."""
    degrees = _Degree()
    powers = [[ring.one, *(ring.zero for _ in factor[1:])]]
    result = [ring.zero for _ in series]
    for n, x in enumerate(series):
        for d, part in ring.split(x, ring.spec.pair_indices, degrees).items():
            while len(powers) <= d:
                powers.append(_product(ring, powers[-1], factor))
            for m in range(len(series) - n):
                if powers[d][m]:
                    result[n + m] = result[n + m] + part * powers[d][m]
    return [ring.normal(x) for x in result]


def _inverse(ring: Ring, factor: Series) -> Series:
    """S with S(σ) C(σ S(σ)²) = 1, one power of ε after the other."""
    found: Series = [ring.one, *(ring.zero for _ in factor[1:])]
    for n in range(1, len(factor)):
        found[n] = ring.normal(-_product(ring, found, _substituted(ring, factor, found))[n])
    return found


def _with_exponents(ring: Ring, x: Any, change: Any, scale: Fraction = Fraction(1)) -> Any:
    """x with the exponents (p, q) of z and z̄ replaced by change(p, q), None dropping the term."""
    first, terms = ring.spec.first_pair, dict[Exponents, Fraction]()
    for m, c in ring.terms(x):
        new = change(int(m[first]), int(m[first + 1]))
        if new is not None:
            key = (*m[:first], *new, *m[first + 2 :])
            terms[key] = terms.get(key, Fraction(0)) + c * scale
    return ring.from_terms({m: c for m, c in terms.items() if c})


def _fundamental_factor(tower: Tower) -> Series:
    return [
        _with_exponents(tower.ring, u, lambda p, q: (q, q) if p == q + 1 else None) for u in tower.component((0, 0))
    ]


def _peak_factor(tower: Tower) -> Series:
    """C of the peak; polynomials in r are written in the generator z."""
    ring = tower.ring
    slopes = _slopes_at_zero(tower)
    size = len(slopes[0])
    angle: Series = [ring.zero] * size
    for n in range(1, size):
        # [εⁿ] of the slope at the angle so far; the second derivative at leading order is −2r.
        rest = _at_angle(ring, slopes[1:], angle)[n]
        angle[n] = _with_exponents(ring, rest, lambda p, _: (p - 1, 0), Fraction(1, 2))
    extremum = _at_angle(ring, slopes, angle)
    halved = Fraction(1, 2)
    return [_with_exponents(ring, x, lambda p, _: (p // 2, p // 2) if p % 2 else None, halved) for x in extremum]


def _slopes_at_zero(tower: Tower) -> list[Series]:
    """d^m/dθ^m of Σ εⁿU_n at θ = 0, z = r e^{iθ}, for m = 0 … N + 1: a monomial z^p z̄^q contributes (i(p − q))^m."""
    ring, fields = tower.ring, tower.component((0, 0))
    by_turn = [ring.split(u, ring.spec.pair_indices, _Turn()) for u in fields]
    result = []
    for m in range(len(fields) + 1):
        power = ring.one
        for _ in range(m % 4):
            power = power * ring.generators[0]
        series = []
        for parts in by_turn:
            total = ring.zero
            for turn, part in parts.items():
                if turn or not m:
                    total = total + power * ring.constant(turn**m) * part
            series.append(_with_exponents(ring, ring.normal(total), lambda p, q: (p + q, 0)))
        result.append(series)
    return result


class _Turn(dict[Exponents, int]):
    """How often the monomial z^p z̄^q turns with the phase."""

    def __missing__(self, exponents: Exponents) -> int:
        self[exponents] = int(exponents[0]) - int(exponents[1])
        return self[exponents]


def _at_angle(ring: Ring, slopes: Sequence[Series], angle: Series) -> Series:
    """Σ_m slopes[m] angle^m/m!, the angle being O(ε)."""
    result = list(slopes[0])
    power: Series = [ring.one, *(ring.zero for _ in angle[1:])]
    for m in range(1, min(len(slopes), len(angle))):
        power = _product(ring, power, angle)
        if not any(power):
            break
        share = ring.constant(Fraction(1, factorial(m)))
        result = [x + share * y for x, y in zip(result, _product(ring, slopes[m], power), strict=True)]
    return [ring.normal(x) for x in result]
