"""Reduction of a Hill equation to the two harmonics at which a tongue begins.

With ν_k = (n + 2k)Ω/2, p = p_0 + s and D_k = K − ν_k²M at ε⁰, the motion u = z^n + (other harmonics), where
z = exp(iΩt/2), is determined order by order by the equation at every ν_k but ±ν_0. What the equation leaves there is

    d(s, ε) at ν_0,   o(s, ε) at −ν_0;      motions of period 4π/Ω exist where |d|² − |o|² = 0

(Lyapunov and Schmidt; the reduced matrix is [[d, ō], [o, d̄]], because the equation is real). For n = 0 the two
harmonics are one, and the condition is d = 0. A term ε^a s^b has weight a + b; weights up to N settle the curve to ε^N.
"""

from __future__ import annotations

from collections import defaultdict
from dataclasses import dataclass
from fractions import Fraction
from math import comb
from typing import Any

from multiscale.algebra.quotient import reduced
from multiscale.algebra.reciprocals import inverse, missing
from multiscale.algebra.ring import IMAGINARY, Ring
from multiscale.errors import ProblemError
from multiscale.response.tongues.hill import Hill

__all__ = ["Reduced", "carried", "dividing", "is_zero", "reduced_equation"]

Table = dict[tuple[int, int], Any]
"""Ring elements by (power of ε, power of s)."""


@dataclass(frozen=True)
class Reduced:
    """The reduced equation: p_0, and d/ε, o/ε at s = εσ as power series in ε of polynomials in σ.

    ``diagonal[j][b]`` is the coefficient of ε^j σ^b; b runs to j + 1 at most.
    """

    ring: Ring
    start: Any
    diagonal: list[list[Any]]
    coupling: list[list[Any]]


def is_zero(ring: Ring, x: Any) -> bool:
    """Whether a real element vanishes, which its reduced form decides."""
    return not x or not reduced(ring, ring.normal(x))


def dividing(ring: Ring, divisors: list[Any]) -> Ring:
    """The ring, extended where need be by the reciprocals for `divisors`."""
    more = missing(ring, divisors)
    return ring.extended(more) if more else ring


def carried(ring: Ring, x: Any, larger: Ring) -> Any:
    """x of `ring` in the ring that `dividing` made of it."""
    return x if larger is ring else larger.lift(x)


def reduced_equation(hill: Hill, tongue: int, weight: int) -> Reduced:
    """The reduced equation of tongue `tongue`, exact to `weight`."""
    reach = max(abs(k) for _, _, k in hill.terms) * weight
    harmonics = range(-reach - tongue, reach + 1)
    ring, slope, numerator, cross = _leading(hill, tongue, harmonics)
    start = ring.normal(-numerator * inverse(ring, slope))
    resolvent = {k: ring.normal(-slope * inverse(ring, x)) for k, x in cross.items() if k not in (0, -tongue)}
    operator = _Operator(ring, hill, tongue, start)
    diagonal, coupling = _eliminated(operator, resolvent, weight)
    return Reduced(ring, start, _by_level(ring, diagonal, weight), _by_level(ring, coupling, weight))


def _leading(hill: Hill, tongue: int, harmonics: range) -> tuple[Ring, Any, Any, dict[int, Any]]:
    """A ring with the reciprocals needed, and of D_k = A_k + pB_k: B_0, A_0, and A_kB_0 − A_0B_k for every k."""
    ring = hill.ring
    zero = (ring.zero,) * 3

    def stiffness(b: int, k: int) -> Any:
        spring, _, mass = hill.terms.get((0, b, 0), zero)
        return ring.normal(spring - _square(ring, hill, tongue + 2 * k) * mass)

    slope, numerator = stiffness(1, 0), stiffness(0, 0)
    if is_zero(ring, slope):
        raise ProblemError(
            f"at the frequency of tongue {tongue} the leading order does not depend on {hill.parameter}, so that it "
            "cannot be solved for it. Choose a parameter of the stiffness"
        )
    cross = {k: ring.normal(stiffness(0, k) * slope - numerator * stiffness(1, k)) for k in harmonics}
    for k, x in cross.items():
        if k not in (0, -tongue) and is_zero(ring, x):
            raise ProblemError(
                f"where tongue {tongue} begins, the harmonic {abs(tongue + 2 * k)}/2 of the drive is resonant as well: "
                f"stiffness and mass vanish together there. Choose another parameter than {hill.parameter}"
            )
    larger = dividing(ring, [slope, *(x for k, x in cross.items() if k not in (0, -tongue))])
    slope, numerator = carried(ring, slope, larger), carried(ring, numerator, larger)
    return larger, slope, numerator, {k: carried(ring, x, larger) for k, x in cross.items()}


def _square(ring: Ring, hill: Hill, multiple: int) -> Any:
    """The square of a multiple of Ω/2."""
    return ring.normal(hill.frequency * hill.frequency * ring.constant(Fraction(multiple**2, 4)))


class _Operator:
    """The equation beyond D_k, in powers of ε and s = p − p_0, acting on harmonics of Ω/2."""

    def __init__(self, ring: Ring, hill: Hill, tongue: int, start: Any) -> None:
        self.ring, self.tongue = ring, tongue
        self._rate = carried(hill.ring, hill.frequency, ring)
        highest = max(b for _, b, _ in hill.terms)
        powers = [ring.one]
        for _ in range(highest):
            powers.append(ring.normal(powers[-1] * start))
        shifted: dict[tuple[int, int, int], list[Any]] = defaultdict(lambda: [ring.zero] * 3)
        for (a, b, k), parts in hill.terms.items():
            lifted = [carried(hill.ring, x, ring) for x in parts]
            for c in range(b + 1):
                factor = powers[b - c] * ring.constant(comb(b, c))
                target = shifted[a, c, k]
                shifted[a, c, k] = [ring.normal(x + factor * y) for x, y in zip(target, lifted, strict=True)]
        self.terms = {key: parts for key, parts in shifted.items() if key[:2] != (0, 0)}
        self._symbols: dict[tuple[int, int, int, int], Any] = {}

    def symbol(self, a: int, b: int, q: int, k: int) -> Any:
        """The factor by which the term (a, b, q) multiplies the harmonic ν_k: K + iν_kC − ν_k²M."""
        key = (a, b, q, k)
        if key not in self._symbols:
            ring, (spring, damping, mass) = self.ring, self.terms[a, b, q]
            rate = self._rate * ring.constant(Fraction(self.tongue + 2 * k, 2))
            derivative = ring.generators[ring.spec.index[IMAGINARY]] * rate
            self._symbols[key] = ring.normal(spring + derivative * damping - rate * rate * mass)
        return self._symbols[key]


def _eliminated(operator: _Operator, resolvent: dict[int, Any], weight: int) -> tuple[Table, Table]:
    """d and o by (power of ε, power of s), the other harmonics being eliminated weight by weight."""
    ring, n = operator.ring, operator.tongue
    reach = max(abs(q) for _, _, q in operator.terms)
    fields: dict[tuple[int, int], dict[int, Any]] = {(0, 0): {0: ring.one}}
    diagonal: Table = {}
    coupling: Table = {}
    for total in range(1, weight + 1):
        for a in range(total + 1):
            image: dict[int, Any] = defaultdict(lambda: ring.zero)
            for a1, b1, q in operator.terms:
                for k, x in fields.get((a - a1, total - a - b1), {}).items():
                    if factor := operator.symbol(a1, b1, q, k):
                        image[k + q] = image[k + q] + factor * x
            image = {k: y for k, x in image.items() if (y := ring.normal(x))}
            diagonal[a, total - a] = image.pop(0, ring.zero)
            coupling[a, total - a] = image.pop(-n, ring.zero)
            left = reach * (weight - total)
            fields[a, total - a] = {
                # Harmonics that cannot come back within the weight left do not matter.
                k: ring.normal(resolvent[k] * x)
                for k, x in image.items()
                if abs(k) <= left or abs(k + n) <= left
            }
    return diagonal, coupling


def _by_level(ring: Ring, table: Table, weight: int) -> list[list[Any]]:
    return [[table.get((j + 1 - b, b), ring.zero) for b in range(j + 2)] for j in range(weight)]
