"""What an expansion says of the free oscillator behind it: backbone curve, effective cubic coefficient, damping.

    ω(a) = ω_0 + Σ εⁿ ω_n(a),     α_eff = (8/3) ω_0 dω/d(a²) at a = 0,     δ(a) = −(1/a) da/dt

u'' + ω_0²u + αu³ = 0 has ω = ω_0 + 3αa²/(8ω_0) + …, hence the 8/3: α_eff is the cubic coefficient of the oscillator
that bends alike.
"""

from __future__ import annotations

import warnings
from functools import cache
from typing import Any

import sympy as sp

from multiscale.errors import EvaluationError, MultiscaleError, OrderingWarning, SmallDivisorWarning
from multiscale.expansion import Expansion, expand
from multiscale.problem import Problem

__all__ = ["backbone", "effective_cubic", "effective_damping", "undriven"]


def _without_drives(x: sp.Expr, time: sp.Symbol, jets: set[sp.Expr]) -> sp.Expr:
    """Every cos and sin of a fast angle left out; slow modulation of parameters is left out with them."""
    waves = {w: sp.Integer(0) for w in x.atoms(sp.cos, sp.sin) if time in w.free_symbols and not w.atoms(*jets)}
    return x.xreplace(waves)


def _stated_without_drives(problem: Problem) -> Problem:
    time, functions = problem.time, {u.func for u in problem.unknowns}
    equations = [_without_drives(x, time, functions) for x in problem.equations]
    present = set().union(*(x.free_symbols for x in equations))
    kept = [
        (key, value)
        for key, value in problem.resonances
        if key in problem.unknowns or key in problem.mode_names or key.free_symbols & present - {problem.small}
    ]
    relations = [sp.Eq(key, value, evaluate=False) for key, value in kept]
    chosen: dict[str, Any] = {"resonances": relations, "modes": problem.modes, "references": problem.references}
    chosen |= {"shapes": problem.shapes, "left_shapes": problem.left_shapes}
    if problem.ordering is None:
        chosen |= {"laws": {sp.Function(name): law for name, law in problem.laws.items()}}
        chosen |= {"harmonics": problem.harmonics, "formal": problem.formal}
        return Problem(equations, problem.unknowns, small=problem.small, **chosen)
    ordering = {x: n for x, n in problem.ordering.items() if x in problem.unknowns or x.free_symbols & present}
    return Problem(equations, problem.unknowns, ordering=ordering, **chosen)


@cache
def undriven(expansion: Expansion) -> Expansion:
    """The expansion of the same equations without their drives, to the same order."""
    problem = expansion.problem
    if not expansion.computation.canonical.drives:
        return expansion
    try:
        stated = _stated_without_drives(problem)
    except MultiscaleError as error:
        raise EvaluationError(
            f"the problem without its drives is refused ({error}): state the free oscillator yourself"
        ) from error
    with warnings.catch_warnings():
        warnings.simplefilter("ignore", OrderingWarning)
        warnings.simplefilter("ignore", SmallDivisorWarning)
        return expand(stated, expansion.order)


def backbone(expansion: Expansion, mode: int = 0) -> sp.Expr:
    """ω(a): the frequency of the free oscillator as a function of its amplitude, a series in ε.

    Drives are left out. With `ordering` the series is in the amplitude. Raises ResonanceError where modes in internal
    resonance have no frequency of their own.

    Examples
    --------
    >>> import sympy as sp, multiscale as ms
    >>> t = sp.Symbol("t", real=True)
    >>> eps, mu, f, w0, alpha, Omega = sp.symbols("epsilon mu f omega_0 alpha Omega", positive=True)
    >>> sigma = sp.Symbol("sigma", real=True)
    >>> u = sp.Function("u")(t)
    >>> equation = u.diff(t, 2) + w0**2*u + eps*(2*mu*u.diff(t) + alpha*u**3 - f*sp.cos(Omega*t))
    >>> driven = ms.expand(ms.Problem(equation, u, small=eps, resonances={Omega: w0 + eps*sigma}), order=1)
    >>> ms.backbone(driven)
    3*a**2*alpha*epsilon/(8*omega_0) + omega_0
    >>> ms.effective_cubic(driven), ms.effective_damping(driven)
    (alpha*epsilon, epsilon*mu)
    """
    return undriven(expansion).frequency(mode)


def _orders(parts: list[sp.Expr], small: sp.Symbol) -> sp.Expr:
    return sp.Add(*(small**n * sp.factor(x) for n, x in enumerate(parts)))


def effective_cubic(expansion: Expansion, mode: int = 0) -> sp.Expr:
    """α_eff = (8/3) ω_0 dω/d(a²) at a = 0, order by order in ε.

    A quadratic term enters it from the second order on, with the sign that softens.
    """
    free = undriven(expansion)
    own, a = free.problem.natural_frequencies[mode], free.symbols.a[mode]
    rest = {other: sp.Integer(0) for other in free.symbols.a}
    parts = free.frequency_corrections(mode)[1:]
    slopes = [(sp.diff(x, a, 2) / 2).subs(rest) for x in parts]
    return _orders([sp.Integer(0), *(sp.Rational(8, 3) * own * x for x in slopes)], free.problem.small)


def effective_damping(expansion: Expansion, mode: int = 0) -> sp.Expr:
    """−(1/a) da/dt of the free oscillator as a function of its amplitude; its value at a = 0 is the linear damping."""
    free = undriven(expansion)
    free.frequency(mode)
    a = free.symbols.a[mode]
    parts = [sp.cancel(-free.slow_flow._polar_part(n, mode)[0] / a) for n in range(1, free.order + 1)]
    return _orders([sp.Integer(0), *parts], free.problem.small)
