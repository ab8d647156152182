"""The figures of the pages, each with a second route drawn beside the result where there is one.

All oscillators and numbers are those of the pages, invented for illustration. Run it with
``python docs/examples/figures.py [folder]`` (needs SciPy and Matplotlib); it writes into ``docs/figures`` by default.
"""

from __future__ import annotations

import sys
from collections.abc import Callable
from pathlib import Path
from typing import Any

import numpy as np
import sympy as sp
from scipy.integrate import solve_ivp
from scipy.optimize import brentq

import multiscale as ms

t = sp.Symbol("t", real=True)
eps, mu, alpha, f, w0, w1, w2, delta, Omega = sp.symbols(
    "epsilon mu alpha f omega_0 omega_1 omega_2 delta Omega", positive=True
)
sigma = sp.Symbol("sigma", real=True)
u, v = sp.Function("u")(t), sp.Function("v")(t)
VAN_DER_POL = ms.Problem(u.diff(t, 2) + eps * (u**2 - 1) * u.diff(t) + u, u, small=eps)
MATHIEU = ms.Problem(u.diff(t, 2) + (delta + 2 * eps * sp.cos(2 * t)) * u, u, small=eps)


def driven(order: int) -> ms.Expansion:
    """The cubic oscillator near primary resonance, of the tour and of the page on driven response."""
    motion = u.diff(t, 2) + w0**2 * u + eps * (2 * mu * u.diff(t) + alpha * u**3 - f * sp.cos(Omega * t))
    return ms.expand(ms.Problem(motion, u, small=eps, resonances={Omega: w0 + eps * sigma}), order)


def integrated(rate: Callable[..., Any], start: Any, times: np.ndarray) -> np.ndarray:
    """Displacements and velocities at the times, at a tolerance far below what a figure shows."""
    return solve_ivp(rate, (times[0], times[-1]), start, t_eval=times, method="DOP853", rtol=1e-9, atol=1e-11).y


def tour_response(axes: Any) -> None:
    values = {eps: 0.05, mu: 0.1, alpha: 1.0, f: 0.3, w0: 1.0}
    response = ms.frequency_response(driven(2), values, sweep={sigma: np.linspace(-1, 2, 121)})
    response.plot(axes)
    for fold in response.folds:
        axes.plot(fold.parameter, fold.amplitudes[0], "ko", markersize=5, fillstyle="none")
    axes.set(xlabel="detuning σ (units of ε per unit of time)", ylabel="amplitude a (unit of u)")


def decay(axes: Any) -> None:
    """u'' + u + ε(2μu' + u³) = 0 from rest at 1, with the slow amplitude."""
    values = {eps: 0.1, mu: 0.15}
    result = ms.expand(ms.Problem(u.diff(t, 2) + u + eps * (2 * mu * u.diff(t) + u**3), u, small=eps), 2)
    times = np.linspace(0, 80, 1601)
    start = ms.initial_state(result, {u: 1.0, u.diff(t): 0.0}, values)
    slow = integrated(result.slow_flow.to_numpy().bind(values), start, times)
    full = integrated(lambda _, y: [y[1], -y[0] - 0.1 * (0.3 * y[1] + y[0] ** 3)], [1.0, 0.0], times)[0]
    axes.plot(times, full, color="0.6", linewidth=2.5, label="equation, integrated")
    axes.plot(times, result.to_numpy().bind(values)(times, slow)[0], "C0-", linewidth=0.9, label="order 2")
    axes.plot(times, np.hypot(*slow), "C1--", label="slow amplitude a")
    axes.set(xlabel="time (radians of the linear oscillator)", ylabel="displacement u")
    axes.legend(loc="upper right")


def beyond_the_radius(axes: Any) -> None:
    orbit = ms.periodic_series(VAN_DER_POL, 40)
    quadratic = ms.pade(orbit.frequency_coefficients, eps, kind="quadratic")
    grid = np.linspace(0, 4, 161)
    series = np.polynomial.Polynomial([float(c) for c in orbit.frequency_coefficients])(grid)
    axes.plot(grid, np.where(abs(series) < 1.2, series, np.nan), "C0--", label="series to ε⁴⁰")
    axes.plot(grid, quadratic(grid), "C1-", label="quadratic approximant of it")
    measured = np.arange(0.5, 4.01, 0.5)
    axes.plot(measured, [cycle_frequency(e) for e in measured], "k.", markersize=8, label="equation, integrated")
    axes.axvline(orbit.radius, color="0.5", linewidth=0.8, linestyle=":")
    axes.annotate("radius of convergence", (orbit.radius + 0.05, 0.66))
    axes.set(xlabel="ε", ylabel="angular frequency of the cycle", xlim=(0, 4), ylim=(0.6, 1.02))
    axes.legend()


def cycle_frequency(small: float) -> float:
    """2π over the time between upward zeros of van der Pol's oscillator, once it has settled."""

    def rising(_: float, y: Any) -> float:
        return y[0]

    rising.direction = 1  # type: ignore[attr-defined]
    done = solve_ivp(
        lambda _, y: [y[1], -y[0] - small * (y[0] ** 2 - 1) * y[1]],
        (0, 60 / small + 60),
        [2.0, 0.0],
        method="DOP853",
        rtol=1e-9,
        atol=1e-10,
        events=rising,
    )
    crossings = done.t_events[0]
    return float(2 * np.pi / (crossings[-1] - crossings[-2]))


def driven_response(axes: Any) -> None:
    result = driven(3)
    values = {eps: 0.02, mu: 0.15, alpha: 1.0, f: 0.6, w0: 1.0}
    response = ms.frequency_response(result, values, sweep={Omega: np.linspace(0.98, 1.06, 161)})
    (branch,) = response.branches
    axes.plot(branch.parameter, branch.amplitude, "C0:", label="unstable")
    stable = branch.stable.copy()
    stable[list(branch.folds)] = True  # drawn up to the fold itself
    axes.plot(branch.parameter, np.where(stable, branch.amplitude, np.nan), "C0-", label="stable")
    for word, style, jumps in (("rising", "C1v-", response.jumps_down), ("falling", "C2^--", response.jumps_up)):
        for j in jumps:
            ends = ([j.parameter, j.parameter], [j.from_amplitude, j.to_amplitude])
            axes.plot(*ends, style, markevery=[1], linewidth=1.2, label=f"jump, {word} sweep")
    a = result.symbols.a[0]
    levels = np.linspace(0, 2.1, 60)
    free = sp.lambdify(a, ms.backbone(result).subs({k: x for k, x in values.items() if k != f}), "numpy")
    axes.plot(free(levels), levels, "k--", linewidth=1, label="free vibration")
    rows = np.array([settled(w, 1.6 if w < 1.0281 else 0.1) for w in np.linspace(0.982, 1.058, 13)])
    axes.plot(rows[:, 0], rows[:, 1], "k.", label="equation, integrated")
    axes.set(xlabel="drive frequency Ω (rad per unit of time)", ylabel="amplitude of the fundamental (unit of u)")
    axes.legend(loc="upper left", fontsize=8)


def settled(frequency: float, start: float) -> tuple[float, float]:
    """(Ω, amplitude of the fundamental) of the driven oscillator after its transient."""

    def rate(time: float, y: Any) -> list[float]:
        return [y[1], -y[0] - 0.02 * (0.3 * y[1] + y[0] ** 3 - 0.6 * np.cos(frequency * time))]

    period = 2 * np.pi / frequency
    times = 400 * period + np.linspace(0, period, 65)
    motion = integrated(rate, [0.0, start], np.concatenate([[0.0], times]))[0, 1:-1]
    return frequency, float(2 * abs(np.mean(motion * np.exp(-1j * frequency * times[:-1]))))


def tongues(axes: Any) -> None:
    """Boundaries to order 6 with those on which the trace of the monodromy matrix is ±2."""
    small = np.linspace(0, 1.5, 60)
    checked = np.array([0.4, 0.8, 1.2])
    for n, (colour, style) in enumerate((("C0", "-"), ("C1", "--"), ("C2", "-."))):
        for k, boundary in enumerate(ms.transition_curves(MATHIEU, delta, order=6, tongue=n)):
            curve = sp.lambdify(eps, boundary, "numpy")
            axes.plot(curve(small), small, color=colour, linestyle=style, label="" if k else f"tongue {n}")
            exact = [brentq(off_boundary, curve(e) - 0.02, curve(e) + 0.02, args=(e, n), xtol=1e-6) for e in checked]
            axes.plot(exact, checked, "k.", label="monodromy matrix" if n == 2 and k else "")
    axes.set(xlabel="δ (square of the natural frequency, drive frequency 2)", ylabel="ε", ylim=(0, 1.5))
    axes.legend(loc="lower center", bbox_to_anchor=(0.66, 0.02), fontsize=8)


def off_boundary(square: float, small: float, tongue: int) -> float:
    """Trace of the monodromy matrix over π less its value on the boundaries of a tongue."""
    done = [
        solve_ivp(
            lambda z, y: [y[1], -(square + 2 * small * np.cos(2 * z)) * y[0]], (0, np.pi), y, rtol=1e-9, atol=1e-11
        ).y[:, -1]
        for y in ([1.0, 0.0], [0.0, 1.0])
    ]
    return float(done[0][0] + done[1][1] - 2 * (-1) ** tongue)


def exchange(axes: Any) -> None:
    """Amplitudes of the resonance 1:2 from rest of the second mode, and the motion of that mode."""
    equations = [u.diff(t, 2) + w1**2 * u + 2 * eps * alpha * u * v, v.diff(t, 2) + w2**2 * v + eps * alpha * u**2]
    result = ms.expand(ms.Problem(equations, [u, v], small=eps, resonances={w2: 2 * w1 + eps * sigma}), 3)
    values = {eps: 0.05, alpha: 1.0, w1: 1.0, sigma: 0.05}
    times = np.linspace(0, 420, 4201)
    start = ms.initial_state(result, {u: 1.0, u.diff(t): 0.0, v: 0.02, v.diff(t): 0.0}, values)
    slow = integrated(result.slow_flow.to_numpy().bind(values), start, times)

    def rate(_: float, y: Any) -> list[float]:
        return [y[1], -y[0] - 0.1 * y[0] * y[2], y[3], -((2 + 0.05 * 0.05) ** 2) * y[2] - 0.05 * y[0] ** 2]

    full = integrated(rate, [1.0, 0.0, 0.02, 0.0], times)
    axes.plot(times, full[2], color="0.7", linewidth=0.8, label="v, equations integrated")
    axes.plot(times, np.hypot(*slow[:2]), "C0-", label="amplitude a₁ of u")
    axes.plot(times, np.hypot(*slow[2:]), "C1--", label="amplitude a₂ of v")
    axes.set(xlabel="time (radians of the first mode)", ylabel="amplitude, displacement", ylim=(-0.55, 1.45))
    axes.legend(loc="upper center", fontsize=8)


def measured_orders(axes: Any) -> None:
    """Largest error of the motion on 0 ≤ t ≤ 1.5/ε for three orders, and with one coefficient of the equation wrong."""
    problem = ms.Problem(u.diff(t, 2) + u + eps * (2 * mu * u.diff(t) + alpha * u**3), u, small=eps)
    start, small = {u: 1.0, u.diff(t): 0.0}, (0.08, 0.04, 0.02, 0.01)
    for n, mark in ((1, "o"), (2, "s"), (3, "^")):
        found = ms.compare(ms.expand(problem, n), {mu: 0.2, alpha: 1.0}, start, small, horizon=1.5)
        axes.loglog(found.small_values, found.errors, f"C{n}{mark}", label=f"order {n}: observed {found.order:.2f}")
        slope = found.errors[-1] * (np.array(small) / small[-1]) ** n
        axes.loglog(small, slope, f"C{n}:", linewidth=1)
    axes.set(xlabel="ε", ylabel="largest relative error of the motion")
    axes.legend()


FIGURES: dict[str, Callable[[Any], None]] = {
    "tour_response.png": tour_response,
    "decay.png": decay,
    "beyond_the_radius.png": beyond_the_radius,
    "driven_response.png": driven_response,
    "tongues.png": tongues,
    "exchange.png": exchange,
    "measured_orders.png": measured_orders,
}


def write(folder: Path, names: Any = FIGURES) -> list[Path]:
    from matplotlib.figure import Figure

    folder.mkdir(parents=True, exist_ok=True)
    written = []
    for name in names:
        canvas = Figure(figsize=(6.4, 4.0), layout="constrained")
        FIGURES[name](canvas.subplots())
        written.append(folder / name)
        canvas.savefig(written[-1], dpi=120)
    return written


if __name__ == "__main__":
    place = Path(sys.argv[1]) if len(sys.argv) > 1 else Path(__file__).parent.parent / "figures"
    print(*write(place), sep="\n")
