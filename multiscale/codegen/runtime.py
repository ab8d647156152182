"""What generated code calls beside NumPy's own functions: quadrature over a phase, and special functions by it.

Needs NumPy and the standard library alone. The text of a definition travels with exported source (`travelling`), so
everything below the imports is ASCII, at most 88 columns wide, and laid out the same at 88 and at 120 columns.

    circle   ∫_0^{2π} f dθ of a smooth f: trapezoidal rule, nodes doubled (each used once) until two results agree
    arcs     the same for an f with kinks or jumps at known angles: Gauss–Legendre on every arc between them, after the
             change of variable θ' ∝ (1 − x²)², which also tames powers |θ − θ_k|^p, p > −1; nodes doubled likewise
    jump     f just before an angle less f just after it, extrapolated from each side

Accuracy: two results in a row agree to `TOLERANCE` relative to the mean of |f|; the better one is returned. The
trapezoidal rule converges geometrically for analytic f (its error at 2N nodes is about the square of that at N), so the
value returned is then right to rounding. Where rounding in f itself, such as a small difference of large numbers, keeps
the results apart, `NOISE` is enough. Inside an average over another phase, a jump that the motion only just reaches may
stay at `GRAZING`, since its place is known to half the digits; the outer average still has to agree to `TOLERANCE`.
`IntegralError` where the doubling ends without agreement, or f is not finite.
"""

from __future__ import annotations

import math
import threading
from collections.abc import Callable, Sequence
from functools import cache
from typing import Any

import numpy as np

__all__ = ["RUNTIME", "IntegralError"]

TOLERANCE = 1e-13
"""Agreement asked of two averages in a row, relative to the mean of |f|."""
NOISE = 1e-9
"""Agreement that is enough where rounding in f itself prevents more."""
GRAZING = 1e-6
"""The same inside an average over another phase."""
CIRCLE = (32, 16384)
"""Nodes on the circle, from and to."""
ARC = (16, 1024)
"""Nodes on an arc, from and to."""
LARGEST = 1e7
"""Arguments of Bessel functions end here."""
BLOCK = 2**18
"""Values of f held at a time."""

Rule = Callable[[int, Sequence[Any]], tuple[Any, Any]]
"""Integral and mean of |f|, from a number of nodes and the arguments of f."""
Refined = Callable[[tuple[Any, Any], tuple[Any, Any]], tuple[Any, Any]]
"""What a rule at half the nodes and what it adds say together."""


class _Size(threading.local):
    """The largest mean of |f| among the averages of one evaluation.

    An average of averages is measured by it. `depth` counts the averages that stand
    around the one being computed.
    """

    value = 0.0
    depth = 0


_SIZE = _Size()


class IntegralError(ValueError):
    """A phase average that cannot be computed; the text names the force."""


def circle(f: Callable[..., Any], term: str, *args: Any) -> Any:
    """Integral of f(theta, *args) over the circle, f smooth: trapezoidal rule.

    Element by element over the broadcast of args; `term` is how an error calls f.
    """

    def rule(n: int, rows: Sequence[Any]) -> tuple[Any, Any]:
        # Only the nodes that a doubling adds: 2 pi k/n for all k at first, then odd k.
        k = np.arange(n) if n == CIRCLE[0] else np.arange(1, n, 2)
        values = f(2 * math.pi * k / n, *rows) + np.zeros(len(k))
        return values.mean(axis=-1), np.abs(values).mean(axis=-1)

    def refined(old: tuple[Any, Any], new: tuple[Any, Any]) -> tuple[Any, Any]:
        return (old[0] + new[0]) / 2, (old[1] + new[1]) / 2

    return 2 * math.pi * _doubled(rule, refined, CIRCLE, term, args)


def arcs(f: Callable[..., Any], term: str, kinks: Sequence[Any], *args: Any) -> Any:
    """Integral of f(theta, *args) over the circle, f smooth between the angles `kinks`.

    Gauss-Legendre on every arc, after a change of variable that is flat at its ends.
    """
    count = len(kinks)

    def rule(n: int, rows: Sequence[Any]) -> tuple[Any, Any]:
        x, weights = _smoothed_legendre(n)
        angles = np.broadcast_arrays(*(k % (2 * math.pi) for k in rows[:count]))
        ends = np.sort(np.concatenate(angles, axis=-1), axis=-1)
        ends = np.concatenate((ends, ends[..., :1] + 2 * math.pi), axis=-1)
        half = np.diff(ends)[..., None] / 2
        theta = ends[..., :-1, None] + half * (1 + x)
        values = f(theta, *(r[..., None] for r in rows[count:])) * half * weights
        size = np.abs(values).sum(axis=(-2, -1)) / (2 * math.pi)
        return values.sum(axis=(-2, -1)), size

    def refined(old: tuple[Any, Any], new: tuple[Any, Any]) -> tuple[Any, Any]:
        return new

    width = max(count, 1)
    return _doubled(rule, refined, ARC, term, (*kinks, *args), width)


def jump(f: Callable[..., Any], kink: Any, *args: Any) -> Any:
    """f just before an angle less f just after it, by cubic extrapolation.

    From four values on each side; the error is of order 1e-16.
    """
    result = 0.0
    for k, weight in enumerate((4.0, -6.0, 4.0, -1.0), start=1):
        before, after = f(kink - 1e-4 * k, *args), f(kink + 1e-4 * k, *args)
        result = result + weight * (before - after)
    return result


def wave_zero(index: Any, *coefficients: Any) -> Any:
    """One of the 2K angles, rising, at which a wave h can change its sign.

    h = c_0 + sum over k = 1 ... K of (a_k cos kx + b_k sin kx), and `coefficients` are
    c_0, a_1, b_1, a_2, ... The angles are the arguments of the roots of h as a
    polynomial in exp(ix); those of roots off the unit circle are no zeros of h, and
    harmless.
    """
    mean, *waves = np.broadcast_arrays(*(np.asarray(x, dtype=float) for x in coefficients))
    pairs = list(zip(waves[::2], waves[1::2], strict=True))
    above = [(a - 1j * b) / 2 for a, b in pairs]
    rows = np.array([x.conj() for x in above[::-1]] + [mean + 0j, *above])
    size = np.max(np.abs(rows), axis=0)
    usable = np.isfinite(size) & (size > 0)
    rows = np.where(usable, rows / np.where(size > 0, size, 1.0), 1.0)
    # A highest harmonic that vanishes would be a root at infinity: corrected below.
    rows[-1] = np.where(np.abs(rows[-1]) < 1e-8, 1e-8, rows[-1])
    degree = len(rows) - 1
    companion = np.zeros((*rows.shape[1:], degree, degree), dtype=complex)
    companion[..., 0, :] = np.moveaxis(-rows[-2::-1] / rows[-1], 0, -1)
    companion[..., range(1, degree), range(degree - 1)] = 1
    roots = np.linalg.eigvals(companion)
    angle = np.sort(np.angle(roots), axis=-1)[..., int(index)]
    for _ in range(4):
        value, slope = mean, 0.0
        for k, (a, b) in enumerate(pairs, start=1):
            cosine, sine = np.cos(k * angle), np.sin(k * angle)
            value = value + a * cosine + b * sine
            slope = slope + k * (b * cosine - a * sine)
        step = value / np.where(slope == 0, np.inf, slope)
        angle = angle - np.where(np.abs(step) < 0.05, step, 0.0)
    return angle


@cache
def _smoothed_legendre(n: int) -> tuple[Any, Any]:
    """Nodes and weights on -1 ... 1 after x = (15 s - 10 s**3 + 3 s**5)/8."""
    s, w = np.polynomial.legendre.leggauss(n)
    return s * (15 - 10 * s**2 + 3 * s**4) / 8, w * 15 * (1 - s**2) ** 2 / 8


def _doubled(
    rule: Rule,
    refined: Refined,
    limits: tuple[int, int],
    term: str,
    args: Sequence[Any],
    width: int = 1,
) -> Any:
    """The rule with more and more nodes until `TOLERANCE`, in blocks of states."""
    values = [np.asarray(x, dtype=float) for x in args]
    shape = np.broadcast_shapes(*(x.shape for x in values)) if values else ()
    flat = [
        x.reshape(1, 1) if x.size == 1 else np.broadcast_to(x, shape).reshape(-1, 1)
        for x in values  # one row for each state
    ]
    size = math.prod(shape)
    result = np.empty(size)
    step = max(1, BLOCK // (limits[0] * 4 * width))
    for start in range(0, size, step):
        rows = [x if len(x) == 1 else x[start : start + step] for x in flat]
        count = min(step, size - start)
        found = _converged(rule, refined, limits, term, rows, count)
        result[start : start + step] = found
    return result.reshape(shape)[()]


def _converged(
    rule: Rule,
    refined: Refined,
    limits: tuple[int, int],
    term: str,
    rows: list[Any],
    count: int,
) -> Any:
    """The same for one block, which notes the size of what is averaged."""
    result = np.empty(count)
    outer, _SIZE.value = _SIZE.value, 0.0
    _SIZE.depth += 1
    try:
        largest = _refine(rule, refined, limits, term, rows, result)
    finally:
        _SIZE.depth -= 1
    _SIZE.value = max(outer, largest, _SIZE.value)
    return result


def _refine(
    rule: Rule,
    refined: Refined,
    limits: tuple[int, int],
    term: str,
    rows: list[Any],
    result: Any,
) -> float:
    """Fills `result`; returns the largest mean of |f|."""
    waiting, n, count = np.arange(len(result)), limits[0], len(result)
    with np.errstate(all="ignore"):
        first, mean = (np.broadcast_to(x, count) for x in rule(n, rows))
        old = (first, mean)
        largest = float(np.max(mean, initial=0.0))
        size, change = np.zeros(count), np.full(count, np.inf)
        while len(waiting):
            n *= 2
            if n > limits[1]:
                enough = GRAZING if _SIZE.depth > 1 else NOISE
                if (change <= enough * size).all():
                    result[waiting] = old[0]
                    return largest
                raise IntegralError(
                    f"the average of {term} over a cycle does not converge with "
                    f"{limits[1]} nodes: the force has a kink or a jump that is not "
                    "declared, or a singularity within the range of motion. Declare "
                    "kinks with multiscale.ForceLaw(function, kinks=\u2026), or keep "
                    "the amplitude below the singularity"
                )
            new, mean = (np.broadcast_to(x, len(waiting)) for x in rule(n, rows))
            better = refined(old, (new, mean))
            if not np.isfinite(better[0]).all():
                raise IntegralError(
                    f"the force {term} is not finite or not real somewhere on a "
                    "cycle: a singularity, or a root or logarithm of a negative "
                    "number, lies within the range of motion. Keep the amplitude "
                    "below it, or write the force so that it is defined for every "
                    "displacement and velocity that occurs"
                )
            size = np.maximum(better[1], _SIZE.value)
            change = np.abs(better[0] - old[0])
            left = ~(change <= TOLERANCE * size + 1e-300)
            result[waiting[~left]] = better[0][~left]
            waiting, old = waiting[left], (better[0][left], better[1][left])
            size, change = size[left], change[left]
            rows = [x if len(x) == 1 else x[left] for x in rows]
    return largest


def besselj(x: Any, order: int) -> Any:
    """J_n(x), the mean of cos(n tau - x sin tau) (DLMF 10.9.2)."""
    wave = np.sin if order % 2 else np.cos
    return _quarter(wave, wave, x, order)


def besseli(x: Any, order: int) -> Any:
    """I_n(x), the mean of exp(x sin tau) cos(n (tau - pi/2)) (DLMF 10.32.3)."""
    f, wave = (np.sinh, np.sin) if order % 2 else (np.cosh, np.cos)
    sign = (1, 1, -1, -1)[order % 4]
    return sign * _quarter(f, wave, x, order)


def _quarter(f: Callable[..., Any], wave: Callable[..., Any], x: Any, n: int) -> Any:
    """The mean of f(x sin tau) wave(n tau): a quarter of the circle, midpoint nodes.

    The error with N nodes on the circle is about J_{N-n}(x) or I_{N-n}(x), below 1e-17
    of the largest value of f for N = 1.4 |x| + n + 40.
    """
    z = np.asarray(x, dtype=float)
    largest = float(np.max(np.abs(z), initial=0.0))
    if not largest < LARGEST:
        raise IntegralError(
            f"a Bessel function is asked for at {largest:.3g}, that is a force with an "
            f"argument so large on the cycle: keep it below {LARGEST:.0e}"
        )
    count = math.ceil((1.4 * largest + n + 40) / 4)
    tau = math.pi / 2 * (np.arange(count) + 0.5) / count
    flat, sine, weights = z.reshape(-1, 1), np.sin(tau), wave(n * tau) / count
    step = max(1, BLOCK // count)
    starts = range(0, len(flat), step)
    parts = [f(flat[k : k + step] * sine) @ weights for k in starts]
    mean = np.concatenate(parts) if parts else flat[:, 0]
    return mean.reshape(z.shape)[()]


gamma_function = np.vectorize(math.gamma, otypes=[float])


def _digamma(x: float) -> float:
    """psi(x), x > 0: the recurrence psi(x) = psi(x + 1) - 1/x up to 10.

    Then the asymptotic series (DLMF 5.11.2).
    """
    below = 0.0
    while x < 10:
        below, x = below + 1 / x, x + 1
    y = 1 / (x * x)
    tail = y * (1 / 240 - y * (1 / 132 - y * 691 / 32760))
    tail = y * (1 / 12 - y * (1 / 120 - y * (1 / 252 - tail)))
    return math.log(x) - 1 / (2 * x) - tail - below


digamma = np.vectorize(_digamma, otypes=[float])


def inverse_or_zero(x: Any) -> Any:
    """1/x, and 0 at x = 0: a force that is singular at rest counts as zero there."""
    zero = np.equal(x, 0)
    return np.where(zero, 0.0, 1.0 / np.where(zero, 1.0, x))[()]


def reciprocal(x: Any) -> Any:
    """1/x of a number >= 0, and a huge number at x = 0."""
    return 1.0 / np.maximum(x, 1e-300)


def nonzero(x: Any) -> Any:
    """1, and 0 at x = 0."""
    return np.where(np.equal(x, 0), 0.0, 1.0)[()]


def or_one(x: Any) -> Any:
    """x, and 1 at x = 0."""
    return np.where(np.equal(x, 0), 1.0, x)[()]


def clipped(x: Any) -> Any:
    """x cut off to -1 ... 1."""
    return np.minimum(np.maximum(x, -1.0), 1.0)


def within(x: Any) -> Any:
    """1 where |x| < 1, 0 elsewhere: the slope of `clipped`."""
    return np.where(np.abs(x) < 1.0, 1.0, 0.0)[()]


def positive(x: Any) -> Any:
    """Whether x > 0."""
    return np.greater(x, 0)


RUNTIME: dict[str, Callable[..., Any]] = {
    "circle": circle,
    "arcs": arcs,
    "jump": jump,
    "wave_zero": wave_zero,
    "besselj": besselj,
    "besseli": besseli,
    "gamma_function": gamma_function,
    "digamma": digamma,
    "inverse_or_zero": inverse_or_zero,
    "nonzero": nonzero,
    "reciprocal": reciprocal,
    "root": np.sqrt,
    "or_one": or_one,
    "clipped": clipped,
    "within": within,
    "positive": positive,
    "where": np.where,
    "absolute": np.abs,
    "real": np.real,
    "imag": np.imag,
    "sign": np.sign,
    "arcsin": np.arcsin,
    "arccos": np.arccos,
    "arctan": np.arctan,
    "arcsinh": np.arcsinh,
    "tanh": np.tanh,
}
"""By the name that generated source uses."""
