"""Limit cycles of one undriven mode from its expansion: amplitude and frequency as series in ε, and stability.

With ρ = a²/4 the slow flow is a'/a = Σ εⁿ R_n(ρ) and the frequency ω_0 + Σ εⁿ T_n(ρ) (`leading`). A simple positive
root ρ_0 of the first non-vanishing R_p is the beginning of one series ρ = ρ_0 + ερ_1 + … with

    R_p'(ρ_0) ρ_j = −[ε^j] Σ_n ε^{n−p} R_n(ρ_0 + … + ε^{j−1}ρ_{j−1}),      j = 1 … N − p

and a perturbation of the amplitude goes as exp(λt), λ = ε^p 2ρ_0 R_p'(ρ_0) + …
"""

from __future__ import annotations

from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass
from typing import Any

import sympy as sp

from multiscale.algebra.quotient import Quotient
from multiscale.errors import EvaluationError, ProblemError, UnsupportedTermError
from multiscale.expansion import Expansion
from multiscale.expressions import Writer
from multiscale.problem.reading import given_expression
from multiscale.response.orbits.leading import check_single, parts
from multiscale.response.orbits.numeric_cycles import numeric_cycles

__all__ = ["LimitCycle", "limit_cycles", "positive_roots"]

Polynomial = dict[int, sp.Expr]
DIGITS = 30
"""Digits of leading roots that have no closed form."""


@dataclass(frozen=True)
class LimitCycle:
    """An isolated periodic orbit.

    Attributes
    ----------
    amplitude : Expr
        Amplitude of the fundamental (or the peak, if the expansion is written in it) as a series in ε, through
        ε^{N−p}, p being the first level with damping (1 as a rule) and N the order of the expansion.
    frequency : Expr
        Angular frequency as a series in ε, through ε^N when p = 1.
    stable : bool or None
        From the sign of `exponent` for small positive ε; None where assumptions on the symbols do not decide it.
    exponent : Expr
        λ, leading term: a perturbation of the amplitude goes as exp(λt).
    """

    amplitude: sp.Expr
    frequency: sp.Expr
    stable: bool | None
    exponent: sp.Expr


def limit_cycles(expansion: Expansion, parameters: Mapping[Any, Any] | None = None) -> tuple[LimitCycle, ...]:
    """All limit cycles of one undriven mode whose amplitude tends to a simple positive root as ε → 0.

    With forces that are not polynomial: at first order, as numbers, those that the scan of `equilibria` finds.

    Parameters
    ----------
    expansion : Expansion
        Of one undriven mode; the other unknowns may be slaved to it.
    parameters : mapping, optional
        Values of parameters by Symbol or name; the others stay symbols. Exact values give exact series where the
        leading roots have a closed form.

    Returns
    -------
    tuple of LimitCycle
        By increasing leading amplitude where that is decided; empty where the amplitude changes monotonically. Symbolic
        roots are listed unless they are known not to be positive, and hold where they are.

    Raises
    ------
    ProblemError
        No level has damping (every motion is periodic: use `Expansion.frequency`), or a leading root is repeated.
    UnsupportedTermError
        Several modes, or drives; symbolic parameters with a leading condition of degree above two in a², or with a
        force that is not polynomial, which also needs order 1.
    EvaluationError
        A name that is no parameter.

    Examples
    --------
    >>> import sympy as sp, multiscale as ms
    >>> t = sp.Symbol("t", real=True)
    >>> eps, beta = sp.symbols("epsilon beta", positive=True)
    >>> u = sp.Function("u")(t)
    >>> problem = ms.Problem(u.diff(t, 2) + u + eps*(beta*u**2 - 1)*u.diff(t), u, small=eps)
    >>> (cycle,) = ms.limit_cycles(ms.expand(problem, order=2))
    >>> cycle.amplitude, cycle.frequency, cycle.stable
    (2/sqrt(beta), 1 - epsilon**2/16, True)
    """
    if not isinstance(expansion, Expansion):
        raise ProblemError(f"limit_cycles was given a {type(expansion).__name__}: pass the result of multiscale.expand")
    computation, problem = expansion.computation, expansion.problem
    check_single(computation.canonical, "limit cycles are given", coupled=True, laws=True)
    values = _values(parameters, problem.parameters, problem.small)
    if computation.canonical.numeric:
        return tuple(LimitCycle(*cycle) for cycle in numeric_cycles(expansion, values))
    write = _written(Writer(dict(computation.canonical.meanings)), values)
    levels = [parts(computation, n) for n in range(1, expansion.order + 1)]
    rates = [{m: write(q) for m, q in real.items()} for real, _ in levels]
    rates = [{m: c for m, c in rate.items() if c != 0} for rate in rates]
    turns = [{m: write(q) for m, q in turn.items()} for _, turn in levels]
    first = next((k for k, rate in enumerate(rates) if rate), None)
    if first is None:
        raise ProblemError(
            f"no level up to order {expansion.order} changes the amplitude: every motion is periodic, its frequency "
            "is expansion.frequency(). For a weaker damping expand to a higher order"
        )
    natural = sp.S(problem.natural_frequencies[0]).subs(values)
    roots = positive_roots(rates[first], problem.small)
    return tuple(_cycle(rates[first:], turns, natural, root, first + 1, problem.small) for root in roots)


def _values(
    parameters: Mapping[Any, Any] | None, known: Sequence[sp.Symbol], small: sp.Symbol
) -> dict[sp.Symbol, sp.Expr]:
    named = {s.name: s for s in known}
    values = {}
    for key, value in (parameters or {}).items():
        symbol = named.get(str(key))
        if symbol is None or (isinstance(key, sp.Symbol) and key != symbol):
            hint = f"the result is a series in {small}: substitute its value there" if str(key) == small.name else ""
            raise EvaluationError(
                f"{key!r} is no parameter of the problem: expected {', '.join(named) or 'none'}"
                + (hint and f"; {hint}")
            )
        expression = given_expression(value)
        if expression is None:
            raise EvaluationError(f"{key} = {value!r}: expected a number or a SymPy expression")
        values[symbol] = expression
    return values


def _written(writer: Writer, values: Mapping[sp.Symbol, sp.Expr]) -> Callable[[Quotient], sp.Expr]:
    def write(q: Quotient) -> sp.Expr:
        x = writer.quotient(q)
        return sp.cancel(x.subs(values)) if values else x

    return write


def positive_roots(rate: Polynomial, small: sp.Symbol) -> list[sp.Expr]:
    """The positive roots ρ of Σ c_m ρ^m, all simple."""
    rho = sp.Symbol("rho", positive=True)
    lowest = min(rate)
    polynomial = sp.Poly({(m - lowest,): c for m, c in rate.items()}, rho)
    if polynomial.degree() == 0:
        return []
    symbols = polynomial.free_symbols_in_domain
    if symbols and polynomial.degree() > 2:
        raise UnsupportedTermError(
            f"the leading amplitude solves {polynomial.as_expr()} = 0 with rho = a**2/4, which has no closed form: "
            f"give `parameters` values for {', '.join(sorted(map(str, symbols)))}"
        )
    if polynomial.discriminant() == 0:
        repeated = sp.gcd(polynomial, polynomial.diff())
        if symbols or sp.Poly(repeated, rho).count_roots(0, None):
            raise ProblemError(
                f"the leading amplitude is a repeated root of {polynomial.as_expr()} = 0 with rho = a**2/4: two cycles "
                f"meet there and their amplitudes are not power series in {small}. Change a parameter, or give the "
                "term that separates them a lower power"
            )
    if symbols:
        found = [r for r in sp.roots(polynomial) if not r.is_nonpositive and r.is_real is not False]
        return sorted(found, key=sp.default_sort_key)
    exact = all(c.is_Rational for c in polynomial.all_coeffs())
    if exact and polynomial.degree() <= 2:
        return sorted((r for r in sp.roots(polynomial) if r.is_positive), key=lambda r: sp.N(r))
    if exact:
        return [r if r.is_Rational else r.evalf(DIGITS) for r in sp.Poly(polynomial, rho).real_roots() if r.is_positive]
    tiny = sp.Float(10) ** (5 - DIGITS // 2)
    found = [r for r in polynomial.nroots(n=DIGITS, maxsteps=500) if abs(sp.im(r)) <= tiny * abs(r)]
    return sorted(r for r in map(sp.re, found) if r > 0)


def _reduced(x: sp.Expr) -> sp.Expr:
    """One form for coefficients: reduced fraction, roots out of denominators, signs of symbols decided."""
    if x.is_number and not x.atoms(sp.Float):
        return sp.radsimp(sp.expand(x))
    return sp.cancel(sp.radsimp(sp.together(x))) if x.atoms(sp.Pow) else x


def _along(levels: Sequence[Polynomial], root: Sequence[sp.Expr], order: int) -> sp.Expr:
    """[ε^order] Σ_n εⁿ levels_n(Σ ε^j root_j)."""
    total = sp.Integer(0)
    powers: list[list[sp.Expr]] = [[sp.Integer(1)] + [sp.Integer(0)] * order]
    padded = [*root, *[sp.Integer(0)] * (order + 1)][: order + 1]
    for m in range(max((m for level in levels for m in level), default=0)):
        below = powers[m]
        powers.append([_reduced(sp.Add(*(below[i] * padded[j - i] for i in range(j + 1)))) for j in range(order + 1)])
    for n, level in enumerate(levels[: order + 1]):
        total += sp.Add(*(c * powers[m][order - n] for m, c in level.items()))
    return _reduced(total)


def _cycle(
    rates: Sequence[Polynomial], turns: Sequence[Polynomial], natural: sp.Expr, start: sp.Expr, p: int, small: sp.Symbol
) -> LimitCycle:
    slope = _reduced(sp.Add(*(m * c * start ** (m - 1) for m, c in rates[0].items() if m)))
    rho = [start]
    for j in range(1, len(rates)):
        rho.append(_reduced(-_along(rates, rho, j) / slope))
    # √(ρ/ρ_0) = 1 + s_1 ε + …
    share = [_reduced(x / start) for x in rho]
    root: list[sp.Expr] = [sp.Integer(1)]
    for j in range(1, len(share)):
        root.append(_reduced((share[j] - sp.Add(*(root[i] * root[j - i] for i in range(1, j)))) / 2))
    leading = sp.sqrt(4 * start)
    amplitude = sp.Add(*(_reduced(leading * s) * small**j for j, s in enumerate(root)))
    # An unknown coefficient of ρ at ε^{N−p+1} first acts where a T_q depends on ρ.
    sensitive = next((q for q, turn in enumerate(turns, start=1) if any(turn)), len(turns))
    known = min(len(turns), len(turns) - p + sensitive)
    frequency = natural + sp.Add(*(_along([{}, *turns], rho, j) * small**j for j in range(1, known + 1)))
    exponent = _reduced(2 * start * slope)
    stable = True if exponent.is_negative else False if exponent.is_positive else None
    return LimitCycle(amplitude, frequency, stable, exponent * small**p)
