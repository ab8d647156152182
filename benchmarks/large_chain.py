"""Large models: chains and nets of masses reduced to one mode or two.

Compared, in rounds: the whole reduction, and what any modal method needs before it begins, the carried modes by
SciPy's `eigsh` (shift-invert Lanczos), which is the unit that grows with size as sparse solves do. Beside each ratio
stands the share of time spent in the sparse solver (finding the modes, factorising, solving).

Then, where the dense route can follow: a chain of six masses through `Problem.from_matrices` and `expand`, whose
coefficients are checked to agree, against `reduce_model`.
"""

from __future__ import annotations

import runpy
from pathlib import Path
from typing import Any

import numpy as np
import scipy.sparse as sparse
import sympy as sp

import multiscale as ms
from benchmarks.report import Result, against
from benchmarks.timing import empty_sympy_cache, in_turns

EXAMPLE = Path(__file__).parent.parent / "docs" / "examples" / "large_chain.py"
SMALL = 6
ORDER = 3
CASES = [("chain", 1_000, 3), ("chain", 10_000, 3), ("chain", 10_000, 5), ("net", 10_000, 3), ("net", 10_000, 5)]


def _modes(model: tuple[Any, Any, Any]) -> None:
    from scipy.sparse.linalg import eigsh

    mass, stiffness, _ = model
    eigsh(stiffness.tocsc(), k=1, M=mass.tocsc(), sigma=0.0, v0=np.ones(stiffness.shape[0]))


def run() -> list[Result]:
    example = runpy.run_path(str(EXAMPLE))
    results = []
    for name, n, order in CASES:
        model = example[name](n)
        rounds = in_turns(
            {
                "library": lambda model=model, order=order: example["reduced"](model, order),
                "opponent": lambda model=model: _modes(model),
            },
            repeats=5,
            prepare=empty_sympy_cache,
        )
        share = example["timed"](model, order)[1]
        told = f"{100 * share:.0f} % of it in the sparse solver"
        results.append(against(f"{name}, n = {n}, order {order}: in units of finding the mode", rounds, note=told))
    return [*results, _against_dense()]


def _against_dense() -> Result:
    rng = np.random.default_rng(1)
    b = sparse.diags([1.0, -1.0], [0, -1], shape=(SMALL + 1, SMALL)).toarray()
    stiffness = b.T @ b + 0.3 * np.diag(rng.uniform(0.5, 1.0, SMALL))
    cubic = np.einsum("si,sj,sk,sl->ijkl", b, b, b, b)
    unknowns = [sp.Function(f"u_{k + 1}")(sp.Symbol("t", real=True)) for k in range(SMALL)]

    def dense() -> ms.Expansion:
        problem = ms.Problem.from_matrices(
            M=np.eye(SMALL), K=stiffness, cubic=cubic, modes=[0], references={0: unknowns[0]}
        )
        return ms.expand(problem, ORDER, tolerance=1e-3)

    def large() -> ms.Expansion:
        springs = ms.Springs(b, cubic=1.0)
        return ms.reduce_model(np.eye(SMALL), stiffness, springs=springs, order=ORDER, references={0: 0}).expansion

    state = [0.4, 0.3]
    one, other = (x().slow_flow.to_numpy().bind(epsilon=0.3)(0.0, state) for x in (dense, large))
    if not np.allclose(one, other, rtol=1e-10, atol=0.0):
        raise RuntimeError("the dense and the sparse route disagree")
    rounds = in_turns({"library": large, "opponent": dense}, repeats=5, prepare=empty_sympy_cache)
    return against(f"chain, n = {SMALL}, order {ORDER}: by expand of the same matrices", rounds, sense="times faster")
