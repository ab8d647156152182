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
from multiscale.checks.residual.evaluation import Value
from multiscale.checks.residual.jets import Jet
from multiscale.checks.residual.motion import Instant, leading

__all__ = ["kernel_terms", "peak_exponent"]


Departure = tuple[int, int, int | None]
"""(level, mode, unknown); no unknown where the leading fields do not show the mode at all."""


def kernel_terms(claim: Claim, instant: Instant, rounding: Value, phase_alone: bool = False) -> list[Departure]:
    """Where fields have a part at the rate of a mode that should not be there.

    The coordinate of a mode is an unknown whose leading field has the amplitude with the factor 1. Where several have,
    any of them may keep the convention; a kernel vector shows in all of them, and anything else leaves a residual.
    With `phase_alone` parts in phase with the amplitude may be there, as for other amplitudes than the fundamental.
    """
    waves = _Waves(claim, instant)
    found: list[Departure] = []
    for j, start in enumerate(instant.start):
        choices: list[list[Departure]] = [
            [(n, j, k) for n in _levels_with_kernel(claim, waves, k, wave, start, rounding, phase_alone)]
            for k, wave in waves.own(j)
        ]
        found += sorted(choices, key=len)[0] if choices else [(0, j, None)]
    return found


def _levels_with_kernel(
    claim: Claim, waves: _Waves, unknown: int, wave: sp.Expr, amplitude: Value, rounding: Value, phase_alone: bool
) -> list[int]:
    """The levels whose part at the rate of a wave is not as agreed."""
    whole, rate, found = amplitude * waves.value(wave), waves.rates[wave], []
    for n, level in enumerate(claim.fields):
        # The two halves are conjugate in a real field, and no residual sees the second of them either.
        there, back = (waves.at_rate(level[unknown], sign * rate) for sign in (1, -1))
        if n == 0:
            excess = abs(there - whole) + abs(back - whole.conjugate())
        elif phase_alone:
            excess = abs((there / whole).imag) + abs(back - there.conjugate())
        else:
            excess = abs(there) + abs(back)
        if excess > rounding * (waves.size + abs(whole)):
            found.append(n)
    return found


class _Waves:
    """The factors exp(…t…) of the fields with their rates, the logarithmic derivatives in time."""

    def __init__(self, claim: Claim, instant: Instant) -> None:
        self._claim, self._instant = claim, instant
        times = set(claim.times)
        self._of = {x: {w for w in x.atoms(sp.exp) if times & w.free_symbols} for level in claim.fields for x in level}
        here = instant.published(claim, instant.start, 2)
        self.rates = {w: _rate(here(w.args[0])) for waves in self._of.values() for w in waves}
        self.size = instant.size
        # Detuned waves are as near as ε, harmonics as far as the slowest frequency, in whatever unit of time.
        here = instant.published(claim, instant.start, 1)
        slowest = min((abs(leading(here(x))) for x in claim.frequencies), default=1)
        self._near = min(abs(instant.small) ** 0.5 * max(1, slowest), slowest / 4)

    def value(self, x: sp.Expr, known: dict[sp.Basic, Value] | None = None) -> Value:
        return leading(self._instant.published(self._claim, self._instant.start, 1, known)(x))

    def with_waves(self, x: sp.Expr, kept: set[sp.Expr], known: dict[sp.Basic, Value] | None = None) -> Value:
        """The value of a field in which all waves but some are zero."""
        return self.value(x, dict.fromkeys(self._of[x] - kept, 0) | (known or {}))

    def _near_rate(self, x: sp.Expr, rate: Value) -> set[sp.Expr]:
        return {w for w in self._of[x] if abs(self.rates[w] - rate) < self._near}

    def at_rate(self, x: sp.Expr, rate: Value) -> Value:
        """The part of a field that turns at a rate; waves that hardly turn at all are coefficients."""
        own, slow = self._near_rate(x, rate), self._near_rate(x, 0)
        return self.with_waves(x, own | slow) - self.with_waves(x, slow - own)

    def own(self, j: int) -> list[tuple[int, sp.Expr]]:
        """(unknown, wave) such that U_0 of that unknown has the term 1 · A_j · wave."""
        # A and its conjugate are independent here, and all but A_j are zero.
        amplitudes = self._claim.amplitudes
        nothing: dict[sp.Basic, Value] = dict.fromkeys([*amplitudes, *map(sp.conjugate, amplitudes)], 0)
        one = nothing | {amplitudes[j]: 1}
        found = []
        for k, field in enumerate(self._claim.fields[0]):
            slow = self._near_rate(field, 0)
            for wave in sorted(self._of[field] - slow, key=str):
                kept = slow | {wave}
                share = self.with_waves(field, kept, one) - self.with_waves(field, kept, nothing)
                if abs(share - self.value(wave)) < abs(self._instant.small):
                    found.append((k, wave))
        return found

    def turning(self, x: sp.Expr) -> sp.Expr:
        """A wave of a field that turns forward."""
        return min((w for w in self._of[x] if self.rates[w].imag > self._near), key=str)


def _rate(angle: Value) -> Value:
    return angle.coefficients[1] if isinstance(angle, Jet) else 0


def peak_exponent(claim: Claim, instants: Sequence[Instant], rounding: Value) -> float:
    """Order in ε of the difference between the peak and 2|A|, for one oscillator."""
    errors = [abs(_half_range(claim, x) - 2 * abs(x.start[0])) for x in instants]
    slopes = []
    for (a, b), (x, y) in zip(pairwise(errors), pairwise(instants), strict=True):
        context = x.context
        slopes.append(
            float("inf") if b < rounding * y.size else float(context.log(a / b) / context.log(x.small / y.small))
        )
    return min(slopes)


def _half_range(claim: Claim, instant: Instant) -> Value:
    """½ (max − min) of Σ εⁿ U_n over the angle of A, by Newton's method from the extrema of the leading wave."""
    context, size = instant.context, abs(instant.start[0])
    waves = _Waves(claim, instant)
    phase = context.arg(waves.value(waves.turning(claim.fields[0][0])))
    extrema = []
    for angle in (-phase, context.pi - phase):
        for _ in range(6):
            turn = Jet((0 * angle, context.mpf(1), context.mpf(0))) * context.mpc(0, 1)
            amplitude = Jet([size * c for c in turn.composed(_exponential(context, angle)).coefficients])
            there = instant.published(claim, [amplitude], 1, dict.fromkeys(claim.times, instant.time))
            field = instant.summed(there, [level[0] for level in claim.fields], 0)
            value, slope, bend = (c.real for c in field.coefficients)
            angle = angle - slope / (2 * bend)
        extrema.append(value)
    return (extrema[0] - extrema[1]) / 2


def _exponential(context: Any, angle: Value) -> list[Value]:
    start = context.exp(context.mpc(0, angle))
    return [start, start, start / 2]
