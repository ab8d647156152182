"""Parametrically excited oscillators for the tests, and their Floquet multipliers by integration."""

from __future__ import annotations

from functools import cache
from types import SimpleNamespace
from typing import Any

import numpy as np
import pytest
import sympy as sp

import multiscale as ms

t = sp.Symbol("t", real=True)
eps = sp.Symbol("epsilon", positive=True)
u = sp.Function("u")(t)
du, ddu = u.diff(t), u.diff(t, 2)


def parametric(equation: sp.Expr, unknown: sp.Expr = u) -> ms.Problem:
    """The problem equation = 0 for one unknown, small parameter epsilon."""
    return ms.Problem(equation, unknown, small=eps)


def unchecked(equation: sp.Expr, unknown: sp.Expr = u) -> Any:
    """The same without the checks of `Problem`, to see those of the linearisation."""
    return SimpleNamespace(equations=(equation,), unknowns=(unknown,), small=eps, time=t)


@cache
def acceleration(equation: sp.Expr, symbols: tuple[sp.Symbol, ...]) -> tuple[Any, Any]:
    """k and c of u'' = k u + c u', as functions of time and `symbols`."""
    x, v, a = sp.symbols("x v a")
    linear = sp.expand(equation.subs({ddu: a}).subs({du: v}).subs({u: x}))
    return tuple(sp.lambdify((t, *symbols), -linear.coeff(y) / linear.coeff(a), "math") for y in (x, v))


def monodromy(equation: sp.Expr, values: dict[sp.Symbol, float], period: float) -> np.ndarray:
    """The fundamental matrix of a linear equation over one period, by SciPy."""
    scipy_integrate = pytest.importorskip("scipy.integrate")
    stiffness, damping = acceleration(equation, tuple(values))
    numbers = tuple(values.values())

    def rhs(time: float, y: Any) -> list[float]:
        k, c = stiffness(time, *numbers), damping(time, *numbers)
        return [y[1], k * y[0] + c * y[1], y[3], k * y[2] + c * y[3]]

    found = scipy_integrate.solve_ivp(rhs, (0.0, period), [1, 0, 0, 1], method="DOP853", rtol=1e-13, atol=1e-14)
    assert found.success, found.message
    return found.y[:, -1].reshape(2, 2).T


def distance(
    equation: sp.Expr, parameter: sp.Symbol, value: float, values: dict[sp.Symbol, float], period: float, sign: int
) -> float:
    """det(Φ − sign): zero where a multiplier is `sign`, that is on a boundary."""
    matrix = monodromy(equation, {**values, parameter: value}, period)
    return float(np.linalg.det(matrix - sign * np.eye(2)))


def boundary(
    equation: sp.Expr,
    parameter: sp.Symbol,
    near: float,
    reach: float,
    values: dict[sp.Symbol, float],
    period: float,
    tongue: int,
) -> float:
    """The boundary within near ± reach, to rounding."""
    scipy_optimize = pytest.importorskip("scipy.optimize")
    sign = -1 if tongue % 2 else 1
    return float(
        scipy_optimize.brentq(
            lambda p: distance(equation, parameter, p, values, period, sign), near - reach, near + reach, xtol=1e-15
        )
    )
