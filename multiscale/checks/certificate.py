"""Certificate of an expansion: its residual in the user's own equations is of the order promised.

    u = U_0 + … + εᴺU_N,  dA/dt = εD_1A + … + εᴺD_NA    ⟹    |equations| = O(ε^{N+1})

The published expressions are evaluated in high precision at two tiny values of ε, at random exact parameters and states,
and the exponent is read off: log(R(ε_1)/R(ε_2)) / log(ε_1/ε_2). At such ε an exponent is a whole number to many digits,
so one wrong coefficient, however small, lowers it by a whole number. What the residual cannot see, parts of U_n at the
natural frequency, is held against the amplitude convention. (A residual of order ε^{N+1} is what defines an expansion of
order N; how the error of the motion follows from it is another matter.)
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from math import inf, isfinite
from random import Random
from typing import Any

import sympy as sp

from multiscale.checks.residual.amplitudes import kernel_terms, peak_exponent
from multiscale.checks.residual.claim import Claim, claim_of
from multiscale.checks.residual.draws import Draw, draw_values, with_functions
from multiscale.checks.residual.evaluation import Evaluation
from multiscale.checks.residual.motion import Instant
from multiscale.checks.residual.statement import Statement, stated
from multiscale.errors import EvaluationError
from multiscale.expansion import Expansion

__all__ = ["Certificate", "Examination", "certify"]

TOLERANCE = 0.01
POWER = 10
"""ε is 10^-10 and 10^-11."""
ROUNDED_POWER = 13
"""Results that contain floats are right to about 16 digits; ε^N stays above 10^-13 there."""
LEAST_DIVISOR = 0.05
DRAWS = 60


@dataclass(frozen=True)
class Certificate:
    """What `certify` found.

    Attributes
    ----------
    order : int
        N of the expansion.
    equations : tuple of Expr
        The equations as the user stated them.
    exponents : tuple of float
        For each equation the observed power of ε of its residual, the smallest over all points; ``inf`` where the
        residual vanishes to rounding. Powers common to an equation, as orders of unknowns give them, are divided out.
    departures : tuple of str
        Where the fields depart from the amplitude convention of the expansion; empty when they keep it.
    points : tuple of mappings
        The random values of parameters, amplitudes and time at which the expansion was looked at.
    small : tuple of float
        The values of the small parameter.
    digits : int
        Decimal digits of the arithmetic.
    """

    order: int
    equations: tuple[sp.Expr, ...]
    exponents: tuple[float, ...]
    departures: tuple[str, ...]
    points: tuple[Mapping[sp.Symbol, sp.Expr], ...]
    small: tuple[float, ...]
    digits: int
    tolerance: float = TOLERANCE

    @property
    def expected(self) -> int:
        """N + 1, the least exponent of a residual."""
        return self.order + 1

    @property
    def convention(self) -> bool:
        """Whether the amplitudes are what the expansion says they are."""
        return not self.departures

    @property
    def passed(self) -> bool:
        """Whether every exponent is at least N + 1 and the amplitude convention is kept."""
        return self.convention and all(x >= self.expected - self.tolerance for x in self.exponents)

    def require(self) -> None:
        """Nothing, or `EvaluationError` naming the equation with the observed and the expected exponent.

        That class, because it is a numerical evaluation of the result that did not come out as it must.
        """
        for equation, exponent in zip(self.equations, self.exponents, strict=True):
            if exponent < self.expected - self.tolerance:
                shown = str(equation) if len(str(equation)) < 200 else f"{str(equation)[:190]} …"
                raise EvaluationError(
                    f"the residual of the equation {shown} = 0 falls as the power {exponent:.3g} of the small parameter, "
                    f"expected at least {self.expected} for an expansion of order {self.order}: a term of the slow "
                    "flow or of a field is wrong"
                )
        if self.departures:
            raise EvaluationError("; ".join(self.departures))

    def __repr__(self) -> str:
        verdict = "passed" if self.passed else "failed"
        exponents = ", ".join("exact" if x == inf else f"{x:.4g}" for x in self.exponents)
        return (
            f"Certificate({verdict}: exponents {exponents}, at least {self.expected} expected; "
            f"{len(self.points)} points, {self.digits} digits)"
        )


class Examination:
    """A statement at its random points, before which any claim of the same order can be brought.

    `claim` is the one for which points are chosen: there its frequencies are positive and its divisors not small.
    """

    def __init__(self, statement: Statement, claim: Claim, seed: int = 0, points: int = 2) -> None:
        from mpmath import MPContext

        rng = Random(seed)
        statement, self.claim = with_functions(statement, claim, rng)
        self.statement = statement
        rounded = any(x.has(sp.Float) for level in (*claim.fields, *claim.flow) for x in level)
        power = min(POWER, ROUNDED_POWER / claim.order) if rounded else POWER
        self.tolerance = 0.3 if rounded else TOLERANCE
        self.digits = 16 if rounded else POWER * (claim.order + 3) + 30
        self._context = MPContext()
        self._context.dps = max(self.digits, 40) + 15
        self.rounding = self._context.mpf(10) ** -self.digits
        self.small = tuple(self._context.mpf(10) ** -(power + k) for k in (0, 1))
        self.draws = tuple(self._draw(rng) for _ in range(points))
        fixed: list[dict[Any, Any]] = [{} for _ in self.draws]
        self._instants = [
            [Instant(self._context, statement, draw, small, own) for small in self.small]
            for draw, own in zip(self.draws, fixed, strict=True)
        ]

    def _draw(self, rng: Random) -> Draw:
        """The first draw with positive frequencies and without small divisors, or the best of many."""
        best: tuple[float, Draw] | None = None
        for _ in range(DRAWS):
            draw = draw_values(self.statement, self.claim, rng)
            distance = self._distance(draw)
            if distance is not None and (best is None or distance > best[0]):
                best = distance, draw
            if best is not None and best[0] > LEAST_DIVISOR:
                break
        if best is None:
            raise EvaluationError(
                f"no values of {', '.join(map(str, self.statement.parameters))} were found at which the natural "
                "frequencies are positive and every term is finite: give the symbols the assumptions they need, such "
                "as positive=True"
            )
        return best[1]

    def _distance(self, draw: Draw) -> float | None:
        """The smallest divisor, None where the draw cannot be used."""
        instant = Instant(self._context, self.statement, draw, self.small[0], {})
        here = instant.published(self.claim, instant.start, 1)
        try:
            eliminated = [(here(s), s.is_positive) for s, _ in self.statement.relations]
            frequencies = [(here(x), True) for x in self.claim.frequencies]
            divisors = [abs(_number(here(x))) for x in self.claim.divisors]
            sizes = instant.residuals(self.claim.beginning)
        except (ZeroDivisionError, ValueError, OverflowError) as problem:
            if isinstance(problem, EvaluationError):
                raise
            return None
        for value, positive in (*eliminated, *frequencies):
            x = _number(value)
            if abs(x.imag) > 0 or (positive and x.real <= 0):
                return None
        if not all(isfinite(x) for x in (*divisors, *sizes)):
            return None
        return float(min(divisors, default=inf))

    def exponents(self, claim: Claim) -> tuple[float, ...]:
        """Observed power of ε in the residual of each equation, the smallest over the points."""
        context, found = self._context, []
        ratio = context.log(self.small[0] / self.small[1])
        for coarse, fine in self._instants:
            pairs = zip(coarse.residuals(claim), fine.residuals(claim), strict=True)
            found.append([inf if b < self.rounding else float(context.log(a / b) / ratio) for a, b in pairs])
        return tuple(min(row) for row in zip(*found, strict=True))

    def departures(self, claim: Claim) -> tuple[str, ...]:
        """Where a claim departs from its amplitude convention, in words."""
        coarse, fine = self._instants[0]
        if claim.amplitude == "peak":
            exponent = peak_exponent(claim, (coarse, fine), self.rounding)
            if exponent >= claim.order + 1 - self.tolerance:
                return ()
            return (
                f"half the peak-to-peak value differs from the amplitude at the power {exponent:.3g} of the small "
                f"parameter, expected at least {claim.order + 1}",
            )
        unknowns = self.statement.unknowns
        return tuple(
            f"level {n}: the field of {unknowns[j] if len(unknowns) > j else f'mode {j}'} has a part at its natural "
            "frequency" + (" beside its amplitude" if n == 0 else "") + ", so that A is not the amplitude of its "
            "fundamental"
            for n, j in kernel_terms(claim, fine, self.rounding)
        )

    def certificate(self, claim: Claim, equations: Sequence[sp.Expr]) -> Certificate:
        points = []
        for draw in self.draws:
            amplitudes = {A: x + sp.I * y for A, (x, y) in zip(claim.amplitudes, draw.amplitudes, strict=True)}
            points.append({**draw.values, **amplitudes, self.statement.time: draw.time})
        return Certificate(
            claim.order,
            tuple(equations),
            self.exponents(claim),
            self.departures(claim),
            tuple(points),
            tuple(map(float, self.small)),
            self.digits,
            self.tolerance,
        )


def _number(x: Any) -> Any:
    return getattr(x, "coefficients", (x,))[0]


def certify(expansion: Expansion, *, seed: int = 0) -> Certificate:
    """Check an expansion against the equations as they were stated, by a route that does not go through the engine.

    The published expressions of slow flow and fields are evaluated at random exact parameters and states, in arithmetic
    of many digits, for two tiny values of the small parameter; amplitudes follow the slow flow as Taylor series in time.
    Drives keep their exact phase and detunings are held fixed. Beside the order of the residual the certificate holds
    the amplitude convention: parts of a field at the natural frequency leave no residual at the last level. A function
    of slow time that the equations leave undefined stands for an exponential with random coefficients.

    Where the equations hold floats that enter the result, the result is known to about 16 digits: the small parameter is
    then taken less tiny, the exponents are read with a tolerance of 0.3, and ``digits`` is 16.

    Parameters
    ----------
    expansion : Expansion
    seed : int
        Of the random points; the same seed gives the same certificate.

    Returns
    -------
    Certificate
        ``passed``, ``exponents``, ``points``, ``digits``; ``require()`` raises when it did not pass.

    Raises
    ------
    EvaluationError
        No admissible parameters were found, or an expression has no value in high precision.

    Examples
    --------
    >>> import sympy as sp, multiscale as ms
    >>> t = sp.Symbol("t", real=True)
    >>> eps, mu, f, w, sigma, Omega = sp.symbols("epsilon mu f omega sigma Omega", positive=True)
    >>> u = sp.Function("u")(t)
    >>> equation = u.diff(t, 2) + w**2*u + eps*(2*mu*u.diff(t) + u**3 - f*sp.cos(Omega*t))
    >>> problem = ms.Problem(equation, u, small=eps, resonances={Omega: w + eps*sigma})
    >>> ms.certify(ms.expand(problem, order=2))
    Certificate(passed: exponents 3, at least 3 expected; 2 points, 80 digits)
    """
    claim = claim_of(expansion)
    examination = Examination(stated(expansion.problem), claim, seed)
    return examination.certificate(examination.claim, expansion.problem.equations)
