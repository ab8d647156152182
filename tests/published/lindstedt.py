"""Periodic orbits by a Lindstedt series, in exact rational arithmetic on Fourier coefficients.

For u'' + ω_0² u + f = 0 with f polynomial in u, u', u'' and ε the time is strained, θ = ωt,

    u = x_0(θ) + ε x_1(θ) + …,   ω = ω_0 + ε ω_1 + …,   x_0 = a_0 cos θ,

and each level determines ω_n from cos θ and, for an isolated orbit, the amplitude correction a_{n−1} from sin θ.
The fundamental of u is exactly (a_0 + ε a_1 + …) cos θ. A trigonometric polynomial is {(k, j): coefficient of
iʲ e^{ikθ}}, j = 0 or 1, so that all coefficients are rational.
"""

from __future__ import annotations

from collections import defaultdict
from collections.abc import Sequence
from dataclasses import dataclass
from fractions import Fraction

Trig = dict[tuple[int, int], Fraction]
# {(power of ε, power of u, power of u', power of u''): coefficient}
Force = dict[tuple[int, int, int, int], Fraction]


def cosine(k: int, size: Fraction | int = 1) -> Trig:
    return {(0, 0): Fraction(size)} if k == 0 else {(k, 0): Fraction(size) / 2, (-k, 0): Fraction(size) / 2}


def add(*parts: Trig) -> Trig:
    total: dict[tuple[int, int], Fraction] = defaultdict(Fraction)
    for part in parts:
        for m, c in part.items():
            total[m] += c
    return {m: c for m, c in total.items() if c}


def scale(factor: Fraction | int, x: Trig) -> Trig:
    return {m: factor * c for m, c in x.items()}


def times(x: Trig, y: Trig) -> Trig:
    total: dict[tuple[int, int], Fraction] = defaultdict(Fraction)
    for (k, i), v in x.items():
        for (m, j), w in y.items():
            total[k + m, i ^ j] += -v * w if i & j else v * w
    return {m: c for m, c in total.items() if c}


def derivative(x: Trig) -> Trig:
    """d/dθ: multiplication by ik."""
    return {(k, 1 - j): (-k if j else k) * c for (k, j), c in x.items() if k}


def series_product(x: Sequence[Trig], y: Sequence[Trig], count: int) -> list[Trig]:
    """Cauchy product of two series in ε whose coefficients are trigonometric polynomials."""
    return [add(*(times(x[k], y[n - k]) for k in range(n + 1) if x[k] and y[n - k])) for n in range(count)]


@dataclass(frozen=True)
class Orbit:
    """A periodic orbit: series coefficients, index = power of ε."""

    frequency: list[Fraction]
    amplitude: list[Fraction]
    fields: list[Trig]

    def cosines(self, k: int) -> list[Fraction]:
        """Coefficients of cos kθ."""
        return [(2 if k else 1) * x.get((k, 0), Fraction(0)) for x in self.fields]

    def sines(self, k: int) -> list[Fraction]:
        """Coefficients of sin kθ."""
        return [-2 * x.get((k, 1), Fraction(0)) for x in self.fields]


def _residual(n: int, fields: Sequence[Trig], frequency: Sequence[Fraction], square: Fraction, force: Force) -> Trig:
    """[εⁿ] of ω² x_θθ + ω_0² x + f(x, ω x_θ, ω² x_θθ; ε)."""
    w = [cosine(0, c) if c else {} for c in frequency]
    velocity = series_product(w, [derivative(x) for x in fields], n + 1)
    acceleration = series_product(w, [derivative(x) for x in velocity], n + 1)
    parts = [acceleration[n], scale(square, fields[n])]
    for (p, *exponents), c in force.items():
        if p > n:
            continue
        factor = [cosine(0)] + [{}] * n
        for base, exponent in zip((fields, velocity, acceleration), exponents, strict=True):
            for _ in range(exponent):
                factor = series_product(factor, base, n - p + 1)
        parts.append(scale(c, factor[n - p]))
    return add(*parts)


def periodic_orbit(
    force: Force, order: int, *, natural: Fraction | int = 1, amplitude: Fraction | int = 1, isolated: bool = False
) -> Orbit:
    """The orbit to ε^order with a_0 = `amplitude`: isolated, a_1 … a_{order−1} are found; otherwise they are zero."""
    w0, a0 = Fraction(natural), Fraction(amplitude)
    fields: list[Trig] = [cosine(1, a0)]
    frequency = [w0]
    amplitudes = [a0] + [Fraction(0)] * order
    for n in range(1, order + 1):
        fields.append({})
        frequency.append(Fraction(0))
        if isolated and n > 1:
            below = fields[n - 1]
            residues = []
            for trial in (0, 1):
                fields[n - 1] = add(below, cosine(1, trial))
                residues.append(_residual(n, fields, frequency, w0**2, force).get((1, 1), Fraction(0)))
            amplitudes[n - 1] = -residues[0] / (residues[1] - residues[0])
            fields[n - 1] = add(below, cosine(1, amplitudes[n - 1]))
        left = _residual(n, fields, frequency, w0**2, force)
        # ω_n enters through 2 ω_0 ω_n x_0'' alone, that is −ω_0 ω_n a_0 at e^{iθ}.
        frequency[n] = left.pop((1, 0), Fraction(0)) / (w0 * a0)
        left.pop((-1, 0), None)
        assert not any(abs(k) == 1 for k, _ in left), f"no periodic orbit of this amplitude at level {n}"
        fields[n] = {(k, j): -c / (w0**2 * (1 - k * k)) for (k, j), c in left.items()}
    return Orbit(frequency, amplitudes[:order] if isolated else amplitudes, fields)
