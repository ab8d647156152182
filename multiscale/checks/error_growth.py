"""The error that an expansion makes over a horizon, expected from what it leaves over in the equations of motion.

The expansion, put into the equations, leaves an acceleration ρ(t). A mode answers to it like a linear oscillator,

    e'' + ω²e = ρ,      ρ = ρ̂e^{iΦ} + conjugate + rest:      |e| ≤ ∫_0^T |ρ̂|/ω dt + 2 max |w|,      w'' + ω²w = rest,

Φ being the fast angle of the mode: the resonant part grows with time, the rest does not (twice, because the error is
zero at first). The maximum over the modes, relative to the size of the motion, is the *promise*. Roughly

    promise = horizon × relative residual × ω/2.

It holds for motions that are neutrally stable or stable; it leaves out that an error of amplitude changes the
frequency, which over horizons of 1/ε is a factor near one.
"""

from __future__ import annotations

from typing import Any

import numpy as np
import numpy.typing as npt

from multiscale.checks.motion import Motion
from multiscale.checks.slow_path import slow_path

__all__ = ["promise_at"]

Array = npt.NDArray[Any]


def promise_at(motion: Motion, states: Array, horizon: float) -> tuple[Array, Array]:
    """(promise, residual relative to the restoring term) of slow states (2·modes, S) at time 0, each of shape (S,).

    inf where nothing can be promised.
    """
    times, path = slow_path(motion, states, horizon)
    fast = motion.fast_times
    shape = (*path.shape[1:], len(fast))
    t = np.broadcast_to(times[:, None, None] + fast, shape)
    y = np.broadcast_to(path[..., None], (len(path), *shape))
    with np.errstate(all="ignore"):
        left, u = motion.residual(t, y)
        size = abs(u).max(axis=(0, 1, 3))
        resonant, rest = _answer(motion, left, t)
        growth = resonant.max(axis=0)
        mean = growth[0] if len(times) == 1 else _trapezoidal(growth)
        promise = (horizon * mean + 2 * rest.max(axis=(0, 1))) / size
        restoring = motion.frequencies[:, None, None, None] ** 2
        relative = (abs(left) / restoring).max(axis=(0, 1, 3)) / size
    bad = ~(np.isfinite(promise) & np.isfinite(relative))
    return np.where(bad, np.inf, promise), np.where(bad, np.inf, relative)


def _trapezoidal(values: Array) -> Array:
    """The mean over evenly spaced nodes."""
    return np.asarray((values[0] / 2 + values[1:-1].sum(axis=0) + values[-1] / 2) / (len(values) - 1))


def _answer(motion: Motion, left: Array, t: Array) -> tuple[Array, Array]:
    """(|ρ̂|/ω, max |w|) of ρ sampled over the last axis, each (modes,) + the axes between."""
    own = motion.frequencies[:, None, None, None]
    turning = motion.turning[:, None, None, None]
    if motion.periodic:
        count, step = left.shape[-1], motion.fast_times[1]
        rates = 2 * np.pi * np.fft.rfftfreq(count, step)
        spectrum = np.fft.rfft(left, axis=-1)
        tuned = abs(rates - abs(turning)) < rates[1] / 2
        resonant = abs(np.where(tuned, spectrum, 0)).max(axis=-1) / count
        response = np.where(tuned, 0, spectrum / np.where(tuned, 1, own**2 - rates**2))
        rest = abs(np.fft.irfft(response, n=count, axis=-1)).max(axis=-1)
    else:
        # Without a period there is no spectrum: a weighted mean for the resonance, a bound for the rest.
        weights = np.hanning(left.shape[-1])
        turned = left * np.exp(-1j * turning * motion.fast_times)
        resonant = abs(np.average(turned, axis=-1, weights=weights))
        rest = abs(left).max(axis=-1) / own[..., 0] ** 2
    return resonant / own[..., 0], rest
