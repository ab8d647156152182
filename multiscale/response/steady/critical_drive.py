"""The least drive at which a driven mode has more than one steady state: the cusp of its surface of equilibria.

At the first level, dA/dt = κ + (−m + i d)A + (r + i s)A²Ā with the detuning in d alone, equilibria obey, with ρ = |A|²,

    |κ|² = N(ρ) = ρ[(rρ − m)² + y²],     y = d + sρ

and the onset of bistability over d is N' = N'' = 0 (derivatives by ρ at constant d). With M = rρ − m,

    M² + y² + 2ρ(rM + sy) = 0,     2(rM + sy) + ρ(r² + s²) = 0     ⇒     M² + y² = ρ²(r² + s²)

Eliminating y leaves a quadratic in ρ. For r = 0: ρ = 2m/(√3|s|), |κ|² = 8m³/(3√3|s|).

At higher orders the cusp is found by Newton's method from there: G = 0, det J = 0, and det J stationary along the null
vector of J.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any

import numpy as np
import numpy.typing as npt
import sympy as sp

from multiscale.errors import EvaluationError
from multiscale.expansion import Expansion
from multiscale.response.steady.steady_flow import STEP, SteadyFlow

__all__ = ["CriticalDrive", "critical_drive"]

Array = npt.NDArray[Any]


@dataclass(frozen=True)
class CriticalDrive:
    """The onset of bistability: level of the drive, detuning and amplitude, as expressions or as numbers."""

    drive: Any
    detuning: Any
    amplitude: Any


@dataclass(frozen=True)
class _Leading:
    """The leading level of a driven mode and its control parameters."""

    drive: sp.Symbol
    detuning: sp.Symbol
    force: sp.Expr
    linear: tuple[sp.Expr, sp.Expr]
    cubic: tuple[sp.Expr, sp.Expr]


def critical_drive(
    expansion: Expansion,
    parameters: Mapping[Any, Any] | None = None,
    *,
    drive: sp.Symbol | None = None,
    detuning: sp.Symbol | None = None,
) -> CriticalDrive:
    """The onset of bistability of one mode near primary resonance.

    Parameters
    ----------
    expansion : Expansion
    parameters : mapping, optional
        Without it the answer is symbolic, from the leading level of the flow. With a number for every parameter but the
        drive and the detuning it is numeric, from all levels.
    drive, detuning : Symbol, optional
        The two control parameters. By default the symbol to which the constant term of the flow is proportional, and
        the detuning of the declared relation.

    Raises
    ------
    EvaluationError
        The leading level is not that of a cubic oscillator with an external drive, or has no bistability.

    Examples
    --------
    >>> import sympy as sp, multiscale as ms
    >>> t = sp.Symbol("t", real=True)
    >>> eps, mu, f, w0, alpha, Omega = sp.symbols("epsilon mu f omega_0 alpha Omega", positive=True)
    >>> sigma = sp.Symbol("sigma", real=True)
    >>> u = sp.Function("u")(t)
    >>> equation = u.diff(t, 2) + w0**2*u + eps*(2*mu*u.diff(t) + alpha*u**3 - f*sp.cos(Omega*t))
    >>> driven = ms.expand(ms.Problem(equation, u, small=eps, resonances={Omega: w0 + eps*sigma}), order=1)
    >>> onset = ms.critical_drive(driven)
    >>> onset.drive**2, onset.detuning
    (256*sqrt(3)*mu**3*omega_0**3/(27*alpha), sqrt(3)*mu)
    """
    flow = SteadyFlow.of(expansion)
    if not flow.polynomial:
        raise EvaluationError(
            "the flow has forces that are not polynomial, so that the onset of bistability has no formula: follow the "
            "folds of frequency_response at several levels of the drive"
        )
    leading = _leading(flow, drive, detuning)
    level, at, offset = _onset(leading)
    force = sp.sqrt(sp.factor(level / leading.force))
    symbolic = CriticalDrive(_tidy(force), _tidy(offset), _tidy(2 * sp.sqrt(at)))
    if parameters is None:
        return symbolic
    return _numeric(flow, leading, symbolic, parameters)


def _tidy(x: sp.Expr) -> sp.Expr:
    """Roots drawn out of products, as far as the assumptions on the symbols allow."""
    return sp.powdenest(sp.radsimp(sp.factor_terms(x)), force=False)


def _leading(flow: SteadyFlow, drive: sp.Symbol | None, detuning: sp.Symbol | None) -> _Leading:
    expansion = flow.expansion
    problem, n = expansion.problem, flow.leading
    powers = {m for level, _, m in flow.keys if level == n}
    if flow.modes != 1 or not powers <= {(0, 0), (1, 0), (2, 1)} or len(powers) < 3:
        raise EvaluationError(
            f"level {n} of this flow has the terms {sorted(powers)} (powers of A and its conjugate): critical_drive "
            "treats one mode with a drive near primary resonance, linear damping and a cubic term; for others follow "
            "the folds of frequency_response at several levels of the drive"
        )
    write = expansion.slow_flow._views.writer.quotient
    by_power: dict[tuple[int, ...], list[sp.Expr]] = {m: [sp.Integer(0), sp.Integer(0)] for m in powers}
    constant = sp.Integer(0)
    for m, c in expansion.computation.flow(n, 0).items():
        real, imag = write(c.real), write(c.imag)
        if m[:2] == (0, 0):
            constant += real**2 + imag**2
        else:
            by_power[m[:2]] = [by_power[m[:2]][0] + real, by_power[m[:2]][1] + imag]
    (a, b), (r, s) = by_power[1, 0], by_power[2, 1]
    inner = set().union(*(x.free_symbols for x in (a, b, r, s)))
    if drive is None:
        found = sorted(constant.free_symbols - inner, key=str)
        if len(found) != 1:
            raise EvaluationError(f"the drive could be any of {found or constant}: name it with drive=")
        drive = found[0]
    if detuning is None:
        known = [d.detuning for d in problem.detunings if d.detuning in b.free_symbols]
        if len(known) != 1:
            raise EvaluationError(f"the detuning is not unique among {known}: name it with detuning=")
        detuning = known[0]
    force = sp.cancel(constant / drive**2)
    if drive in force.free_symbols | inner or detuning in (a + r + s + force).free_symbols:
        raise EvaluationError(f"{drive} and {detuning} must enter the leading level as drive and detuning alone")
    return _Leading(drive, detuning, force, (a, b), (r, s))


def _onset(leading: _Leading) -> tuple[sp.Expr, sp.Expr, sp.Expr]:
    """(|κ|², ρ, detuning) at the cusp."""
    (a, b), (r, s) = leading.linear, leading.cubic
    square = sp.Symbol("@rho", real=True)
    if s == 0:
        raise EvaluationError("the frequency does not depend on the amplitude at this level: there is no bistability")
    m = -a
    if r == 0:
        stiffness = s if s.is_positive else -s if s.is_negative else sp.Abs(s)
        at = 2 * m / (sp.sqrt(3) * stiffness)
    else:
        # Of the two roots the one that is positive without nonlinear damping; s enters through its square.
        M, S = sp.symbols("@m @s", positive=True)
        r_ = sp.Symbol("@r", real=True)
        big = r_ * square - M
        y = -(2 * r_ * big + square * (r_**2 + S**2)) / (2 * S)
        condition = sp.expand(4 * S**2 * (big**2 + y**2 - square**2 * (r_**2 + S**2)))
        first, second, third = sp.Poly(condition, square).all_coeffs()
        root = sp.sqrt(sp.factor(second**2 - 4 * first * third))
        (at,) = (x for x in ((-second + sign * root) / (2 * first) for sign in (1, -1)) if x.subs(r_, 0).is_positive)
        at = sp.cancel(at).subs({M: m, r_: r, S: sp.sqrt(s**2)})
    big = r * at - m
    y = -(2 * r * big + at * (r**2 + s**2)) / (2 * s)
    level = sp.factor(at * (big**2 + y**2))
    rest = sp.expand(b - sp.diff(b, leading.detuning) * leading.detuning)
    offset = (y - s * at - rest) / sp.diff(b, leading.detuning)
    return level, at, sp.factor(offset)


def _numeric(
    flow: SteadyFlow, leading: _Leading, symbolic: CriticalDrive, parameters: Mapping[Any, Any]
) -> CriticalDrive:
    names = (str(leading.detuning.name), str(leading.drive.name))
    fixed = {(k.name if isinstance(k, sp.Symbol) else k): v for k, v in parameters.items()}
    if given := [name for name in names if name in fixed]:
        raise EvaluationError(f"{given[0]} is what critical_drive solves for: leave it out of the parameters")
    flow.values(fixed | dict.fromkeys(names, 1.0))
    exact = {s: fixed[s.name] for s in leading_symbols(symbolic) if s.name in fixed}
    level, offset, size = (complex(x.subs(exact)) for x in (symbolic.drive, symbolic.detuning, symbolic.amplitude))
    if max(abs(x.imag) for x in (level, offset, size)) > 1e-9 * abs(size) or size.real <= 0:
        raise EvaluationError("there is no bistability for these parameters at the leading level")

    def values(x: Array) -> tuple[Any, ...]:
        return flow.flow.values(fixed | {names[0]: x[2], names[1]: x[3]})

    def determinant(x: Array) -> Any:
        j = flow.jacobian(x[:2], values(x))
        return j[0, 0] * j[1, 1] - j[0, 1] * j[1, 0]

    scales = np.array([size.real, size.real, max(abs(offset.real), 1e-12), level.real])

    def residual(u: Array) -> Array:
        x = u * scales
        j = flow.jacobian(x[:2], values(x))
        rows = [np.array([j[k, 1], -j[k, 0]]) for k in (0, 1)]
        v = max(rows, key=lambda row: float(np.linalg.norm(row)))
        shifted = x.astype(complex)
        shifted[:2] += 1j * STEP * v * size.real / np.linalg.norm(v)
        unit = np.linalg.norm(j)
        rate = flow.rate(x[:2], values(x)) / (unit * size.real)
        return np.array([*rate, determinant(x) / unit**2, determinant(shifted).imag / STEP / unit**2])

    start = _cusp_state(flow, values, size.real, offset.real, level.real)
    return CriticalDrive(*_solved(residual, start / scales, scales))


def leading_symbols(found: CriticalDrive) -> set[sp.Symbol]:
    """The parameters in a symbolic answer."""
    return set().union(*(x.free_symbols for x in (found.drive, found.detuning, found.amplitude)))


def _cusp_state(flow: SteadyFlow, values: Any, size: float, offset: float, level: float) -> Array:
    """The state of the given amplitude that is nearest to rest at the cusp of the leading level."""
    angles = np.linspace(0, 2 * np.pi, 721)
    y = size * np.stack([np.cos(angles), np.sin(angles)])
    rates = flow.rate(y, values(np.array([0.0, 0.0, offset, level])))
    best = int(np.argmin(np.linalg.norm(rates, axis=0)))
    return np.array([*y[:, best], offset, level])


def _solved(residual: Any, u: Array, scales: Array) -> tuple[float, float, float]:
    last = np.inf
    for _ in range(60):
        columns = [(residual(u + h) - residual(u - h)) / 2e-6 for h in 1e-6 * np.eye(4)]
        step = np.linalg.lstsq(np.array(columns).T, residual(u), rcond=1e-13)[0]
        size = float(np.max(abs(step)))
        if not np.isfinite(size):
            break
        u = u - step * min(1.0, 0.2 / size if size > 0 else 1.0)
        if (size < 1e-7 and size >= 0.5 * last) or size == 0:
            x = u * scales
            return float(abs(x[3])), float(x[2]), float(np.hypot(x[0], x[1]))
        last = size
    raise EvaluationError(
        "Newton's method found no cusp near that of the leading level: the small parameter is too large for this order"
    )
