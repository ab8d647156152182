"""The recursion for a periodic orbit alone, on any `Waves`.

With θ = ωt, u = (a_0/2) Y(θ), ω = ω_0 w(ε) and δ = √d d/dθ the equation u'' + ω_0² u = f reads

    Y + (w²/d) δ²Y = F(Y, w δY, w² δ²Y; ε),        Y = (e^{iθ} + e^{−iθ}) h(ε) + harmonics k ≠ 1

so that h = a/a_0. At level n, with W = w², W_0 = w_0 = h_0 = 1,

    k ≠ 1:          (1 − k²) Y_n = F_n − d^{−1} δ² Σ_{m≥1} W_m Y_{n−m}
    k = 1, cosine:  W_n = −F_n − Σ_{0<m<n} W_m h_{n−m}
    k = 1, sine:    0 = F_n,  which fixes h_{n−p} when the orbit is isolated, p being the first level that has damping

F_n depends on h_{n−p} through the constant factor D_p'(a_0) alone.

*Truncation.* A term ε^p of degree D in Y raises the highest harmonic by D − 1. With g = max (D − 1)/p, level n reaches
1 + gn, and only harmonics up to 1 + g(N − n) can act on the fundamental at level N: the others are not computed,
except at the levels whose shape is asked for. For a product of D factors the bound is 2 − D + g(N − n).
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, field
from fractions import Fraction
from typing import Any

from multiscale.errors import ProblemError
from multiscale.response.orbits.field_products import FieldProducts, Key, Part
from multiscale.response.orbits.waves import Waves

__all__ = ["Force", "Monomial", "Orbit", "periodic_orbit", "response_rate"]


@dataclass(frozen=True)
class Monomial:
    """coefficient · ε^power · Π δ^j Y over `jets` (sorted) · w^{sum of jets}."""

    power: int
    jets: tuple[int, ...]
    coefficient: Any


Force = Sequence[Monomial]


@dataclass(frozen=True)
class Orbit:
    """w, h and Y by powers of ε; Y whole at levels up to `shape` and in its low harmonics beyond."""

    frequency: list[Any]
    amplitude: list[Any]
    fields: list[Any]
    shape: int


@dataclass
class _Recursion:
    waves: Waves
    force: Force
    order: int
    shape: int
    over: int
    lag: int
    square: list[Any] = field(default_factory=list)
    frequency: list[Any] = field(default_factory=list)
    powers: dict[int, list[Any]] = field(default_factory=dict)
    amplitude: list[Any] = field(default_factory=list)
    sums: dict[Key, list[Any]] = field(default_factory=dict)

    def __post_init__(self) -> None:
        waves = self.waves
        self.growth = max((Fraction(len(t.jets) - 1, t.power) for t in self.force), default=Fraction(0))
        self.growth = max(self.growth, Fraction(0))
        self.one, self.null = waves.scalar(1), waves.scalar(0)
        self.bend = waves.scalar(Fraction(-1, self.over))
        self.half = waves.scalar(Fraction(1, 2))
        self.square, self.frequency, self.amplitude = [self.one], [self.one], [self.one]
        self.powers = {q: [self.one] for q in range(2, 1 + max((sum(t.jets) for t in self.force), default=0))}
        self._file()
        self.products = FieldProducts(waves, self.filed, self.limit, self.order, self.lag)

    def _file(self) -> None:
        """Terms linear in u' and otherwise in u alone are derivatives: u^i u' = (u^{i+1})'/(i + 1)."""
        self.filed: dict[Key, list[Part]] = {}
        for term in self.force:
            jets, outer = self._factors(term)
            c = self.waves.scalar(term.coefficient)
            if outer:
                c = c * self.waves.scalar(Fraction(1, len(jets)))
            self.filed.setdefault((sum(term.jets), outer), []).append((term.power, jets, c))
        self.sums = {key: [] for key in self.filed}

    @staticmethod
    def _factors(term: Monomial) -> tuple[tuple[int, ...], bool]:
        if sum(term.jets) == 1:
            return (0,) * len(term.jets), True
        return term.jets, False

    def limit(self, level: int, degree: int = 1) -> int:
        """The highest harmonic wanted of a product of `degree` fields at a level; −1 for none."""
        above, below = self.growth.numerator, self.growth.denominator
        whole = degree + above * level // below
        reach = 2 - degree + above * (self.order - level) // below
        return whole if level <= self.shape else max(-1, min(whole, reach))

    def shorten(self, levels: int) -> None:
        """Forget everything from a level on."""
        self.products.shorten(levels)
        for known in (self.square, self.frequency, self.amplitude, *self.powers.values(), *self.sums.values()):
            del known[levels:]

    def shift(self, level: int, change: Any) -> None:
        """Add change·Y_0 to the field at a level that is the last one."""
        self.amplitude[level] = self.amplitude[level] + change
        self.products.shift(level, change)

    def _powers_to(self, count: int) -> None:
        for q, series in self.powers.items():
            below = self.frequency if q == 2 else self.powers[q - 1]
            while len(series) < count:
                n = len(series)
                series.append(self.waves.tidy(sum((below[i] * self.frequency[n - i] for i in range(n + 1)), self.null)))

    def forcing(self, level: int) -> Any:
        """F at a level, from the fields below it."""
        self._powers_to(level)
        limit = self.limit(level)
        parts = []
        for key, sums in self.sums.items():
            q, outer = key
            while len(sums) <= level:
                sums.append(self.products.sum(key, len(sums)))
            weights = [self.one] if q == 0 else self.frequency if q == 1 else self.powers[q]
            terms = [(w, sums[level - m]) for m, w in enumerate(weights[:level]) if not self.waves.is_null(w)]
            part = self.waves.combination(terms, limit)
            parts.append((self.one, self.waves.derivative(part) if outer else part))
        return self.waves.combination(parts, limit)

    def response(self, power: int) -> Any:
        """The change of F at level m + power by a unit change of h_m, when `power` is the lowest power of ε."""
        parts = []
        for (_, outer), terms in self.filed.items():
            lowest = [(c * self.waves.scalar(len(jets)), jets) for p, jets, c in terms if p == power]
            own = [(c, self.products.of_early(jets)[0]) for c, jets in lowest]
            part = self.waves.combination(own, 1 + int(self.growth * power))
            parts.append((self.one, self.waves.derivative(part) if outer else part))
        return self.waves.combination(parts, 1 + int(self.growth * power))

    def again(self, m: int, n: int, change: Any) -> None:
        """Add to h_m and take the levels m + 1 … n − 1 once more."""
        self.shorten(m + 1)
        self.shift(m, change)
        for level in range(m + 1, n):
            self.advance(level, self.forcing(level))

    def refresh(self, level: int) -> None:
        """Forget the sums from a level on."""
        for sums in self.sums.values():
            del sums[level:]

    def advance(self, level: int, forcing: Any) -> None:
        """W, w, h = 0 and the harmonics of a level from F there."""
        rest = sum((self.square[m] * self.amplitude[level - m] for m in range(1, level)), self.null)
        own = self.waves.tidy(-self.waves.first(forcing)[0] - rest)
        self.square.append(own)
        root = sum((self.frequency[m] * self.frequency[level - m] for m in range(1, level)), self.null)
        self.frequency.append(self.waves.tidy((own - root) * self.half))
        self.amplitude.append(self.null)
        limit = self.limit(level)
        # At level 0 there is the fundamental alone, which `solved` drops.
        fields = self.products.fields
        terms = [(w, fields[level - m]) for m, w in enumerate(self.square[:level]) if m and not self.waves.is_null(w)]
        bent = self.waves.combination(terms, limit)
        turned = self.waves.derivative(self.waves.derivative(bent))
        right = self.waves.combination([(self.one, forcing), (self.bend, turned)], limit)
        self.products.extend(self.waves.solved(right))


def periodic_orbit(
    waves: Waves, force: Force, order: int, *, square: int = 1, damping: int | None = None, shape: int = 0
) -> Orbit:
    """The orbit through ε^order: `square` is d, `damping` the level p of an isolated orbit, None with free amplitude.

    Isolated, the last p coefficients of the amplitude are not determined and left out; the coefficients of the
    frequency from ε^{order−p+2} on may depend on them and are then not the right ones.
    """
    work = _Recursion(waves, force, order, shape, square, max(1, damping or 0))
    isolated = damping is not None and damping < order
    # Where no term acts below level p, h_{n−p} changes F_n directly; else the levels between are taken once more.
    direct = work.response(damping) if damping is not None and damping == min(t.power for t in force) else None
    rate = None if direct is None else waves.first(direct)[1]
    for n in range(1, order + 1):
        forcing = work.forcing(n)
        sine = waves.first(forcing)[1]
        if not isolated or damping is None or n <= damping:
            if not waves.vanishes(sine):
                raise ProblemError(
                    f"the motion of this amplitude is not periodic: order {n} changes its amplitude. Leave out "
                    "`amplitude` for a limit cycle, or remove the damping"
                )
        else:
            m = n - damping
            if rate is None:
                rate = _rate(work, m, n, sine)
            if not waves.is_null(sine):
                change = -waves.quotient(sine, rate)
                if direct is not None and damping == 1:
                    work.shift(m, change)
                    work.refresh(n)
                    forcing = waves.combination([(work.one, forcing), (change, direct)], work.limit(n))
                else:
                    work.again(m, n, change)
                    forcing = work.forcing(n)
        work.advance(n, forcing)
    return Orbit(work.frequency, work.amplitude[: order + 1 - (damping or 0)], work.products.fields, shape)


def response_rate(waves: Waves, force: Force, level: int, square: int = 1) -> Any:
    """∂(sine of F_n)/∂h_{n−p}, p = `level` being the lowest power of ε: what an isolated orbit is divided by."""
    work = _Recursion(waves, force, level, 0, square, 1)
    return waves.first(work.response(level))[1]


def _rate(work: _Recursion, m: int, n: int, sine: Any) -> Any:
    """The same where lower powers are present: by a unit change of h_m, which is taken back."""
    work.again(m, n, work.one)
    changed = work.waves.first(work.forcing(n))[1]
    work.again(m, n, -work.one)
    return changed - sine
