"""Averages by quadrature in generated code against their closed forms with SciPy's special functions.

Compared: the slow flow of u'' + ω²u + ε sin u, whose average is J_1(a). The library evaluates it by the quadrature
that any force gets (the force is given as a function of numbers) and by its own Bessel functions; the opponent is the
same formula by hand with `scipy.special.j1`. And |u'|^{3/2} sgn u', where the average has a kink at each stop and the
closed form is Gamma functions.

All agree to 10⁻¹³ of the mean force, which is checked before anything is timed. One state, where a call counts, and
10⁴ states. No target: the quadrature is for forces that have no closed form.
"""

from __future__ import annotations

from functools import partial

import numpy as np
import sympy as sp

import multiscale as ms
from benchmarks.report import Result, against, note
from benchmarks.timing import in_turns

STATES = 10**4
SMALL, OMEGA = 0.1, 1.7
t = sp.Symbol("t", real=True)
eps, w = sp.symbols("epsilon omega", positive=True)
u = sp.Function("u")(t)
F = sp.Function("F")


def _rate(force: sp.Expr, laws: dict[object, object] | None = None) -> object:
    problem = ms.Problem(u.diff(t, 2) + w**2 * u + eps * force, u, small=eps, laws=laws or {})
    return ms.expand(problem, 1).slow_flow.to_numpy("polar").bind(epsilon=SMALL, omega=OMEGA)


def _power(x: np.ndarray) -> np.ndarray:
    return np.sign(x) * np.abs(x) ** 1.5


def run() -> list[Result]:
    try:
        from scipy.special import gamma, j1
    except ImportError:
        return [note("quadrature of forces", "skipped: needs SciPy, which is not installed")]

    def sine_by_hand(_: float, y: np.ndarray) -> np.ndarray:
        a = np.asarray(y)[0]
        return np.array([0.0 * a, SMALL * j1(a) / (a * OMEGA)])

    def power_by_hand(_: float, y: np.ndarray) -> np.ndarray:
        a = np.asarray(y)[0]
        factor = SMALL * OMEGA**0.5 * gamma(1.75) / (np.sqrt(np.pi) * gamma(2.25))
        return np.array([-factor * a**1.5, 0.0 * a])

    v = u.diff(t)
    cases = {
        "sin u": (_rate(F(u), {F: np.sin}), _rate(sp.sin(u)), sine_by_hand),
        "|u'|^(3/2)": (
            _rate(F(v), {F: ms.ForceLaw(_power, kinks=(0.0,))}),
            _rate(sp.Abs(v) ** sp.Rational(3, 2) * sp.sign(v)),
            power_by_hand,
        ),
    }
    one = np.array([1.3, 0.0])
    many = np.array([np.random.default_rng(1).uniform(0.1, 3.0, STATES), np.zeros(STATES)])
    results = []
    for label, (averaged, closed, by_hand) in cases.items():
        for size, y in (("one state", one), (f"{STATES} states", many)):
            expected = by_hand(0.0, y)
            for found in (averaged, closed):
                if not np.allclose(found(0.0, y), expected, rtol=1e-12, atol=1e-15):
                    raise RuntimeError(f"{label}: quadrature and closed form disagree")
            candidates = {
                "quadrature": partial(averaged, 0.0, y),
                "closed form": partial(closed, 0.0, y),
                "SciPy by hand": partial(by_hand, 0.0, y),
            }
            rounds = in_turns(candidates, repeats=7)
            for name in ("quadrature", "closed form"):
                results.append(against(f"{label}, {size}: {name}", rounds, library=name, opponent="SciPy by hand"))
    return results
