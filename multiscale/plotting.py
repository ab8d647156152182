"""Plots; Matplotlib is optional."""

from __future__ import annotations

from itertools import groupby, pairwise
from typing import TYPE_CHECKING, Any

import numpy as np
import sympy as sp

if TYPE_CHECKING:
    from matplotlib.axes import Axes

    from multiscale.checks.comparison import Comparison
    from multiscale.checks.validity import Validity
    from multiscale.response.steady.frequency_response import Response

__all__ = ["plot_comparison", "plot_response", "plot_validity"]

STABLE = {"color": "#1b5e8a", "linestyle": "-"}
UNSTABLE = {"color": "#c06a2b", "linestyle": "--"}
SPURIOUS = {"color": "#999999", "linestyle": ":"}
LIMIT: dict[str, Any] = {"color": "#444444", "linewidth": 0.8}


def _axes(ax: Axes | None) -> Axes:
    """The given axes, or new ones."""
    try:
        from matplotlib import pyplot
    except ImportError:
        raise ImportError(
            "plot needs Matplotlib, which is not installed: pip install 'multiscale-expansions[plot]'"
        ) from None
    return pyplot.subplots(layout="constrained")[1] if ax is None else ax


def plot_response(response: Response, ax: Axes | None = None, mode: int = 0) -> Axes:
    """Amplitude over the swept parameter: stable full, unstable dashed, artefacts of the truncation dotted."""
    ax = _axes(ax)
    named: set[str] = set()
    for branch in response.branches:
        amplitude = branch.amplitude if branch.amplitude.ndim == 1 else branch.amplitude[mode]
        style = np.where(branch.spurious, "truncation only", np.where(branch.stable, "stable", "unstable"))
        # A piece belongs to the style of its less stable end, so that pieces of one style are drawn in one stroke; one
        # that ends at a fold to that of its other end, so that the style changes at the fold itself.
        pieces = [_worse(str(a), str(b)) for a, b in pairwise(style)]
        for k in branch.folds:
            pieces[k - 1], pieces[k] = str(style[k - 1]), str(style[k + 1])
        for name, group in groupby(range(len(pieces)), key=pieces.__getitem__):
            run = list(group)
            part = slice(run[0], run[-1] + 2)
            look: dict[str, Any] = {"stable": STABLE, "unstable": UNSTABLE, "truncation only": SPURIOUS}[name]
            look = look if name in named else look | {"label": name}
            ax.plot(branch.parameter[part], amplitude[part], **look)
            named.add(name)
    ax.set_xlabel(f"${sp.latex(response.symbol)}$")
    ax.set_ylabel(f"${response.labels[mode]}$")
    if len(named) > 1:
        ax.legend()
    return ax


def _worse(first: str, second: str) -> str:
    order = ("stable", "unstable", "truncation only")
    return max(first, second, key=order.index)


def plot_comparison(comparison: Comparison, ax: Axes | None = None) -> Axes:
    """Errors over the small parameter, the fitted power through them; errors of the integration are hollow."""
    ax = _axes(ax)
    small, used = comparison.small_values, ~comparison.limited
    name = sp.latex(comparison.small)
    ax.loglog(small[used], comparison.errors[used], "o", color=STABLE["color"], label="error of the expansion")
    if comparison.limited.any():
        hollow = {"color": SPURIOUS["color"], "markerfacecolor": "none", "label": "limited by the integration"}
        ax.loglog(small[~used], comparison.errors[~used], "o", **hollow)
    if len(comparison.slopes):
        x, y = np.log(small[used]), np.log(comparison.errors[used])
        fitted = np.exp(y.mean() + comparison.order * (x - x.mean()))
        ax.loglog(small[used], fitted, color=UNSTABLE["color"], label=rf"$\propto {name}^{{{comparison.order:.2f}}}$")
    reach = f"{comparison.horizon:g}/{name}" + (f"^{{{comparison.power}}}" if comparison.power > 1 else "")
    ax.set_xlabel(f"${name}$")
    ax.set_ylabel(rf"largest relative error, $0 \leq t \leq {reach}$")
    ax.legend()
    return ax


def plot_validity(validity: Validity, ax: Axes | None = None) -> Axes:
    """Promised error and relative residual over amplitude, the tolerance across and the amplitude that keeps it."""
    ax = _axes(ax)
    finite = np.isfinite(validity.promises)
    # Ten times either side of what matters; beyond it the curves are powers of the amplitude.
    centre = validity.amplitude if np.isfinite(validity.amplitude) else float(validity.amplitudes[finite][-1])
    shown = (
        finite & (validity.amplitudes > min(centre, validity.least or centre) / 30) & (validity.amplitudes < 5 * centre)
    )
    amplitudes = validity.amplitudes[shown]
    ax.loglog(amplitudes, validity.promises[shown], label="promised error", **STABLE)
    ax.loglog(amplitudes, validity.residuals[shown], label="relative residual", **UNSTABLE)
    ax.axhline(validity.tolerance, **LIMIT)
    for edge in (validity.least, np.inf if validity.throughout else validity.amplitude):
        if 0 < edge < np.inf:
            ax.axvline(edge, **LIMIT)
    ax.set_xlabel(f"amplitude (order {validity.expansion.order})")
    ax.set_ylabel(f"relative error over a time of {validity.horizon:.4g}")
    ax.legend()
    return ax
