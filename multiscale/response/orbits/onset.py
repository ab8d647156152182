"""Onset of oscillation: a pair of roots crosses the imaginary axis as a parameter μ varies, and a cycle branches off.

One mode is carried, its amplitude obeys a'/a = Σ εⁿ R_n(ρ, μ), ρ = a²/4. Where the first R_p that does not vanish has
the form σμ + lρ (+ terms in more of either), the cycle is

    R_p(ρ, μ_0) = 0,     ∂R_p/∂μ · μ_j = −[ε^{p+j}] Σ_n εⁿ R_n(ρ, μ_0 + … + ε^{j−1}μ_{j−1})

μ as a series in its amplitude. The cycle exists on the side where the equilibrium has lost its stability, and is
stable itself, if l < 0 (supercritical); else it surrounds the stable equilibrium and is unstable (subcritical).
"""

from __future__ import annotations

from dataclasses import dataclass

import sympy as sp

from multiscale.errors import EvaluationError, MultiscaleError, ProblemError, UnsupportedTermError
from multiscale.expansion import Expansion
from multiscale.response.orbits.leading import check_single, parts

__all__ = ["Onset", "onset"]


@dataclass(frozen=True)
class Onset:
    """The cycle that branches off at the onset of oscillation.

    Attributes
    ----------
    parameter : Expr
        The parameter at which the cycle has the amplitude a of the fundamental, a series in ε.
    frequency : Expr
        Its angular frequency as a function of a, along the branch.
    crossing : Expr
        σ in a' = σμa + (l/4)a³ + …: how fast the growth rate changes with the parameter, with its power of ε.
    coefficient : Expr
        l/4 in the same equation, with its power of ε.
    supercritical : bool or None
        Whether `coefficient` is negative; None where assumptions on the symbols do not decide it.
    """

    parameter: sp.Expr
    frequency: sp.Expr
    crossing: sp.Expr
    coefficient: sp.Expr
    supercritical: bool | None


def onset(expansion: Expansion, parameter: sp.Symbol) -> Onset:
    """Criticality, parameter and frequency of the cycle born where one mode neither grows nor decays.

    Parameters
    ----------
    expansion : Expansion
        Of one undriven mode, about the parameter value where its pair of roots is imaginary.
    parameter : Symbol
        The deviation of the parameter from that value, with its power of ε (or order): of the size of a², as a rule.

    Raises
    ------
    ProblemError
        The amplitude does not depend on the parameter, or not on itself, at the first level that changes it.
    UnsupportedTermError
        Several modes, or drives.

    Examples
    --------
    >>> import sympy as sp, multiscale as ms
    >>> t, mu = sp.symbols("t mu", real=True)
    >>> x, y = sp.Function("x")(t), sp.Function("y")(t)
    >>> equations = [x.diff(t) - mu*x + y + x**3, y.diff(t) - x]
    >>> cycle = ms.onset(ms.expand(ms.Problem(equations, [x, y], ordering={x: 1, y: 1, mu: 2}), order=2), mu)
    >>> cycle.parameter, cycle.supercritical
    (3*a**2/4, True)
    """
    if not isinstance(expansion, Expansion):
        raise ProblemError(f"onset was given a {type(expansion).__name__}: pass the result of multiscale.expand")
    if expansion.amplitude != "fundamental":
        raise MultiscaleError("onset needs the amplitude of the fundamental: pass the expansion as made")
    problem, computation = expansion.problem, expansion.computation
    if parameter not in problem.parameters:
        known = ", ".join(map(str, problem.parameters)) or "none"
        raise EvaluationError(f"{parameter!r} is no parameter of the problem: expected one of {known}")
    check_single(computation.canonical, "the onset of oscillation is given", coupled=True)
    write, rho = expansion.views.writer.quotient, sp.Symbol("rho", positive=True)
    rates, turns = [], []
    for n in range(1, expansion.order + 1):
        real, imag = parts(computation, n)
        rates.append(sp.expand(sp.Add(*(write(q) * rho**m for m, q in real.items()))))
        turns.append(sp.Add(*(write(q) * rho**m for m, q in imag.items())))
    first = next((k for k, rate in enumerate(rates) if rate != 0), None)
    if first is None:
        raise ProblemError(f"no level up to order {expansion.order} changes the amplitude: expand to a higher order")
    crossing, slope = _slopes(rates[first], rho, parameter)
    series = _series(rates[first:], crossing, rho, parameter, problem.small)
    a, small, p = expansion.symbols.a[0], problem.small, first + 1
    tail = sp.Add(*(small**n * turn for n, turn in enumerate(turns, start=1)))
    turning = _truncated(tail.subs(parameter, series), small, expansion.order)
    fundamental = {rho: a**2 / 4}
    sign = slope.is_negative
    return Onset(
        _tidy(series.subs(fundamental), small),
        problem.natural_frequencies[0] + _tidy(turning.subs(fundamental), small),
        sp.factor(crossing) * small**p,
        sp.factor(slope / 4) * small**p,
        True if sign else False if slope.is_positive else None,
    )


def _slopes(rate: sp.Expr, rho: sp.Symbol, parameter: sp.Symbol) -> tuple[sp.Expr, sp.Expr]:
    """(σ, l) of σμ + lρ; σ must be constant, so that μ follows from ρ by division."""
    crossing = sp.cancel(sp.diff(rate, parameter))
    slope = sp.cancel(sp.diff(rate, rho).subs({rho: 0, parameter: 0}))
    if crossing == 0:
        raise ProblemError(
            f"the amplitude first changes at a level that does not contain {parameter}: give {parameter} a lower power "
            "of the small parameter (the order of the cubic terms), or expand about the value where the roots cross"
        )
    if crossing.free_symbols & {rho, parameter}:
        raise UnsupportedTermError(
            f"{parameter} enters the growth rate {rate} not through one linear term with a constant coefficient: "
            "order it like the square of the amplitude"
        )
    if sp.cancel(rate.subs({rho: 0, parameter: 0})) != 0:
        raise ProblemError(
            f"at {parameter} = 0 small motions have the growth rate {rate.subs({rho: 0, parameter: 0})}, not zero: "
            f"measure {parameter} from the value where the roots cross"
        )
    return crossing, slope


def _series(rates: list[sp.Expr], crossing: sp.Expr, rho: sp.Symbol, parameter: sp.Symbol, small: sp.Symbol) -> sp.Expr:
    """μ_0 + εμ_1 + … in powers of ρ."""
    series = sp.cancel(-(rates[0] - crossing * parameter) / crossing)
    total = sp.Add(*(small**n * rate for n, rate in enumerate(rates)))
    for j in range(1, len(rates)):
        rest = sp.expand(total.subs(parameter, series)).coeff(small, j)
        series = series - small**j * sp.cancel(rest / crossing)
    return sp.expand(series)


def _truncated(x: sp.Expr, small: sp.Symbol, order: int) -> sp.Expr:
    x = sp.expand(x)
    return sp.Add(*(small**n * x.coeff(small, n) for n in range(order + 1)))


def _tidy(x: sp.Expr, small: sp.Symbol) -> sp.Expr:
    x = sp.expand(x)
    top = int(sp.degree(x, small)) if small in x.free_symbols else 0
    return sp.Add(*(small**n * sp.factor(x.coeff(small, n)) for n in range(top + 1)))
