"""Response of a driven cubic oscillator of quality factor 100 at 10³ frequencies, against settling the equation.

Compared, per point of the response: `frequency_response` at order 3 (all branches, stability and folds included; the
expansion itself is made once and timed beside it) with integrating the original equation from a state of the response
for 10·Q/ω, the time in which a transient decays by e⁻⁵, with `scipy.integrate.solve_ivp` at rtol = 1e-8, and reading
the amplitude off the last period. Integration is timed at a sample of the points, one in a hundred; it gives one branch
only, the upper one, from which it starts.

Both errors are against the periodic motion found by shooting at rtol = 1e-12, as the largest |u| over a period relative
to the exact one.

Floor: the first-order response in closed form, a cubic in a², takes a few microseconds a point.
"""

from __future__ import annotations

from functools import partial
from importlib.util import find_spec
from typing import Any

import numpy as np
import sympy as sp

import multiscale as ms
from benchmarks.report import Result, against, alone, note
from benchmarks.timing import in_turns

QUALITY, POINTS, SAMPLE, ORDER = 100, 1000, 10, 3
VALUES = {"epsilon": 0.01, "mu": 0.5, "alpha": 1.0, "f": 1.2}
DETUNINGS = np.linspace(-3.0, 3.0, POINTS)
PHASES = np.linspace(0, 2 * np.pi, 257)[:-1]


def driven() -> ms.Problem:
    """u'' + u + ε(2μu' + αu³ − f cos Ωt) = 0 near Ω = 1; Q = 1/(2εμ)."""
    t = sp.Symbol("t", real=True)
    eps, mu, alpha, f, frequency = sp.symbols("epsilon mu alpha f Omega", positive=True)
    u, sigma = sp.Function("u")(t), sp.Symbol("sigma", real=True)
    equation = u.diff(t, 2) + u + eps * (2 * mu * u.diff(t) + alpha * u**3 - f * sp.cos(frequency * t))
    return ms.Problem(equation, u, small=eps, resonances={frequency: 1 + eps * sigma})


def _rhs(sigma: float) -> Any:
    eps, mu, alpha, f = VALUES.values()
    frequency = 1 + eps * sigma

    def rhs(t: float, y: Any) -> list[float]:
        u, v = y[0], y[1]
        return [v, -u - eps * (2 * mu * v + alpha * u**3 - f * np.cos(frequency * t))]

    return rhs, 2 * np.pi / frequency


def _peak(rhs: Any, start: Any, period: float) -> float:
    from scipy.integrate import solve_ivp

    found = solve_ivp(
        rhs, (0.0, period), start, method="DOP853", rtol=1e-12, atol=1e-13, t_eval=period * PHASES / 2 / np.pi
    )
    return float(np.max(abs(found.y[0])))


def _settled(sigma: float, start: Any) -> float:
    """The largest |u| of the last period after settling."""
    from scipy.integrate import solve_ivp

    rhs, period = _rhs(sigma)
    turns = int(np.ceil(10 * QUALITY / period))
    last = turns * period + period * PHASES / 2 / np.pi
    found = solve_ivp(rhs, (0.0, last[-1]), start, method="DOP853", rtol=1e-8, atol=1e-10, t_eval=last)
    return float(np.max(abs(found.y[0])))


def _exact(sigma: float, start: Any) -> float:
    from scipy.integrate import solve_ivp
    from scipy.optimize import root

    rhs, period = _rhs(sigma)

    def closing(y: Any) -> Any:
        return solve_ivp(rhs, (0.0, period), y, method="DOP853", rtol=1e-12, atol=1e-13).y[:, -1] - y

    found = root(closing, start, tol=1e-12)
    if np.max(abs(found.fun)) > 1e-9:
        raise RuntimeError(f"shooting did not close at detuning {sigma}")
    return _peak(rhs, found.x, period)


def _upper(response: ms.Response) -> list[tuple[float, np.ndarray]]:
    """A sample of the sweep on the branch of larger stable amplitude."""
    found = []
    for sigma in DETUNINGS[POINTS // SAMPLE // 2 :: POINTS // SAMPLE]:
        states = [
            (b.amplitude[k], b.state[:, k])
            for b in response.branches
            for k in np.flatnonzero((b.parameter == sigma) & b.stable & ~b.spurious)
        ]
        found.append((float(sigma), max(states, key=lambda s: s[0])[1]))
    return found


def run() -> list[Result]:
    case = f"{POINTS} frequencies, Q = {QUALITY}"
    if find_spec("scipy") is None:
        return [note(case, "skipped: needs SciPy, which is not installed")]
    problem = driven()
    expansion = ms.expand(problem, ORDER)
    respond = partial(ms.frequency_response, expansion, VALUES, sweep={"sigma": DETUNINGS})
    sample = _upper(respond())
    shown = [expansion.to_numpy(k) for k in (0, 1)]
    own, settled, exact, starts = [], [], [], []
    for sigma, state in sample:
        values = shown[0].values(VALUES | {"sigma": sigma})
        starts.append([float(g(0.0, state, *values)[0]) for g in shown])
        period = 2 * np.pi / (1 + VALUES["epsilon"] * sigma)
        own.append(np.max(abs(shown[0](period * PHASES / 2 / np.pi, state[:, None] * np.ones(len(PHASES)), *values))))
        exact.append(_exact(sigma, starts[-1]))
        # From beside the branch, as one would who does not know it: 5 % off.
        settled.append(_settled(sigma, 1.05 * np.array(starts[-1])))
    errors = [float(np.max(abs(np.array(x) / exact - 1))) for x in (own, settled)]
    rounds = in_turns(
        {
            "library": respond,
            "opponent": lambda: [_settled(s, 1.05 * np.array(y)) for (s, _), y in zip(sample, starts, strict=True)],
            "expansion": lambda: ms.expand(problem, ORDER),
        },
        repeats=5,
    )
    per_point = type(rounds)(
        {
            "library": [x / POINTS for x in rounds.seconds["library"]],
            "opponent": [x / SAMPLE for x in rounds.seconds["opponent"]],
            "expansion": rounds.seconds["expansion"],
        }
    )
    text = f"largest relative error of the peak displacement: library {errors[0]:.1e}, settling {errors[1]:.1e}"
    return [
        against(f"{case}, time per point", per_point, sense="times faster", note=text),
        alone(f"the expansion to order {ORDER}, once", per_point, library="expansion"),
    ]
