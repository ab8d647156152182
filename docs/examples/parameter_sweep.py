"""A frequency response over two parameters, on the cores of one machine or the workers of a cluster.

The resonator is that of `drive_level_study`, invented for illustration; swept are the drive frequency and the force.
An expansion is computed once, travels to the workers as data, and every row (all frequencies at one force) is one task:

    python docs/examples/parameter_sweep.py          one process after the other
    python docs/examples/parameter_sweep.py joblib   two processes (needs joblib)
    python docs/examples/parameter_sweep.py dask     two workers of a local cluster (needs dask.distributed)

On a cluster of several machines only the address in `on_dask` changes.
"""

from __future__ import annotations

import sys

import numpy as np
import sympy as sp

import multiscale as ms

t = sp.Symbol("t", real=True)
m, c, k1, k2, k3, F, Omega, sigma = sp.symbols("m c k_1 k_2 k_3 F Omega sigma", positive=True)
x = sp.Function("x")(t)

# SI units: kg, N s/m, N/m, N/m², N/m³; force in newton, detuning in rad/s.
PARAMETERS = {"m": 1.8e-11, "c": 1.1e-8, "k_1": 700.0, "k_2": 5.0e7, "k_3": 2.0e13}
FORCES = np.linspace(2.0e-9, 16.0e-9, 8)
DETUNINGS = np.linspace(-2000.0, 8000.0, 81)


def expansion(order: int = 2) -> ms.Expansion:
    motion = m * x.diff(t, 2) + c * x.diff(t) + k1 * x + k2 * x**2 + k3 * x**3 - F * sp.cos(Omega * t)
    orders = {x: 1, c: 2, F: 3, sigma: 2}
    return ms.expand(ms.Problem(motion, x, ordering=orders, resonances={Omega: sp.sqrt(k1 / m) + sigma}), order)


def row(result: ms.Expansion, force: float) -> np.ndarray:
    """The largest stable amplitude in metres at every detuning, for one force."""
    response = ms.frequency_response(result, PARAMETERS | {"F": force}, sweep={"sigma": DETUNINGS})
    found = np.zeros(len(DETUNINGS))
    for branch in response.branches:
        place = np.searchsorted(DETUNINGS, branch.parameter).clip(max=len(DETUNINGS) - 1)
        kept = branch.stable & ~branch.spurious & (DETUNINGS[place] == branch.parameter)
        np.maximum.at(found, place[kept], branch.amplitude[kept])
    return found


def serially(result: ms.Expansion) -> np.ndarray:
    return np.array([row(result, force) for force in FORCES])


def on_joblib(result: ms.Expansion, jobs: int = 2) -> np.ndarray:
    from joblib import Parallel, delayed

    return np.array(Parallel(n_jobs=jobs)(delayed(row)(result, force) for force in FORCES))


def on_dask(result: ms.Expansion, workers: int = 2) -> np.ndarray:
    from dask.distributed import Client, LocalCluster

    with (
        LocalCluster(n_workers=workers, threads_per_worker=1, dashboard_address=None) as cluster,
        Client(cluster) as client,
    ):
        shared = client.scatter(result, broadcast=True)
        return np.array(client.gather(client.map(row, [shared] * len(FORCES), FORCES.tolist())))


def main(where: str = "serially") -> None:
    amplitudes = {"serially": serially, "joblib": on_joblib, "dask": on_dask}[where](expansion())
    print("force in nN, largest amplitude in nm, at a detuning in rad/s")
    for force, line in zip(FORCES, amplitudes, strict=True):
        top = int(line.argmax())
        print(f"{force * 1e9:8.1f} {line[top] * 1e9:10.1f} {DETUNINGS[top]:10.0f}")


if __name__ == "__main__":
    main(*sys.argv[1:2])
