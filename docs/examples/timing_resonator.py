"""A timing resonator: how far does its frequency move with the drive level?

A resonating beam in an oscillator loop keeps time; its stiffness is slightly nonlinear, so the frequency depends on the
amplitude. All numbers here are invented for illustration:

    m x'' + c x' + k_1 x + k_2 x² + k_3 x³ = 0

    m   = 18 pkg     effective mass              k_1 = 700 N/m       linear stiffness
    c   = 11 nN s/m  viscous damping (Q ≈ 10⁴)   k_2 = 50 N/m per µm  from asymmetry
                                                 k_3 = 20 N/m per µm² from stretching

Run it with ``python docs/examples/timing_resonator.py``; a figure is written where Matplotlib is installed.
"""

from __future__ import annotations

from importlib.util import find_spec
from math import pi, sqrt

import mpmath as mp
import numpy as np
import sympy as sp

import multiscale as ms

t = sp.Symbol("t", real=True)
m, c, k1, k2, k3 = sp.symbols("m c k_1 k_2 k_3", positive=True)
x = sp.Function("x")(t)

# SI units: kg, N s/m, N/m, N/m², N/m³.
PARAMETERS = {m: 1.8e-11, c: 1.1e-8, k1: 700.0, k2: 5.0e7, k3: 2.0e13}
DRIVE_LEVELS = np.array([2.0, 5.0, 10.0, 20.0, 30.0, 40.0]) * 1e-9  # newton


def expansion(order: int) -> ms.Expansion:
    """The displacement is small of order 1 and the damping of order 2, so both act at the same level as k_3."""
    motion = m * x.diff(t, 2) + c * x.diff(t) + k1 * x + k2 * x**2 + k3 * x**3
    return ms.expand(ms.Problem(motion, x, ordering={x: 1, c: 2}), order)


def amplitudes(drive: np.ndarray) -> np.ndarray:
    """Amplitude in m that an oscillator loop sustains at resonance with a force of the given amplitude in N."""
    frequency = sqrt(PARAMETERS[k1] / PARAMETERS[m])
    return drive / (PARAMETERS[c] * frequency)


def pulling(result: ms.Expansion, amplitude: np.ndarray) -> np.ndarray:
    """Relative frequency shift in parts per million at the given amplitudes of the fundamental, in m."""
    frequency = result.frequency_to_numpy().bind(PARAMETERS)
    at_rest = frequency(0.0, np.zeros(2))
    return 1e6 * (frequency(0.0, np.array([amplitude, np.zeros_like(amplitude)])) / at_rest - 1)


def exact_pulling(result: ms.Expansion, amplitude: float) -> float:
    """The same from the energy integral of the undamped resonator, at the peak that belongs to this amplitude."""
    top = mp.mpf(float(result.to_numpy().bind(PARAMETERS)(0.0, [amplitude, 0.0])[0]))
    quadratic, cubic = top * PARAMETERS[k2] / PARAMETERS[k1], top**2 * PARAMETERS[k3] / PARAMETERS[k1]

    def potential(y: mp.mpf) -> mp.mpf:
        """Potential energy at y times the peak, in units of k_1 · peak²."""
        return y**2 / 2 + quadratic * y**3 / 3 + cubic * y**4 / 4

    bottom = mp.findroot(lambda y: potential(y) - potential(1), -1)
    middle, half = (1 + bottom) / 2, (1 - bottom) / 2

    def time(angle: mp.mpf) -> mp.mpf:
        y = middle + half * mp.sin(angle)
        return half * mp.cos(angle) / mp.sqrt(2 * (potential(1) - potential(y)))

    period = 2 * mp.quad(time, [-mp.pi / 2, 0, mp.pi / 2], method="gauss-legendre")
    return float(1e6 * (2 * mp.pi / period - 1))


def table() -> str:
    """Drive level, amplitude and frequency pulling, at two orders and exactly."""
    second, fourth = expansion(2), expansion(4)
    levels = amplitudes(DRIVE_LEVELS)
    rows = ["drive force  amplitude     pulling in ppm", "       (nN)       (nm)   order 2   order 4     exact"]
    for force, a, low, high in zip(DRIVE_LEVELS, levels, pulling(second, levels), pulling(fourth, levels), strict=True):
        rows.append(f"{force * 1e9:11.0f} {a * 1e9:10.1f} {low:9.2f} {high:9.2f} {exact_pulling(fourth, a):9.2f}")
    return "\n".join(rows)


def figure(path: str) -> None:
    """Frequency pulling against drive level."""
    import matplotlib

    matplotlib.use("Agg")
    import matplotlib.pyplot as plt

    force = np.linspace(0, DRIVE_LEVELS[-1], 200)
    axes = plt.figure(figsize=(6, 4)).add_subplot()
    axes.plot(force * 1e9, pulling(expansion(2), amplitudes(force)), label="order 2")
    axes.plot(force * 1e9, pulling(expansion(4), amplitudes(force)), "--", label="order 4")
    axes.set(xlabel="drive force (nN)", ylabel="frequency pulling (ppm)", title="Invented timing resonator")
    axes.legend()
    axes.figure.savefig(path, dpi=120, bbox_inches="tight")
    plt.close(axes.figure)


def main() -> None:
    result = expansion(2)
    print("Equation of motion:", sp.Eq(result.problem.equations[0], 0))
    print(f"\nFrequency at rest: {sqrt(PARAMETERS[k1] / PARAMETERS[m]) / (2 * pi) / 1e6:.4f} MHz")
    for power, correction in enumerate(result.frequency_corrections()):
        print(f"  frequency correction of order {power}: {correction}")
    print(f"\nSlow flow to second order ({result.problem.small} = 1 counts orders; a: amplitude of the fundamental):")
    for variable, rate in result.slow_flow.polar.items():
        print(f"  d{variable}/dt = {rate}")
    print("\n" + table())
    for remark in result.warnings:
        print("Note:", remark)
    if find_spec("matplotlib"):
        figure("timing_resonator.png")
        print("\nFigure written to timing_resonator.png")


if __name__ == "__main__":
    main()
