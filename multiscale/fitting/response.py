"""A measured frequency response: the steady states that a slow sweep meets, and their sensitivities.

    F(y; P) = 0,      ∂y/∂x = − F_y^{-1} F_P ∂P/∂x

A sweep stays on its branch until that ends or turns unstable, then jumps to the nearest stable state.
"""

from __future__ import annotations

import itertools
from collections.abc import Iterable, Mapping
from dataclasses import dataclass
from typing import Any, Literal

import numpy as np
import numpy.typing as npt
import sympy as sp

from multiscale.codegen.numpy_function import NumpyFunction
from multiscale.errors import EvaluationError
from multiscale.expansion import Expansion
from multiscale.fitting.model import amplitude_slope
from multiscale.fitting.unknowns import Unknowns
from multiscale.response.steady.frequency_response import Response, frequency_response
from multiscale.response.steady.search import states_at
from multiscale.response.steady.steady_flow import SteadyFlow

__all__ = ["ResponseModel", "response_model"]

Array = npt.NDArray[Any]
Observed = Literal["amplitude", "quadratures"]


@dataclass(frozen=True, eq=False, repr=False)
class ResponseModel:
    """The steady response along a sweep as a function of parameters; made by `response_model`.

    Attributes
    ----------
    names : tuple of str
        The free parameters: what the entries of x are.
    sweep : array (T,)
        The swept values in the order of the measurement.
    """

    expansion: Expansion
    swept: str
    sweep: Array
    observed: Observed
    mode: int
    unknowns: Unknowns
    _flow: tuple[NumpyFunction, NumpyFunction]
    _steady: SteadyFlow

    @property
    def names(self) -> tuple[str, ...]:
        return self.unknowns.names

    def __repr__(self) -> str:
        return f"ResponseModel over {self.swept}, {len(self.sweep)} values, x = ({', '.join(self.names)})"

    def predict(self, x: npt.ArrayLike) -> Array:
        """Amplitudes (T,), or the quadratures p, then q, one after the other (2T,)."""
        p, q = self._states(self._checked(x))[2 * self.mode : 2 * self.mode + 2]
        return np.hypot(p, q) if self.observed == "amplitude" else np.concatenate([p, q])

    def jacobian(self, x: npt.ArrayLike) -> Array:
        """Its derivative, (T, K) or (2T, K), at fixed branch."""
        free = self._checked(x)
        states = self._states(free)
        more = {self.swept: self.sweep}
        values, chain = self.unknowns.values(free, **more), self.unknowns.chain(free, **more)
        by_state, by_parameter = (f(0.0, states, *values) for f in self._flow)
        forcing = np.einsum("npt,pkt->tnk", by_parameter, chain)
        slopes = -np.linalg.solve(np.moveaxis(by_state, -1, 0), forcing)
        slope_p, slope_q = slopes[:, 2 * self.mode], slopes[:, 2 * self.mode + 1]
        if self.observed == "quadratures":
            return np.concatenate([slope_p, slope_q])
        p, q = states[2 * self.mode : 2 * self.mode + 2, :, None]
        return amplitude_slope(p, q, slope_p, slope_q)

    def _checked(self, x: npt.ArrayLike) -> Array:
        x = np.asarray(x, dtype=float)
        if x.shape != (len(self.names),):
            raise EvaluationError(f"x has shape {x.shape}: expected ({len(self.names)},), for {', '.join(self.names)}")
        return x

    def _states(self, free: Array) -> Array:
        """The steady states (n, T) that the sweep meets."""
        parameters = dict(self.unknowns.known) | dict(zip(self.names, free.tolist(), strict=True))
        if self._steady.modes == 1 and not self._steady.rotations:
            table = _stable_of_one_mode(self._steady, parameters, self.swept, self.sweep)
        else:
            table = _stable(frequency_response(self.expansion, parameters, sweep={self.swept: np.sort(self.sweep)}))
        states: list[Array] = []
        for value in self.sweep.tolist():
            found = table.get(value, [])
            if not found:
                at = ", ".join(f"{name} = {x:.6g}" for name, x in zip(self.names, free.tolist(), strict=True))
                raise EvaluationError(
                    f"no stable steady state at {self.swept} = {value} for {at}: leave it out of the sweep, "
                    "or keep a fit away from such values with bounds"
                )
            # The first point of a sweep has no history: the smallest motion is what a settled system shows there.
            before = states[-1] if states else np.zeros_like(found[0])
            states.append(min(found, key=lambda y: float(np.linalg.norm(y - before))))
        return np.array(states).T


def _stable_of_one_mode(
    flow: SteadyFlow, parameters: Mapping[str, Any], swept: str, at: Array
) -> dict[float, list[Array]]:
    """The stable states by the value of the swept parameter; branches need not be known to tell them."""
    values = tuple(np.broadcast_to(v, at.shape) for v in flow.values({**parameters, swept: at}))
    index, states, _ = states_at(flow, values, len(at))
    jacobian = np.moveaxis(flow.jacobian(states, tuple(v[index] for v in values)), -1, 0)
    stable = np.linalg.eigvals(jacobian).real.max(axis=1) < 0
    table: dict[float, list[Array]] = {}
    for k, y in zip(index[stable].tolist(), states.T[stable], strict=True):
        table.setdefault(float(at[k]), []).append(y)
    return table


def _stable(response: Response) -> dict[float, list[Array]]:
    """The same from branches, where a search has to find the states."""
    table: dict[float, list[Array]] = {}
    for branch in response.branches:
        kept = branch.stable & ~branch.spurious
        for value, state in itertools.compress(zip(branch.parameter.tolist(), branch.state.T, strict=True), kept):
            table.setdefault(value, []).append(state)
    return table


def response_model(
    expansion: Expansion,
    sweep: Mapping[Any, Any],
    *,
    free: Iterable[Any],
    known: Mapping[Any, Any] | None = None,
    observed: Observed = "amplitude",
    mode: int = 0,
) -> ResponseModel:
    """A model of a frequency response (or of a sweep of any other parameter) for `fit` or ``least_squares``.

    Parameters
    ----------
    expansion : Expansion
        Of a driven problem.
    sweep : {Symbol or name: array (T,)}
        The swept parameter, a detuning or a drive frequency for instance, in the order of the measurement: rising or
        falling values; where the response is bistable the model follows the branch that such a sweep follows.
    free : sequence of Symbol or str
        The parameters to be found.
    known : mapping, optional
        The values of all others, by Symbol or name.
    observed : "amplitude" or "quadratures"
        The amplitude of a mode, or both p and q of its motion p cos(fast) + q sin(fast).
    mode : int

    Raises
    ------
    EvaluationError
        Parameters missing or given twice, values that neither rise nor fall; at a call, no stable state at some value.

    Examples
    --------
    >>> import numpy as np, sympy as sp, multiscale as ms
    >>> t = sp.Symbol("t", real=True)
    >>> eps, mu, alpha, f, Omega = sp.symbols("epsilon mu alpha f Omega", positive=True)
    >>> sigma = sp.Symbol("sigma", real=True)
    >>> u = sp.Function("u")(t)
    >>> equation = u.diff(t, 2) + u + eps*(2*mu*u.diff(t) + alpha*u**3 - f*sp.cos(Omega*t))
    >>> driven = ms.expand(ms.Problem(equation, u, small=eps, resonances={Omega: 1 + eps*sigma}), order=1)
    >>> rising = {Omega: np.linspace(0.99, 1.02, 61)}
    >>> model = ms.response_model(driven, rising, free=[mu, alpha, f], known={eps: 0.01})
    >>> measured = model.predict([0.1, 1.0, 0.3])
    >>> found = ms.fit(model, measured, {mu: 0.12, alpha: 0.9, f: 0.32})
    >>> {name: round(value, 6) for name, value in found.values.items()}
    {'mu': 0.1, 'alpha': 1.0, 'f': 0.3}
    """
    if len(sweep) != 1:
        raise EvaluationError(f"sweep has {len(sweep)} entries: expected one, {{parameter: values}}")
    ((key, given),) = sweep.items()
    values = np.asarray(given, dtype=float)
    steps = np.diff(np.atleast_1d(values))
    rising = bool((steps > 0).all() or (steps < 0).all())
    if values.ndim != 1 or not len(values) or not rising or not np.isfinite(values).all():
        raise EvaluationError(
            "the values of the sweep must be 1-D and finite, at least one, and rise, or fall, throughout"
        )
    if observed not in ("amplitude", "quadratures"):
        raise EvaluationError(f"observed is {observed!r}: expected 'amplitude' or 'quadratures'")
    modes = len(expansion.symbols.A)
    if mode not in range(modes):
        raise EvaluationError(f"mode is {mode!r}: this expansion has the modes 0 … {modes - 1}")
    flow = expansion.slow_flow
    name = str(key.name) if isinstance(key, sp.Symbol) else str(key)
    if name in {str(getattr(k, "name", k)) for k in known or {}}:
        raise EvaluationError(f"parameter {name!r} is given twice: it is either swept or known")
    functions = (flow.to_numpy(wrt="state"), flow.to_numpy(wrt="parameters"))
    listed = {**(known or {}), name: float(values[0])}
    unknowns = Unknowns.of(expansion.problem, functions[0], free, listed)
    rest = tuple(pair for pair in unknowns.known if pair[0] != name)
    unknowns = Unknowns(expansion.problem, functions[0], unknowns.names, rest)
    return ResponseModel(expansion, name, values, observed, mode, unknowns, functions, SteadyFlow.of(expansion))
