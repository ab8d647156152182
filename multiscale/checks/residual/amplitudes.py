"""What a residual cannot see: which amplitude A is.

A part of U_n, n ≥ 1, at the natural frequency of a mode redefines the amplitude and is invisible in the residual when
n = N. So the convention is looked at by itself, at a tiny ε, in the waves exp(i …) of the published fields.

    fundamental   the waves at the rate of a mode are, in the coordinate of the mode, A e^{iω T_0} in U_0 and absent in
                  U_1 … U_N
    peak          for A = a/2, half the distance between the extrema of Σ εⁿ U_n over a turn is a + O(ε^{N+1})
"""

from __future__ import annotations

from collections.abc import Sequence
from itertools import pairwise
from typing import Any

import sympy as sp

from multiscale.checks.residual.claim import Claim
from multiscale.checks.residual.evaluation import Evaluation, Value
from multiscale.checks.residual.jets import Jet
from multiscale.checks.residual.motion import Instant

__all__ = ["kernel_terms", "peak_exponent"]


def kernel_terms(claim: Claim, instant: Instant, rounding: Value) -> list[tuple[int, int]]:
    """(level, mode) of every field that departs from the convention "fundamental"."""
    here = instant.published(claim, instant.start, 2)
    rates = {wave: _rate(wave, here) for level in claim.fields for x in level for wave in _waves(x, claim)}
    found = []
    for j, start in enumerate(instant.start):
        own = _own_wave(claim, instant, j, rates)
        if own is None:
            found.append((0, j))
            continue
        coordinate, wave = own
        leading = start * _plain(here(wave))
        for n, level in enumerate(claim.fields):
            part = _at_rate(level[coordinate], rates[wave], claim, instant, rates)
            if abs(part - (leading if n == 0 else 0)) > rounding * (1 + abs(leading)):
                found.append((n, j))
    return found


def _at_rate(x: sp.Expr, rate: Value, claim: Claim, instant: Instant, rates: dict[sp.Expr, Value]) -> Value:
    """The part of a field that turns at a rate; waves that hardly turn at all are coefficients."""
    near = abs(instant.small) ** 0.5
    own = {w for w in _waves(x, claim) if abs(rates[w] - rate) < near}
    slow = {w for w in _waves(x, claim) if abs(rates[w]) < near}
    return _with_waves(x, claim, instant, own | slow) - _with_waves(x, claim, instant, slow - own)


def _waves(x: sp.Expr, claim: Claim) -> list[sp.Expr]:
    return sorted((w for w in x.atoms(sp.exp) if w.free_symbols & set(claim.times)), key=str)


def _rate(wave: sp.Expr, here: Evaluation) -> Value:
    """The logarithmic derivative of a wave in time."""
    angle = here(wave.args[0])
    return angle.coefficients[1] if isinstance(angle, Jet) else 0


def _plain(x: Value) -> Value:
    return x.coefficients[0] if isinstance(x, Jet) else x


def _with_waves(
    x: sp.Expr, claim: Claim, instant: Instant, kept: set[sp.Expr], known: dict[sp.Basic, Value] | None = None
) -> Value:
    """The value of a field in which all waves but some are zero."""
    absent: dict[sp.Basic, Value] = {w: 0 for w in _waves(x, claim) if w not in kept}
    return _plain(instant.published(claim, instant.start, 1, absent | (known or {}))(x))


def _own_wave(claim: Claim, instant: Instant, j: int, rates: dict[sp.Expr, Value]) -> tuple[int, sp.Expr] | None:
    """(unknown, wave) such that U_0 of that unknown has the term 1 · A_j · wave; the j-th unknown before others."""
    # A and its conjugate are independent here, and all but A_j are zero.
    nothing: dict[sp.Basic, Value] = dict.fromkeys([*claim.amplitudes, *map(sp.conjugate, claim.amplitudes)], 0)
    one = nothing | {claim.amplitudes[j]: 1}
    here = instant.published(claim, instant.start, 1)
    for k in sorted(range(len(claim.fields[0])), key=lambda k: k != j):
        x = claim.fields[0][k]
        for wave in sorted(_waves(x, claim), key=lambda w: (rates[w].imag <= 0, str(w))):
            parts = [_with_waves(x, claim, instant, {wave}, known) for known in (one, nothing)]
            if abs(parts[0] - parts[1] - _plain(here(wave))) < abs(instant.small):
                return k, wave
    return None


def peak_exponent(claim: Claim, instants: Sequence[Instant], rounding: Value) -> float:
    """Order in ε of the difference between the peak and 2|A|, for one oscillator."""
    errors = [abs(_half_range(claim, x) - 2 * abs(x.start[0])) for x in instants]
    slopes = []
    for (a, b), (x, y) in zip(pairwise(errors), pairwise(instants), strict=True):
        context = x.context
        slopes.append(float("inf") if b < rounding else float(context.log(a / b) / context.log(x.small / y.small)))
    return min(slopes)


def _half_range(claim: Claim, instant: Instant) -> Value:
    """½ (max − min) of Σ εⁿ U_n over the angle of A, by Newton's method from the extrema of the leading wave."""
    context, size = instant.context, abs(instant.start[0])
    here = instant.published(claim, instant.start, 1)
    [[first], *_] = claim.fields
    lead = next(w for w in _waves(first, claim) if _rate(w, instant.published(claim, instant.start, 2)).imag > 0)
    phase = context.arg(_plain(here(lead)))
    extrema = []
    for angle in (-phase, context.pi - phase):
        for _ in range(6):
            turn = Jet((0 * angle, context.mpf(1), context.mpf(0))) * context.mpc(0, 1)
            amplitude = Jet([size * c for c in turn.composed(_exponential(context, angle)).coefficients])
            there = instant.published(claim, [amplitude], 1, {t: instant.time for t in claim.times})
            field = instant.summed(there, [level[0] for level in claim.fields], 0)
            value, slope, bend = (c.real for c in field.coefficients)
            angle = angle - slope / (2 * bend)
        extrema.append(value)
    return (extrema[0] - extrema[1]) / 2


def _exponential(context: Any, angle: Value) -> list[Value]:
    start = context.exp(context.mpc(0, angle))
    return [start, start, start / 2]
