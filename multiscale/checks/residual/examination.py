"""A statement at random points and tiny values of ε, before which claims are brought.

    observed exponent = log(R(ε_1)/R(ε_2)) / log(ε_1/ε_2),      ε = 10^-20, 10^-21

At such ε an exponent is a whole number to many digits, so one wrong coefficient, however small, shows as a whole
number less; were it so small as to mix with the next power, the exponent would not be whole, which no right result
shows. The arithmetic has digits enough for a residual two orders smaller than promised to be told from zero.

Claims that contain floats are right to about 16 digits of U_1 and D_1A: there ε^N stays above 10^-13, exponents are
read less sharply, and a residual below ε·10^-15 counts as zero. Where the leading order itself holds floats, as modes
without a closed form do, that is one power of ε less: ε^{N+1} stays above 10^-13, and 10^-14 counts as zero.
At such ε the sizes of numbers matter: amplitudes are drawn where the corrections are as large as the leading motion.
"""

from __future__ import annotations

from collections.abc import Sequence
from math import inf, isfinite, isinf
from random import Random
from typing import Any

import mpmath
import sympy as sp

from multiscale.checks.residual.amplitudes import kernel_terms, peak_exponent
from multiscale.checks.residual.claim import Claim
from multiscale.checks.residual.draws import Draw, draw_values, with_functions
from multiscale.checks.residual.motion import Instant, leading
from multiscale.checks.residual.statement import Statement
from multiscale.errors import EvaluationError

__all__ = ["Examination"]

POWER = 20
LEAST_DIVISOR = 0.1
DRAWS = 300
USABLE = 20
"""So many draws are tried, and among so many usable ones that with the largest divisors is taken."""
DOUBLINGS = 100
"""How far amplitudes are moved from 1 either way, by powers of two."""


class Examination:
    """`claim` is the one for which points are chosen: there its frequencies are positive and its divisors not small.

    Other claims may then be brought too; those with the same slow flow share the work.
    """

    def __init__(self, statement: Statement, claim: Claim, seed: int = 0, points: int = 2) -> None:
        rng = Random(seed)
        self.statement, self.claim = with_functions(statement, claim, rng)
        self.rounded = rounded = any(x.has(sp.Float) for level in (*claim.fields, *claim.flow) for x in level)
        self.digits = 16 if rounded else POWER * (claim.order + 3) + 30
        self.tolerance = 0.3 if rounded else 0.01
        self._context: Any = mpmath.MPContext()
        self._context.dps = max(self.digits, 40) + 15
        ten = self._context.mpf(10)
        # The power of ε at which floats first stand.
        first = int(not any(x.has(sp.Float) for x in (*claim.fields[0], *claim.frequencies)))
        last, step = (min(POWER + 1, 13 / (claim.order + 1 - first)), 0.5) if rounded else (POWER + 1, 1)
        self.small = (ten ** (step - last), ten**-last)
        self._zero = (ten**-15 * self.small[1] if first else ten**-14) if rounded else ten**-self.digits
        drawn = (self._drawn(rng) for _ in range(points))
        self.draws = tuple(self._in_range(x) if rounded else x for x in drawn)
        self._instants = [self._pair(draw) for draw in self.draws]

    def _pair(self, draw: Draw) -> tuple[Instant, Instant]:
        shared: dict[Any, Any] = {}
        coarse, fine = (Instant(self._context, self.statement, draw, small, shared) for small in self.small)
        return coarse, fine

    def _drawn(self, rng: Random) -> Draw:
        """The first draw with positive frequencies and without small divisors, or the best of many."""
        found: list[tuple[float, Draw]] = []
        for attempt in range(DRAWS):
            # Frequencies without an assumption need to be positive, so that both signs alike may never do.
            draw = draw_values(self.statement, self.claim, rng, negative=0.5 if attempt < DRAWS // 6 else 0.15)
            distance = self._least_divisor(draw)
            if distance is not None:
                found.append((distance, draw))
            if found and (found[-1][0] > LEAST_DIVISOR or len(found) == USABLE):
                break
        if not found:
            raise EvaluationError(
                f"no values of {', '.join(map(str, self.statement.parameters))} were found at which the natural "
                "frequencies are positive and every term is finite: give the symbols the assumptions they need, such "
                "as positive=True"
            )
        return max(found, key=lambda x: x[0])[1]

    def _in_range(self, draw: Draw) -> Draw:
        """The largest amplitudes, by powers of two, at which no correction exceeds the leading motion."""
        rising = self._is_moderate(draw)
        for k in range(DOUBLINGS):
            after = draw.scaled(sp.Integer(2) ** (k + 1 if rising else -k - 1))
            if self._is_moderate(after) is not rising:
                return draw.scaled(sp.Integer(2) ** k) if rising else after
        return draw

    def _is_moderate(self, draw: Draw) -> bool:
        """Whether |U_n| ≤ |U_0| and |D_nA| ≤ ω|A| for all n."""
        coarse, _ = self._pair(draw)
        here, rate = coarse.published(self.claim, coarse.start, 1), coarse.rate(self.claim)

        def largest(level: Sequence[sp.Expr]) -> Any:
            return max(abs(leading(here(x))) for x in level)

        fields = [largest(level) for level in self.claim.fields]
        changes = [largest(level) for level in self.claim.flow]
        return bool(max(fields) <= fields[0] and max(changes) <= rate * max(map(abs, coarse.start)))

    def _least_divisor(self, draw: Draw) -> float | None:
        """The smallest divisor in size, None where the draw cannot be used."""
        coarse, _ = self._pair(draw)
        here = coarse.published(self.claim, coarse.start, 1)
        try:
            positive = [s for s, _ in self.statement.relations if s.is_positive] + list(self.claim.frequencies)
            signs = [leading(here(x)) for x in positive]
            if any(x.imag != 0 or x.real <= 0 for x in signs):
                return None
            divisors = [abs(leading(here(x))) for x in self.claim.divisors]
            sizes = [*divisors, *coarse.residuals(self.claim.beginning)]
        except EvaluationError:
            raise
        except (ArithmeticError, ValueError):
            # A pole, or a function outside its domain.
            return None
        return float(min(divisors, default=inf)) if all(map(isfinite, sizes)) else None

    def exponents(self, claim: Claim) -> tuple[float, ...]:
        """Observed power of ε in the residual of each equation, at its worst point; inf for a residual of zero."""
        log, found = self._context.log, []
        ratio = log(self.small[0] / self.small[1])
        for coarse, fine in self._instants:
            pairs = zip(coarse.residuals(claim), fine.residuals(claim), strict=True)
            found.append([inf if b < self._zero else float(log(a / b) / ratio) for a, b in pairs])
        return tuple(min(column, key=lambda x: (self.whole(x), x)) for column in zip(*found, strict=True))

    def whole(self, exponent: float) -> bool:
        """Whether an exponent is a whole number, as far as this can be asked for."""
        return self.rounded or isinf(exponent) or abs(exponent - round(exponent)) <= self.tolerance

    def stands(self, claim: Claim) -> bool:
        """Whether the residual of a claim has the order promised."""
        least = claim.order + 1 - self.tolerance
        return all(self.whole(x) and x >= least for x in self.exponents(claim))

    def departures(self, claim: Claim) -> tuple[str, ...]:
        """Where a claim departs from its amplitude convention, in words."""
        coarse, fine = self._instants[0]
        rounding = self._context.mpf(10) ** (4 - self.digits)
        peak, found = claim.amplitude == "peak", []
        for n, j, k in kernel_terms(claim, fine, rounding, phase_alone=peak):
            if k is None:
                text = f"no leading field has {claim.amplitudes[j]} times exp(i omega t)"
            elif n == 0:
                text = f"the leading field of {self.statement.unknowns[k]} has another fundamental than its amplitude"
            elif peak:
                text = f"the field of {self.statement.unknowns[k]} has a part that turns the phase of its amplitude"
            else:
                text = f"the field of {self.statement.unknowns[k]} has a part at its natural frequency"
            found.append(f"level {n}: {text}")
        if peak and not found:
            exponent = peak_exponent(claim, (coarse, fine), self._zero)
            if exponent < claim.order + 1 - self.tolerance:
                found.append(
                    f"half the peak-to-peak value differs from the amplitude at the power {exponent:.3g} of the small "
                    f"parameter, expected at least {claim.order + 1}"
                )
        return tuple(found)
