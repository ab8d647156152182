"""Damping, quadratic drag and cubic stiffness of a resonator from one noisy ring-down.

    m x'' + c x' + d |x'| x' + k x + k_3 x³ = 0

A small fork is plucked and rings down in air. Early on the drag takes the energy and the stiffness raises the pitch;
later viscous damping is left. All of it is in one record. The fork and its numbers are invented for illustration; the
record is made by integrating the full equation and adding noise, so that the truth is known.

Run it with ``python docs/examples/ring_down_identification.py`` (needs SciPy).
"""

from __future__ import annotations

from math import sqrt
from time import perf_counter

import numpy as np
import sympy as sp
from scipy.integrate import solve_ivp

import multiscale as ms

t = sp.Symbol("t", real=True)
eps, m, c, d, k, k3 = sp.symbols("epsilon m c d k k_3", positive=True)
x = sp.Function("x")(t)

# SI units: kg, N s/m, N s²/m², N/m, N/m³. The mass is known; ε only marks what is weak, and is 1.
TRUTH = {"c": 8.0e-5, "d": 1.0e-5, "k": 200.0, "k_3": 2.5e6}
MASS = 5.0e-6
PLUCK, NOISE = 1.0e-3, 5.0e-6  # metres
TIMES = np.linspace(0.0, 0.4, 4001)  # seconds: 400 periods, ten readings in each


def expansion(order: int = 2) -> ms.Expansion:
    """|x'|x' has a continuous derivative, so the second order exists; seven of its harmonics are kept there."""
    v = x.diff(t)
    equation = m * v.diff(t) + k * x + eps * (c * v + d * sp.Abs(v) * v + k3 * x**3)
    return ms.expand(ms.Problem(equation, x, small=eps, harmonics=7), order)


def record(seed: int = 3) -> np.ndarray:
    """Displacement in metres at `TIMES`, from the full equation, with independent errors."""

    def rate(_: float, y: np.ndarray) -> list[float]:
        place, speed = y
        force = TRUTH["c"] * speed + TRUTH["d"] * abs(speed) * speed + TRUTH["k"] * place + TRUTH["k_3"] * place**3
        return [speed, -force / MASS]

    done = solve_ivp(rate, (0.0, TIMES[-1]), [PLUCK, 0.0], t_eval=TIMES, method="DOP853", rtol=1e-9, atol=1e-13)
    return done.y[0] + np.random.default_rng(seed).normal(0.0, NOISE, len(TIMES))


def model(result: ms.Expansion) -> ms.RingDownModel:
    return ms.ring_down_model(result, TIMES, free=["c", "d", "k", "k_3"], known={"m": MASS, "epsilon": 1.0})


def start(data: np.ndarray) -> dict[str, float]:
    """A first guess from the record alone: pitch and decay of its last quarter, half of the decay at the beginning."""
    late = data[-len(data) // 4 :]
    frequency = _pitch(late, TIMES[1])
    early, last = (np.sqrt(2 * np.mean(part**2)) for part in (data[: len(data) // 4], late))
    rate = np.log(early / last) / (0.75 * TIMES[-1])
    stiffness = MASS * frequency**2
    shift = _pitch(data[: len(data) // 10], TIMES[1]) ** 2 - frequency**2
    return {
        "c": MASS * rate,
        "d": MASS * rate / (PLUCK * frequency),
        "k": stiffness,
        "k_3": max(4 / 3 * MASS * shift / early**2, 0.0),
        "p": data[0],
        "q": 0.0,
    }


def _pitch(part: np.ndarray, interval: float) -> float:
    """Angular frequency from the upward zero crossings, between the first and the last."""
    up = np.flatnonzero((part[:-1] < 0) & (part[1:] >= 0))
    place = up + part[up] / (part[up] - part[up + 1])
    return 2 * np.pi * (len(up) - 1) / ((place[-1] - place[0]) * interval)


def identify(result: ms.Expansion, data: np.ndarray) -> ms.Fit:
    """In two steps: the first tenth of the record fixes pitch and phase, from which the whole can be fitted."""
    guess = start(data)
    short = len(TIMES) // 10
    free = ["c", "d", "k", "k_3"]
    first = ms.ring_down_model(result, TIMES[:short], free=free, known={"m": MASS, "epsilon": 1.0})
    guess = ms.fit(first, data[:short], guess, noise=NOISE).values
    return ms.fit(model(result), data, guess, noise=NOISE)


def main() -> None:
    result, data = expansion(), record()
    begun = perf_counter()
    found = identify(result, data)
    seconds = perf_counter() - begun
    print("       truth        found        uncertainty  deviation/uncertainty")
    for name, true in TRUTH.items():
        value, error = found.values[name], found.uncertainties[name]
        print(f"{name:4s} {true:12.5e} {value:12.5e} {error:12.1e} {(value - true) / error:10.2f}")
    print(f"misfit {found.misfit * 1e6:.2f} µm, noise {NOISE * 1e6:.2f} µm; quality factor at rest "
          f"{sqrt(found.values['k'] * MASS) / found.values['c']:.0f}")  # fmt: skip
    print(f"the fit took {seconds:.2f} s")


if __name__ == "__main__":
    main()
