"""A resonator in a phase-locked loop, simulated by its slow flow and by its full equation.

    u'' + 2εμu' + u + εαu³ = εf(t) cos θ,     dθ/dt = Ω(t) = 1 + εσ(t)

The loop keeps the displacement a quarter of a period behind the drive, which is where the resonator responds most. A
lock-in amplifier takes the quadratures of u with respect to θ through a first-order filter of time constant τ, and a
proportional–integral controller sets the frequency from the lag γ = atan2(q, p) that they show:

    p_f' = (p − p_f)/τ,   q_f' = (q − q_f)/τ,     εσ = k_p (π/2 − γ) + k_i ∫ (π/2 − γ) dt

In the slow simulation p and q are the state of the slow flow, with σ following the controller; in the full one they are
2u cos θ and 2u sin θ, from which the filter has to remove the second harmonic. The force is raised in steps, and the
frequency follows the backbone. All numbers are invented for illustration, in units of the resonator's own time.

Run it with ``python docs/examples/phase_locked_loop.py`` (needs SciPy).
"""

from __future__ import annotations

from dataclasses import dataclass
from math import atan2, cos, pi, sin
from time import perf_counter

import numpy as np
import sympy as sp
from scipy.integrate import solve_ivp

import multiscale as ms

t = sp.Symbol("t", real=True)
eps, mu, alpha, f, Omega = sp.symbols("epsilon mu alpha f Omega", positive=True)
sigma = sp.Symbol("sigma", real=True)
u = sp.Function("u")(t)

PARAMETERS = {"epsilon": 0.005, "mu": 1.0, "alpha": 0.8}  # quality factor 100
FILTER, PROPORTIONAL, INTEGRAL = 12.0, 4.0e-3, 4.0e-5
STEPS = ((0.0, 1.0), (1500.0, 1.6), (3000.0, 2.2))  # (time, force f from then on)
END = 4500.0
TIMES = np.linspace(0.0, END, 901)
WINDOW = 20  # intervals of `TIMES`


@dataclass(frozen=True)
class Run:
    """Ω averaged over `WINDOW`, as a counter shows it, the filtered amplitude, and the seconds the simulation took."""

    frequency: np.ndarray
    amplitude: np.ndarray
    seconds: float


def expansion(order: int = 2) -> ms.Expansion:
    equation = u.diff(t, 2) + u + eps * (2 * mu * u.diff(t) + alpha * u**3 - f * sp.cos(Omega * t))
    return ms.expand(ms.Problem(equation, u, small=eps, resonances={Omega: 1 + eps * sigma}), order)


def force(time: float) -> float:
    return [level for start, level in STEPS if time >= start][-1]


def shift(p: float, q: float, integral: float) -> float:
    """εσ from the filtered quadratures and the integral of the phase error."""
    return PROPORTIONAL * (pi / 2 - atan2(q, p)) + INTEGRAL * integral


def by_slow_flow(result: ms.Expansion, parameters: dict[str, float] = PARAMETERS) -> Run:
    """State: p, q, the filtered quadratures, the integral of the phase error, θ."""
    rhs = result.slow_flow.to_numpy()
    small = parameters["epsilon"]
    order = [parameters.get(name, name) for name in rhs.parameters]

    def rate(time: float, y: np.ndarray) -> list[float]:
        p, q, p_f, q_f, integral, _ = y
        detuning = shift(p_f, q_f, integral)
        moving = {"f": force(time), "sigma": detuning / small}
        dp, dq = rhs(time, y[:2], *(moving.get(x, x) for x in order))
        return [dp, dq, (p - p_f) / FILTER, (q - q_f) / FILTER, pi / 2 - atan2(q_f, p_f), 1 + detuning]

    return _run(rate, [0.0, 0.01, 0.0, 0.01, 0.0, 0.0])


def by_full_equation() -> Run:
    """State: u, u', the filtered quadratures, the integral of the phase error, θ."""
    e, m, a = (PARAMETERS[name] for name in ("epsilon", "mu", "alpha"))

    def rate(time: float, y: np.ndarray) -> list[float]:
        x, v, p_f, q_f, integral, theta = y
        c, s = cos(theta), sin(theta)
        acceleration = -x - e * (2 * m * v + a * x**3 - force(time) * c)
        filtered = [(2 * x * c - p_f) / FILTER, (2 * x * s - q_f) / FILTER]
        return [v, acceleration, *filtered, pi / 2 - atan2(q_f, p_f), 1 + shift(p_f, q_f, integral)]

    return _run(rate, [0.0, 0.01, 0.0, 0.01, 0.0, 0.0])


def _run(rate, start) -> Run:
    """Integrated from one step of the force to the next, so that no solver steps over one."""
    begun = perf_counter()
    y, rows = np.array(start), []
    for begin, end in zip([s for s, _ in STEPS], [*(s for s, _ in STEPS[1:]), END], strict=True):
        inside = TIMES[np.searchsorted(TIMES, begin) : np.searchsorted(TIMES, end)]
        # Just short of the next step of the force, which belongs to the time after.
        asked = np.append(inside, np.nextafter(end, 0))
        done = solve_ivp(rate, (begin, asked[-1]), y, t_eval=asked, method="DOP853", rtol=1e-8, atol=1e-10)
        rows.append(done.y[:, :-1])
        y = done.y[:, -1]
    states = np.concatenate([*rows, y[:, None]], axis=1)
    frequency = (states[5, WINDOW:] - states[5, :-WINDOW]) / (TIMES[WINDOW:] - TIMES[:-WINDOW])
    return Run(frequency, np.hypot(states[2], states[3]), perf_counter() - begun)


def resonance(result: ms.Expansion, level: float) -> tuple[float, float]:
    """(frequency, amplitude) at which the lag is a quarter of a period, from the steady states alone."""
    from scipy.optimize import brentq

    def state(frequency: float) -> ms.Equilibrium:
        return ms.equilibria(result, PARAMETERS | {"f": level, "Omega": frequency})[-1]

    # On the backbone at the largest amplitude f/(2μ), where damping takes what the drive gives.
    a = level / (2 * PARAMETERS["mu"])
    guess = 1 + 3 * PARAMETERS["epsilon"] * PARAMETERS["alpha"] * a**2 / 8
    found = brentq(lambda w: atan2(state(w).state[1], state(w).state[0]) - pi / 2, guess - 5e-4, guess + 2e-4)
    return found, state(found).amplitudes[0]


def main() -> None:
    result = expansion()
    slow, full = by_slow_flow(result), by_full_equation()
    print("force   frequency: slow flow   full equation   phase resonance")
    for (_, level), end in zip(STEPS, [*(s for s, _ in STEPS[1:]), END + 1], strict=True):
        k = int(np.searchsorted(TIMES, end)) - 1 - WINDOW
        print(f"{level:5.1f} {slow.frequency[k]:21.6f} {full.frequency[k]:15.6f} {resonance(result, level)[0]:17.6f}")
    print(f"largest difference of the frequencies: {np.abs(slow.frequency - full.frequency).max():.1e}")
    print(f"run time, full equation over slow flow: {full.seconds / slow.seconds:.0f}")


if __name__ == "__main__":
    main()
