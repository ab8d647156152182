"""Drive-level study of the invented timing resonator: how its response bends, where it jumps, what drive it bears.

    m x'' + c x' + k_1 x + k_2 x² + k_3 x³ = F cos Ωt

The resonator and its numbers are those of `timing_resonator`, invented for illustration. Run it with
``python docs/examples/drive_level_study.py``; the figures of the page are written to ``docs/figures`` (or the folder
given) where Matplotlib is installed.
"""

from __future__ import annotations

import sys
from importlib.util import find_spec
from math import pi, sqrt
from pathlib import Path

import numpy as np
import sympy as sp

import multiscale as ms

t = sp.Symbol("t", real=True)
m, c, k1, k2, k3, F, Omega, sigma = sp.symbols("m c k_1 k_2 k_3 F Omega sigma", positive=True)
x = sp.Function("x")(t)

# SI units: kg, N s/m, N/m, N/m², N/m³.
PARAMETERS = {m: 1.8e-11, c: 1.1e-8, k1: 700.0, k2: 5.0e7, k3: 2.0e13}
NATURAL = sqrt(PARAMETERS[k1] / PARAMETERS[m])
FORCES = (2.0e-9, 5.0e-9, 10.0e-9, 20.0e-9)  # newton


def expansion(order: int = 4) -> ms.Expansion:
    """Damping, drive and detuning act at the level of the cubic stiffness."""
    motion = m * x.diff(t, 2) + c * x.diff(t) + k1 * x + k2 * x**2 + k3 * x**3 - F * sp.cos(Omega * t)
    orders = {x: 1, c: 2, F: 3, sigma: 2}
    return ms.expand(ms.Problem(motion, x, ordering=orders, resonances={Omega: sp.sqrt(k1 / m) + sigma}), order)


def response(result: ms.Expansion, force: float, points: int = 201) -> ms.Response:
    """Frequency response in the detuning σ (rad/s) at one force, wide enough to hold the peak."""
    linear = force / (PARAMETERS[c] * NATURAL)
    width = PARAMETERS[c] / PARAMETERS[m]
    peak = float(backbone_shift(result, linear))
    grid = np.linspace(-4 * width, 1.3 * peak + 4 * width, points)
    return ms.frequency_response(result, PARAMETERS | {F: force}, sweep={sigma: grid})


def backbone_shift(result: ms.Expansion, amplitude: float | np.ndarray) -> float | np.ndarray:
    """Shift of the free frequency in rad/s at an amplitude in metres, from the expansion."""
    a = result.symbols.a[0]
    shift = sp.lambdify(a, ms.backbone(result).subs({result.problem.small: 1}).subs(PARAMETERS) - NATURAL, "numpy")
    return shift(amplitude)


def table(result: ms.Expansion) -> str:
    """For each force: peak amplitude, frequency pulling at the peak, and the interval with two stable motions."""
    rows = ["force (nN)  peak (nm)  pulling (ppm)  two stable motions between (Hz from rest)"]
    for force in FORCES:
        found = response(result, force)
        peak = found.peak()
        folds = sorted(point.parameter / (2 * pi) for point in found.folds)
        interval = f"{folds[0]:.1f} … {folds[-1]:.1f}" if folds else "none"
        rows.append(
            f"{force * 1e9:10.0f} {peak.amplitude * 1e9:10.1f} {peak.parameter / NATURAL * 1e6:14.2f}  {interval}"
        )
    return "\n".join(rows)


def figures(result: ms.Expansion, folder: Path) -> list[Path]:
    """Response at each force with the backbone, and pulling against force."""
    import matplotlib

    matplotlib.use("Agg")
    import matplotlib.pyplot as plt

    folder.mkdir(parents=True, exist_ok=True)
    axes = plt.figure(figsize=(6.4, 4.4)).add_subplot()
    for k, force in enumerate(FORCES):
        for branch in response(result, force).branches:
            detuning, amplitude = branch.parameter / (2 * pi), branch.amplitude * 1e9
            axes.plot(detuning, amplitude, color=f"C{k}", linestyle=":")
            axes.plot(
                detuning, np.where(branch.stable, amplitude, np.nan), color=f"C{k}", label=f"{force * 1e9:.0f} nN"
            )
    levels = np.linspace(0, 300e-9, 100)
    axes.plot(backbone_shift(result, levels) / (2 * pi), levels * 1e9, "k--", linewidth=1, label="backbone")
    axes.set(
        xlabel="detuning (Hz)", ylabel="amplitude (nm)", title="Invented timing resonator: response by drive level"
    )
    axes.legend()
    first = folder / "drive_level_response.png"
    axes.figure.savefig(first, dpi=120, bbox_inches="tight")
    plt.close(axes.figure)
    return [first, _pulling_figure(result, folder, plt)]


def _pulling_figure(result: ms.Expansion, folder: Path, plt: object) -> Path:
    axes = plt.figure(figsize=(6.4, 3.6)).add_subplot()  # type: ignore[attr-defined]
    forces = np.linspace(0.5e-9, FORCES[-1], 24)
    peaks = [response(result, float(force), 121).peak() for force in forces]
    axes.plot(forces * 1e9, [p.parameter / NATURAL * 1e6 for p in peaks])
    axes.set(xlabel="force (nN)", ylabel="pulling at the peak (ppm)")
    path = folder / "drive_level_pulling.png"
    axes.figure.savefig(path, dpi=120, bbox_inches="tight")
    plt.close(axes.figure)  # type: ignore[attr-defined]
    return path


def main() -> None:
    result = expansion()
    onset = ms.critical_drive(result, PARAMETERS, drive=F, detuning=sigma)
    print(
        f"Natural frequency {NATURAL / (2 * pi):.1f} Hz, quality factor {NATURAL * PARAMETERS[m] / PARAMETERS[c]:.0f}"
    )
    print("Effective cubic stiffness:", ms.effective_cubic(result))
    print(f"Two stable motions from {onset.drive * 1e9:.3f} nN on (amplitude {onset.amplitude * 1e9:.1f} nm)\n")
    print(table(result))
    if find_spec("matplotlib"):
        folder = Path(sys.argv[1]) if len(sys.argv) > 1 else Path(__file__).parent.parent / "figures"
        print("\nfigures:", *(str(path) for path in figures(result, folder)))


if __name__ == "__main__":
    main()
