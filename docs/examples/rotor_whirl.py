"""Unbalance response of a rotor through its forward whirl, with bearings that stiffen.

    x'' + G y' + x + ε (2μx' + αx(x² + y²)) = ε e Ω² cos Ωt
    y'' − G x' + y + ε (2μy' + αy(x² + y²)) = ε e Ω² sin Ωt

A disc on an isotropic shaft: G is its gyroscopic moment, e the unbalance, α the stiffening of the bearings. With
z = x + iy the undamped linear rotor has z'' − iGz' + z = 0, a forward whirl at ½(√(G² + 4) + G) and a backward one at
½(√(G² + 4) − G). The unbalance turns forward and excites the forward whirl only.

Circular whirl z = r e^{i(Ωt − γ)} is an exact solution, which is what the expansion is compared with:

    [(1 + GΩ − Ω² + εαr²)² + (2εμΩ)²] r² = (εeΩ²)²

All numbers are invented for illustration. This is a model of two coordinates, no assessment of a machine: for rotors
that can hurt someone, local codes and licensed practice decide.

Run it with ``python docs/examples/rotor_whirl.py`` (needs SciPy).
"""

from __future__ import annotations

import numpy as np
import sympy as sp

import multiscale as ms

t = sp.Symbol("t", real=True)
eps, G, mu, alpha, e, Omega = sp.symbols("epsilon G mu alpha e Omega", positive=True)
sigma = sp.Symbol("sigma", real=True)
forward = sp.Symbol("omega_2", positive=True)
x, y = sp.Function("x")(t), sp.Function("y")(t)

VALUES = {"epsilon": 0.02, "G": 0.4, "mu": 1.0, "alpha": 4.0, "e": 1.8}
DETUNINGS = np.linspace(-2.0, 5.0, 15)


def rotor(modes: list[int] | None = None) -> ms.Problem:
    square = x**2 + y**2
    equations = [
        x.diff(t, 2)
        + G * y.diff(t)
        + x
        + eps * (2 * mu * x.diff(t) + alpha * x * square)
        - eps * e * Omega**2 * sp.cos(Omega * t),
        y.diff(t, 2)
        - G * x.diff(t)
        + y
        + eps * (2 * mu * y.diff(t) + alpha * y * square)
        - eps * e * Omega**2 * sp.sin(Omega * t),
    ]
    return ms.Problem(equations, [x, y], small=eps, resonances={Omega: forward + eps * sigma}, modes=modes)


def exact_radii(detuning: float) -> list[float]:
    """The radii of circular whirl at a detuning, from the cubic in r²."""
    v = VALUES
    speed = (np.sqrt(v["G"] ** 2 + 4) + v["G"]) / 2 + v["epsilon"] * detuning
    stiff, damped = 1 + v["G"] * speed - speed**2, 2 * v["epsilon"] * v["mu"] * speed
    hard, force = v["epsilon"] * v["alpha"], v["epsilon"] * v["e"] * speed**2
    roots = np.roots([hard**2, 2 * stiff * hard, stiff**2 + damped**2, -(force**2)])
    return sorted(float(np.sqrt(r.real)) for r in roots if abs(r.imag) < 1e-9 and r.real > 0)


def response(order: int) -> dict[float, list[tuple[float, bool]]]:
    """{σ: (amplitude, stable) of every steady forward whirl}; the backward one, which nothing excites, is left out."""
    expansion = ms.expand(rotor(modes=[1]), order)
    found = {}
    for detuning in DETUNINGS:
        states = ms.equilibria(expansion, VALUES | {"sigma": float(detuning)})
        found[float(detuning)] = sorted((s.amplitudes[0], s.stable) for s in states if not s.spurious)
    return found


def main() -> None:
    backward_mode, forward_mode = ms.expand(rotor(), 1).modes
    for name, mode in (("backward", backward_mode), ("forward", forward_mode)):
        print(f"{name} whirl: frequency {mode.frequency}, y/x = {mode.shape[y]}")
    first, second = response(1), response(2)
    print("\n  sigma   exact            order 1          order 2 (amplitudes; * unstable)")
    for detuning, states in second.items():
        columns = [" ".join(f"{r:.4f}" for r in exact_radii(detuning))]
        columns += [" ".join(f"{r:.4f}{'' if s else '*'}" for r, s in part) for part in (first[detuning], states)]
        print(f"{detuning:7.2f}   " + "   ".join(f"{c:24s}" for c in columns))


if __name__ == "__main__":
    main()
