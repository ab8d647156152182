"""Systems of mixed first and second order: direct integration from the library's own start, and error slopes."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from typing import Any

import numpy as np
import pytest
import sympy as sp

import multiscale as ms


class Motion:
    """The user's equations solved for their highest derivatives, as a system of first order."""

    def __init__(self, problem: ms.Problem, values: Mapping[sp.Symbol, Any]) -> None:
        t, unknowns = problem.time, problem.unknowns
        found = [{d for d in (1, 2) if any(x.has(u.diff(t, d)) for x in problem.equations)} for u in unknowns]
        highest = [max(orders, default=0) for orders in found]
        names = {(k, d): sp.Symbol(f"s{k}_{d}") for k in range(len(unknowns)) for d in range(3)}
        jets = {(unknowns[k].diff(t, d) if d else unknowns[k]): s for (k, d), s in names.items()}
        derivatives = {x: s for x, s in jets.items() if x.is_Derivative}
        plain = [x.xreplace(derivatives).xreplace(jets).subs(values) for x in problem.equations]
        wanted = [names[k, highest[k]] for k in range(len(unknowns))]
        solved = sp.solve(plain, wanted, dict=True)[0]
        self.state = [(k, d) for k in range(len(unknowns)) for d in range(highest[k])]
        rates = [solved[names[k, d + 1]] if d + 1 == highest[k] else names[k, d + 1] for k, d in self.state]
        f = sp.lambdify([t, *(names[s] for s in self.state)], rates, "math")
        self.rhs = lambda time, y: f(float(time), *map(float, y))


def motion_errors(
    expansion: ms.Expansion,
    values: Mapping[sp.Symbol, Any],
    start: Sequence[float],
    small_values: Sequence[float],
    horizon: float,
    *,
    power: int = 1,
    turn: float = 0.0,
    level: int = 1,
    eliminated: Mapping[sp.Symbol, sp.Expr] | None = None,
) -> list[float]:
    """Largest error of any unknown up to t = horizon/ε^power; `turn`·ε^level is added to the rate of mode 0's phase."""
    integrate = pytest.importorskip("scipy.integrate").solve_ivp
    problem, eps = expansion.problem, expansion.problem.small
    errors = []
    for small in small_values:
        known = {**values, eps: small}
        whole = known | {s: float(x.subs(known)) for s, x in (eliminated or {}).items()}
        motion = Motion(problem, whole)
        flow = expansion.slow_flow.to_numpy().bind(known)
        place, speed = (expansion.to_numpy(derivative=d).bind(known) for d in (0, 1))

        def rhs(time: float, y: np.ndarray, flow: Any = flow, small: float = small) -> np.ndarray:
            change = np.zeros_like(y)
            change[0], change[1] = turn * small**level * y[1], -turn * small**level * y[0]
            return flow(time, y) + change

        times = np.linspace(0.0, horizon / small**power, 600)
        options = {"method": "DOP853", "rtol": 1e-11, "atol": 1e-13, "t_eval": times}
        slow = integrate(rhs, (0, times[-1]), start, **options).y
        begin = [(place, speed)[d](0.0, slow[:, 0])[k] for k, d in motion.state]
        exact = integrate(motion.rhs, (0, times[-1]), begin, **options).y
        rows = [i for i, (_, d) in enumerate(motion.state) if d == 0]
        errors.append(float(np.abs(place(times, slow) - exact[rows]).max()))
    return errors


def slope(small: Sequence[float], errors: Sequence[float]) -> float:
    """The exponent of a least-squares fit errors ~ C ε^p."""
    return float(np.polyfit(np.log(small), np.log(errors), 1)[0])
