"""The error that an expansion makes over a horizon, expected from what it leaves over in the equations of motion.

The expansion, put into the equations, leaves an acceleration ρ(t), of which ρ̂e^{iΦ} + conjugate is resonant with a
mode, Φ being its fast angle. The error of the motion, zero at first, is the sum of a part that grows and one that does
not:

    e = Re(η e^{iΦ}) + w ,       w'' + Ω²w = ρ − (ρ̂e^{iΦ} + conjugate) ,
    η' = (slow flow, linearised along the path) η + ρ̂/(iΩ) ,       η(0) = −w(0) + iw'(0)/Ω ,

Ω the rate at which the mode turns at its amplitude, and η an error of 2A = ae^{iδ}: its part along 2A is one of
amplitude, that across it one of phase. An error of amplitude turns the phase in time by its effect on the frequency,
damping lets errors decay with the motion, and instability lets them grow. The *promise* is the largest of |η| + |w|
over the modes and the time, relative to the size of the motion.

Being linear in the error, it says no more than "large" where it is not small beside one.
"""

from __future__ import annotations

from itertools import pairwise
from typing import Any

import numpy as np
import numpy.typing as npt

from multiscale.checks.motion import Motion
from multiscale.checks.slow_path import SlowPath, phases, slow_path

__all__ = ["promise_at"]

Array = npt.NDArray[Any]


def promise_at(motion: Motion, states: Array, horizon: float) -> tuple[Array, Array]:
    """(promise, residual relative to the restoring term) of slow states (2·modes, S) at time 0, each of shape (S,).

    inf where nothing can be promised.
    """
    path = slow_path(motion, states, horizon)
    looked = slice(0, 1) if path.still else slice(None)
    shape = (*path.states[:, looked].shape[1:], len(motion.fast_times))
    t = np.broadcast_to(path.times[looked, None, None] + motion.fast_times, shape)
    y = np.broadcast_to(path.states[:, looked, :, None], (len(states), *shape))
    with np.errstate(all="ignore"):
        left, u = motion.residual(t, y)
        size = abs(u).max(axis=(0, 1, 3))
        turning = motion.turning[:, None, None]
        # A shift as large as the frequency is none of an expansion that holds.
        actual = turning * np.clip(1 + path.shifts[:, looked] / turning, 0.5, 2)
        resonant, rest, initial = _answer(motion, left, t, actual)
        source = np.broadcast_to(resonant / (1j * actual), (len(rest), *path.states.shape[1:]))
        growing = _propagated(path, source, initial)
        promise = (growing + rest.max(axis=1)).max(axis=0) / size
        restoring = motion.frequencies[:, None, None, None] ** 2
        relative = (abs(left) / restoring).max(axis=(0, 1, 3)) / size
    bad = ~(np.isfinite(promise) & np.isfinite(relative))
    return np.where(bad, np.inf, promise), np.where(bad, np.inf, relative)


def _answer(motion: Motion, left: Array, t: Array, actual: Array) -> tuple[Array, Array, Array]:
    """(ρ̂, max |w|, η(0)) of ρ sampled over the last axis at times `t`, modes turning at `actual` rates.

    Each (modes,) + the axes between, η(0) at the first node. Where the motion has no period, |w| counts twice instead.
    """
    turning = motion.turning[:, None, None, None]
    phase = np.exp(-1j * turning * t)
    if not motion.periodic:
        # There is no spectrum: a weighted mean for the resonance, a bound for the rest.
        weights = np.hanning(left.shape[-1])
        resonant = np.average(left * phase, axis=-1, weights=weights)
        rest = 2 * abs(left).max(axis=-1) / motion.frequencies[:, None, None] ** 2
        return resonant, rest, np.zeros(resonant[:, 0].shape, dtype=complex)
    count, step = left.shape[-1], motion.fast_times[1]
    rates = 2 * np.pi * np.fft.rfftfreq(count, step)
    tuned = abs(rates - abs(turning)) < rates[1] / 2
    # All harmonics turn faster with the motion.
    stretched = (actual / turning[..., 0])[..., None]
    gain = np.where(tuned, 0, 1 / np.where(tuned, 1, turning**2 - rates**2)) / stretched**2
    response = gain * np.fft.rfft(left, axis=-1)
    rest = np.fft.irfft(response, n=count, axis=-1)
    slope = np.fft.irfft(1j * rates * response, n=count, axis=-1) / turning
    return np.mean(left * phase, axis=-1), abs(rest).max(axis=-1), -rest[:, 0, :, 0] + 1j * slope[:, 0, :, 0]


def _propagated(path: SlowPath, source: Array, initial: Array) -> Array:
    """The largest |η| at the nodes, (modes,) + S, from η(0) with sources (modes, NODES) + S.

    Between nodes the source is interpolated relative to the phase of its mode. Steps are pairs of those of the path.
    """
    relative = source / phases(path.states)
    first = initial / phases(path.states[:, 0]) * path.lead(path.pieces[0][:, 0])
    x = np.concatenate([first.real, first.imag])
    largest = abs(first)
    for k, (a, b) in enumerate(pairwise(path.times)):
        piece = path.pieces[k]
        share = np.linspace(0, 1, piece.shape[1])[:, None]
        drive = (relative[:, k, None] * (1 - share) + relative[:, k + 1, None] * share) * path.lead(piece)
        x = _driven(path.tangent(a + (b - a) * share, piece), np.concatenate([drive.real, drive.imag]), b - a, x)
        largest = np.maximum(largest, np.hypot(*np.split(x, 2)))
    return largest


def _driven(tangent: Array, drive: Array, length: float, x: Array) -> Array:
    """x after x' = tangent·x + drive, both given at evenly spaced times along their axis before the last."""
    h = 2 * length / (drive.shape[1] - 1)
    tangent, drive = (np.ascontiguousarray(np.moveaxis(v, -2, 0)) for v in (tangent, drive))

    def slope(k: int, x: Array) -> Array:
        return np.asarray(np.einsum("ijs,js->is", tangent[k], x) + drive[k])

    for k in range(0, len(drive) - 1, 2):
        k1 = slope(k, x)
        k2 = slope(k + 1, x + h / 2 * k1)
        k3 = slope(k + 1, x + h / 2 * k2)
        k4 = slope(k + 2, x + h * k3)
        x = x + h / 6 * (k1 + 2 * k2 + 2 * k3 + k4)
    return x
