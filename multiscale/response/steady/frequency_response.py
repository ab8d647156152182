"""Branches of steady states over one parameter: frequency response, response to the level of a drive, and the like."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field
from functools import cached_property
from typing import TYPE_CHECKING, Any

import numpy as np
import numpy.typing as npt
import sympy as sp

from multiscale.errors import EvaluationError
from multiscale.expansion import Expansion
from multiscale.remarks import warn_at
from multiscale.response.steady.branches import Branch, branch_of, hopf_points
from multiscale.response.steady.continuation import followed_arcs
from multiscale.response.steady.jumps import Jump, jumps
from multiscale.response.steady.linking import linked_arcs
from multiscale.response.steady.peak import Peak, peak_of
from multiscale.response.steady.steady_flow import SteadyFlow
from multiscale.response.steady.sweep import Special, Sweep

if TYPE_CHECKING:
    from matplotlib.axes import Axes

__all__ = ["Response", "frequency_response"]

Array = npt.NDArray[Any]


@dataclass(frozen=True, eq=False, repr=False)
class Response:
    """Steady states as functions of one parameter.

    Attributes
    ----------
    symbol : Symbol
        The parameter that was swept.
    branches : tuple of Branch
        Each ordered along its arc, so that folds are interior points; isolated ones are closed.
    folds, hopf, branchings : tuple of Special
        Where a branch turns back, where a pair of eigenvalues crosses the imaginary axis, and where a branch leaves the
        state of rest: ``parameter``, ``state``, ``amplitudes``, to rounding. Folds that only the truncation makes are
        left out.
    jumps_up, jumps_down : tuple of Jump
        Where a slow sweep leaves a stable branch at a fold, for a larger or a smaller amplitude.
    complete : bool
        Whether these are all the branches (one mode, polynomial forces), or those that a search found.
    """

    symbol: sp.Symbol
    branches: tuple[Branch, ...]
    folds: tuple[Special, ...]
    hopf: tuple[Special, ...]
    branchings: tuple[Special, ...]
    jumps_up: tuple[Jump, ...]
    jumps_down: tuple[Jump, ...]
    complete: bool
    labels: tuple[str, ...]
    _sweep: Sweep = field(repr=False)

    def __repr__(self) -> str:
        return f"Response over {self.symbol}: {len(self.branches)} branches, {len(self.folds)} folds"

    @cached_property
    def table(self) -> dict[str, Array]:
        """{name: array (branches, points), nan-padded}: parameter, amplitude, phase, stable and spurious (1 or 0).

        With several modes "amplitude" and "phase" have one more axis, of modes and of resonant phases, in the middle.
        """
        longest = max((len(b.parameter) for b in self.branches), default=0)
        columns = {}
        for name in ("parameter", "amplitude", "phase", "stable", "spurious"):
            rows = [np.asarray(getattr(b, name), dtype=float) for b in self.branches]
            shape = rows[0].shape[:-1] if rows else ()
            table = np.full((len(rows), *shape, longest), np.nan)
            for target, row in zip(table, rows, strict=True):
                target[..., : row.shape[-1]] = row
            columns[name] = table
        return columns

    def peak(self, mode: int = 0) -> Peak:
        """The largest amplitude of a mode on any branch that is no artefact of the truncation, to rounding."""
        if mode not in range(self._sweep.flow.modes):
            raise EvaluationError(f"mode is {mode!r}: this response has the modes 0 … {self._sweep.flow.modes - 1}")
        return peak_of(self._sweep, self.branches, mode)

    def plot(self, ax: Axes | None = None, mode: int = 0) -> Axes:
        """Amplitude over the parameter; unstable parts are dashed and paler. Needs Matplotlib."""
        from multiscale.plotting import plot_response

        return plot_response(self, ax, mode)

    def to_xarray(self) -> Any:
        """The table as an xarray Dataset with the dimensions "branch" and "point"."""
        try:
            import xarray
        except ImportError:
            raise ImportError(
                "to_xarray needs xarray, which is not installed: pip install 'multiscale-expansions[xarray]', or use "
                "the arrays of Response.table"
            ) from None
        middle = {"amplitude": ("mode",), "phase": ("resonant_phase",)}
        variables = {
            name: (("branch", *(middle.get(name, ()) if x.ndim == 3 else ()), "point"), x)
            for name, x in self.table.items()
        }
        return xarray.Dataset(variables, attrs={"parameter": str(self.symbol)})


def frequency_response(expansion: Expansion, parameters: Mapping[Any, Any], *, sweep: Mapping[Any, Any]) -> Response:
    """All steady states over a range of one parameter, joined into branches.

    One mode: every equilibrium at every value by elimination, isolated branches included. A pair of folds or an island
    that lies wholly between two neighbouring values is seen only where a branch is steep, so choose the values closer
    than the features looked for. Several modes: the branches through the states that a search finds at a few values.
    Forces that are not polynomial: by a scan over the amplitude of one mode (see `equilibria`), ``complete`` is False.

    Parameters
    ----------
    expansion : Expansion
    parameters : mapping
        A number for every parameter but the swept one, by Symbol or name.
    sweep : {Symbol or name: 1-D array}
        Any parameter: a detuning, the drive frequency that a relation eliminated, the level of the drive, damping.
        Branches contain these values; intermediate ones are added where they are needed to join states, and folds.

    Raises
    ------
    ResonanceError
        The flow depends on time explicitly.
    EvaluationError
        Parameters missing, given twice or not finite; a sweep that is no 1-D array.

    Warns
    -----
    SmallDivisorWarning
        At the fixed parameters a combination of frequencies comes close to a natural frequency.

    Examples
    --------
    >>> import numpy as np, sympy as sp, multiscale as ms
    >>> t = sp.Symbol("t", real=True)
    >>> eps, mu, f, Omega = sp.symbols("epsilon mu f Omega", positive=True)
    >>> sigma = sp.Symbol("sigma", real=True)
    >>> u = sp.Function("u")(t)
    >>> equation = u.diff(t, 2) + u + eps*(2*mu*u.diff(t) + u**3 - f*sp.cos(Omega*t))
    >>> driven = ms.expand(ms.Problem(equation, u, small=eps, resonances={Omega: 1 + eps*sigma}), order=1)
    >>> response = ms.frequency_response(driven, {eps: 0.01, mu: 0.1, f: 0.4}, sweep={sigma: np.linspace(-1, 3, 81)})
    >>> response, [round(x.parameter, 6) for x in response.folds], round(response.peak().amplitude, 6)
    (Response over sigma: 1 branches, 2 folds, [0.449388, 1.501669], 2.0)
    """
    flow = SteadyFlow.of(expansion)
    swept = Sweep.of(flow, parameters, sweep)
    warn_at(expansion, {getattr(key, "name", key): value for key, value in parameters.items()})
    one = flow.modes == 1
    arcs, folds, branchings = followed_arcs(swept) if not one or flow.several_phases else linked_arcs(swept)
    branches = tuple(branch_of(swept, arc) for arc in arcs)
    artefacts = [float(b.parameter[k]) for b in branches for k in b.folds if b.spurious[k]]
    folds = [x for x in folds if x.parameter not in artefacts]
    ups, downs = jumps(swept, branches)
    known = {str(s.name): s for s in (*expansion.problem.parameters, expansion.problem.small)}
    known |= {str(d.eliminated.name): d.eliminated for d in expansion.problem.detunings if d.eliminated is not None}
    return Response(
        known[swept.name],
        branches,
        tuple(sorted(folds, key=lambda x: x.parameter)),
        hopf_points(swept, branches),
        tuple(sorted(branchings, key=lambda x: x.parameter)),
        ups,
        downs,
        one and flow.polynomial,
        tuple(sp.latex(a) for a in expansion.symbols.a),
        swept,
    )
