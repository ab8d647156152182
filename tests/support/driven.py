"""Driven oscillators for the tests of steady states, and the periodic motion of the original equation by shooting."""

from __future__ import annotations

import warnings
from functools import cache

import numpy as np
import pytest
import sympy as sp

import multiscale as ms

t = sp.Symbol("t", real=True)
eps, mu, alpha, beta, f, h, w, Om = sp.symbols("epsilon mu alpha beta f h omega Omega", positive=True)
sigma = sp.Symbol("sigma", real=True)
u = sp.Function("u")(t)
plain = u.diff(t, 2) + w**2 * u
cubic = plain + eps * (2 * mu * u.diff(t) + alpha * u**3)

# name: (equation, relation, revolutions of the drive in one period of the motion)
CASES = {
    "primary": (cubic - eps * f * sp.cos(Om * t), {Om: w + eps * sigma}, 1),
    "quadratic": (cubic + eps * beta * u**2 - eps * f * sp.cos(Om * t), {Om: w + eps * sigma}, 1),
    "superharmonic": (cubic - f * sp.cos(Om * t), {3 * Om: w + eps * sigma}, 1),
    "subharmonic": (cubic - f * sp.cos(Om * t), {Om: 3 * w + eps * sigma}, 3),
    "parametric": (cubic + eps * h * u * sp.cos(Om * t), {Om: 2 * w + eps * sigma}, 2),
    "both": (
        cubic + eps * (h * u * sp.cos(2 * Om * t + sp.Rational(3, 10)) - f * sp.cos(Om * t)),
        {Om: w + eps * sigma},
        1,
    ),
}


@cache
def expanded(name: str, order: int) -> ms.Expansion:
    equation, relation, _ = CASES[name]
    with warnings.catch_warnings():
        warnings.simplefilter("ignore", ms.OrderingWarning)
        return ms.expand(ms.Problem(equation, u, small=eps, resonances=relation), order)


def used(expansion: ms.Expansion, values: dict[str, float]) -> dict[str, float]:
    """Those of the values that the expansion takes."""
    return {k: v for k, v in values.items() if k in expansion.slow_flow.to_numpy().parameters}


class Original:
    """The equation as stated, with numbers, and its variational equation."""

    def __init__(self, name: str, values: dict[str, float]) -> None:
        equation, relation, turns = CASES[name]
        ((left, right),) = relation.items()
        numbers = {s: values[s.name] for s in (eps, mu, alpha, beta, f, h, w, sigma) if s.name in values}
        self.frequency = float(sp.solve(left - right, Om)[0].subs(numbers))
        self.period = 2 * np.pi * turns / self.frequency
        x, v, a = sp.symbols("x v a")
        stated = equation.subs(numbers).subs(Om, self.frequency).subs({u.diff(t, 2): a}).subs({u.diff(t): v}).subs(u, x)
        force = -(stated - a)
        self._force, self._by_x, self._by_v = (
            sp.lambdify((t, x, v), y, "math") for y in (force, sp.diff(force, x), sp.diff(force, v))
        )

    def over_a_period(self, start: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
        """(end, its derivative by the start)."""
        scipy_integrate = pytest.importorskip("scipy.integrate")

        def rhs(time, y):
            x, v = y[0], y[1]
            k, c = self._by_x(time, x, v), self._by_v(time, x, v)
            return [v, self._force(time, x, v), y[3], k * y[2] + c * y[3], y[5], k * y[4] + c * y[5]]

        found = scipy_integrate.solve_ivp(
            rhs, (0.0, self.period), [*start, 1, 0, 0, 1], method="DOP853", rtol=1e-12, atol=1e-13
        )
        assert found.success, found.message
        end = found.y[:, -1]
        return end[:2], end[2:].reshape(2, 2).T

    def periodic(self, start: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
        """(start of the periodic motion near a guess, its Floquet multipliers)."""
        start = np.array(start, dtype=float)
        for _ in range(12):
            end, matrix = self.over_a_period(start)
            step = np.linalg.solve(matrix - np.eye(2), end - start)
            start = start - step
            if np.max(abs(step)) < 1e-11:
                break
        else:
            raise RuntimeError("shooting did not converge")
        return start, np.linalg.eigvals(self.over_a_period(start)[1])


def motion_at_zero(expansion: ms.Expansion, state: np.ndarray, values: dict[str, float]) -> np.ndarray:
    """(u, u') at t = 0 of the expansion."""
    return np.array([expansion.to_numpy(k).bind(values)(0.0, state)[0] for k in (0, 1)])
