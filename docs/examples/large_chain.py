"""A chain and a net of thousands of masses, reduced to one mode: what it costs, and what the other modes do.

All numbers are invented for illustration. A chain of n masses is a string of unit length, tension and density cut into
n + 1 springs, on an elastic foundation, its springs slightly nonlinear:

    h u_j'' + κ h u_j + N(u_j − u_{j−1}) − N(u_{j+1} − u_j) = 0,
    N(e) = e/h + ε k_2 h (e/h)² + ε² k_3 h (e/h)³,      h = 1/(n + 1)

A net is the same in two directions, n masses in all, the second direction with more tension. The foundation κ keeps
2ω_1, 3ω_1, … away from the other natural frequencies; without it ω_3 = 3ω_1 to within the discretisation, and the
library says so.

Run it with ``python docs/examples/large_chain.py``; a figure is written where Matplotlib is installed.
"""

from __future__ import annotations

import warnings
from importlib.util import find_spec
from math import isqrt
from pathlib import Path
from time import thread_time

import numpy as np
import scipy.sparse as sparse

import multiscale as ms

FIGURES = Path(__file__).resolve().parent.parent / "figures"
SIZES = (100, 1_000, 10_000, 100_000)
COMPARED = 10_000
ORDERS = (1, 2, 3, 4, 5)
FOUNDATION = 7.3


def stretches(n: int) -> sparse.csr_matrix:
    """Elongations of the n + 1 springs between walls."""
    return sparse.diags([1.0, -1.0], [0, -1], shape=(n + 1, n)).tocsr()


def chain(n: int, k2: float = 0.3, k3: float = 0.5) -> tuple:
    """(M, K, springs) of n masses in a row."""
    h = 1 / (n + 1)
    b, one = stretches(n), sparse.identity(n)
    return h * one, b.T @ b / h + FOUNDATION * h * one, ms.Springs(b / h, quadratic=k2 * h, cubic=k3 * h)


def net(n: int, k2: float = 0.3, k3: float = 0.5) -> tuple:
    """(M, K, springs) of n masses in a square; n is rounded down to a square number."""
    side = isqrt(n)
    h = 1 / (side + 1)
    b, row, one = stretches(side), sparse.identity(side), sparse.identity(side * side)
    both = sparse.vstack([sparse.kron(b, row), sparse.kron(row, 1.2 * b)]).tocsr()
    stiffness = both.T @ both + FOUNDATION * h**2 * one
    return h**2 * one, stiffness, ms.Springs(both / h, quadratic=k2 * h**2, cubic=k3 * h**2)


def reduced(model: tuple, order: int, modes: tuple[int, ...] = (0,)) -> ms.ReducedModel:
    """One model to one order. Nearness is looked for closely: these models have many modes."""
    mass, stiffness, springs = model
    with warnings.catch_warnings():
        # Order 1 is timed too, although quadratic springs shift the frequency from order 2 on.
        warnings.simplefilter("ignore", ms.OrderingWarning)
        return ms.reduce_model(mass, stiffness, springs=springs, order=order, modes=modes, tolerance=1e-5)


def timed(model: tuple, order: int, modes: tuple[int, ...] = (0,)) -> tuple[float, float]:
    """(seconds, share of them in the sparse solver: finding the modes, factorising, solving), the quickest of a few.

    Seconds are processor time of this thread, so that other work on the machine does not count.
    """
    rows = []
    for _ in range(5 if model[1].shape[0] <= COMPARED else 1):
        start = thread_time()
        watch = reduced(model, order, modes).timing
        total = thread_time() - start
        rows.append((total, (watch.finding + watch.factoring + watch.solving + watch.examining) / total))
    return min(rows)


def effective(model: tuple) -> tuple[float, float]:
    """The second-order shift of frequency at unit amplitude: of the reduced model, and of the first mode alone.

    The latter leaves the other modes out; with quadratic springs the difference is of leading order.
    """
    mass, _, springs = model
    whole = reduced(model, 2)
    symbol = whole.expansion.symbols.a[0]
    shift = float(whole.expansion.frequency_corrections()[2].subs(symbol, 1))
    mode = whole.modes[0]
    elongation = springs.elongation @ mode.shape
    modal = mode.shape @ (mass @ mode.shape)
    a2 = np.sum(springs.quadratic * elongation**3) / modal
    a3 = np.sum(springs.cubic * elongation**4) / modal
    w = mode.frequency
    return shift, 3 * a3 / (8 * w) - 5 * a2**2 / (12 * w**3)


CASES = {"chain, one mode": (chain, (0,)), "chain, two modes": (chain, (0, 1)), "net, one mode": (net, (0,))}


def measured() -> dict[str, dict[tuple[int, int], tuple[float, float]]]:
    """{model: {(n, order): (seconds, share)}}: orders 3 and 5 at every size, every order at one of them."""
    wanted = sorted({(n, order) for n in SIZES for order in (3, 5)} | {(COMPARED, order) for order in ORDERS})
    return {
        name: {(n, order): timed(build(n), order, modes) for n, order in wanted}
        for name, (build, modes) in CASES.items()
    }


def figures(results: dict, folder: Path = FIGURES) -> list[Path]:
    """Time against size and order, and the share of the sparse solver."""
    from matplotlib.figure import Figure

    figure = Figure(figsize=(10, 3.4), layout="constrained")
    size, order, share = figure.subplots(1, 3)
    sizes = sorted({n for table in results.values() for n, _ in table})
    for k, (name, table) in enumerate(results.items()):
        for n, line in ((3, "--"), (5, "-")):
            seconds, shares = np.array([table[x, n] for x in sizes]).T
            size.loglog(sizes, seconds, f"C{k}o{line}", label=f"{name}, order {n}", markersize=4)
            share.semilogx(sizes, 100 * shares, f"C{k}o{line}", markersize=4)
        orders = [m for n, m in sorted(table) if n == COMPARED]
        order.plot(orders, [table[COMPARED, n][0] for n in orders], f"C{k}o-", label=name, markersize=4)
    size.set(xlabel="degrees of freedom n", ylabel="seconds (processor)", title="time against size")
    order.set(
        xlabel="order",
        ylabel="seconds (processor)",
        ylim=(0, None),
        title=f"time against order, n = {COMPARED}",
        xticks=ORDERS,
    )
    share.set(xlabel="degrees of freedom n", ylabel="%", ylim=(0, 100), title="share of the sparse solver")
    size.legend(fontsize=7)
    order.legend(fontsize=7)
    folder.mkdir(parents=True, exist_ok=True)
    path = folder / "large_chain_cost.png"
    figure.savefig(path, dpi=120)
    return [path]


def main() -> None:
    shift, alone = effective(chain(1_000))
    print(f"shift of frequency at unit amplitude, in ε²: {shift:.6g}; of the first mode alone: {alone:.6g}")
    model = reduced(chain(10_000), 3)
    print(model, "\nresidual falls like ε to the", [round(x, 2) for x in model.certify().exponents])
    results = measured()
    for name, table in results.items():
        for (n, order), (seconds, share) in table.items():
            print(f"{name}, n = {n}, order {order}: {seconds:.3g} s, {100 * share:.0f} % in the sparse solver")
    if find_spec("matplotlib"):
        print(*figures(results))


if __name__ == "__main__":
    main()
