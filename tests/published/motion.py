"""Error of an expansion in the motion itself: the equations as the user wrote them, integrated directly.

The start of the full system is the library's own displacement and velocity at t = 0, so that both begin in the same
state; the library's slow flow is integrated with the same tolerance and turned into displacements.
"""

from __future__ import annotations

from collections.abc import Callable, Mapping, Sequence
from typing import Any

import numpy as np
import sympy as sp

import multiscale as ms

from .integration import integrate

Change = Callable[[float, np.ndarray], Sequence[float]]
POINTS = 1200


def full(problem: ms.Problem, values: Mapping[sp.Expr, Any]) -> Callable[[float, Any], list[float]]:
    """f(t, (u, u', v, v', …)) of equations whose accelerations have the coefficient 1.

    `values` gives every symbol of the equations, those that the library eliminates among them.
    """
    t = problem.time
    names = {}
    for k, x in enumerate(problem.unknowns):
        names[x.diff(t, 2)], names[x.diff(t)], names[x] = sp.symbols(f"acceleration{k} velocity{k} place{k}")
    derivatives = {x: s for x, s in names.items() if x.is_Derivative}
    accelerations = []
    for equation, x in zip(problem.equations, problem.unknowns, strict=True):
        plain = equation.xreplace(derivatives).xreplace(names).subs(values)
        acceleration = sp.expand(names[x.diff(t, 2)] - plain)
        assert not acceleration.free_symbols & {names[y.diff(t, 2)] for y in problem.unknowns}
        accelerations.append(acceleration)
    state = [s for x in problem.unknowns for s in (names[x], names[x.diff(t)])]
    f = sp.lambdify((t, *state), accelerations, "math")

    def rhs(time: float, y: Any) -> list[float]:
        found = f(float(time), *y.tolist())
        return [z for k, a in enumerate(found) for z in (float(y[2 * k + 1]), a)]

    return rhs


def numbers(
    values: Mapping[sp.Symbol, float], eliminated: Mapping[sp.Symbol, sp.Expr], eps: sp.Symbol, small: float
) -> dict[sp.Symbol, float]:
    """`values` and ε, completed by the eliminated symbols, each written in the symbols that remain."""
    known = {**values, eps: small}
    return known | {s: float(x.subs(known)) for s, x in eliminated.items()}


def motion_errors(
    expansion: ms.Expansion,
    values: Mapping[sp.Symbol, float],
    eliminated: Mapping[sp.Symbol, sp.Expr],
    start: Sequence[float],
    small_values: Sequence[float],
    horizon: float,
    change: Change | None = None,
    power: int = 1,
) -> list[float]:
    """Largest error of any unknown on 0 ≤ t ≤ horizon/ε^power, for each ε.

    `change(ε, y)` is added to the right-hand side of the slow flow: a negative control.
    """
    eps = expansion.problem.small
    errors = []
    for small in small_values:
        bound = {**values, eps: small}
        flow = expansion.slow_flow.to_numpy().bind(bound)
        place, velocity = (expansion.to_numpy(derivative=d).bind(bound) for d in (0, 1))

        def rhs(t: float, y: np.ndarray, flow: Any = flow, small: float = small) -> np.ndarray:
            return flow(t, y) if change is None else flow(t, y) + np.asarray(change(small, y))

        times = np.linspace(0.0, horizon / small**power, POINTS)
        slow = integrate(rhs, start, times)
        begin = np.column_stack([place(0.0, slow[:, 0]), velocity(0.0, slow[:, 0])]).ravel()
        exact = integrate(full(expansion.problem, numbers(values, eliminated, eps, small)), begin, times)
        errors.append(float(np.abs(place(times, slow) - exact[::2]).max()))
    return errors


def turned(level: int, strength: float = 0.2) -> Change:
    """A change of the coefficient of iA_1 in D_level A_1: the first mode turns faster by strength·ε^level."""

    def change(small: float, y: np.ndarray) -> list[float]:
        rate = strength * small**level
        return [rate * y[1], -rate * y[0], *(0.0 for _ in y[2:])]

    return change
