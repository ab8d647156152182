"""The steady states of a slow flow at given parameters, their stability and its kind."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any

import numpy as np
import numpy.typing as npt

from multiscale.errors import EvaluationError
from multiscale.expansion import Expansion
from multiscale.remarks import warn_at
from multiscale.response.steady.newton import reduced_eigenvalues, rotation_rates
from multiscale.response.steady.search import refuse_continua, states_at
from multiscale.response.steady.steady_flow import SteadyFlow
from multiscale.response.steady.truncation import spurious_reason

__all__ = ["Equilibrium", "equilibria", "kind_of"]

Array = npt.NDArray[Any]


@dataclass(frozen=True, eq=False)
class Equilibrium:
    """A steady state of the slow flow: a periodic motion, up to the cyclic phases.

    Attributes
    ----------
    state : array (2·modes,)
        Cartesian in the rotating frame, (p_1, q_1, p_2, …), as every generated function takes it.
    amplitudes : tuple of float
        a of each mode.
    phases : tuple of float
        The resonant phases γ in the order of ``slow_flow.phases``, in (−π, π]; nan where an amplitude is zero.
    eigenvalues : array of complex
        Of the Cartesian Jacobian, without the zero of each cyclic phase; per unit of time.
    stable : bool
        Whether all of them have a negative real part.
    kind : str
        "stable", or the instability: "saddle" (one real positive eigenvalue), "oscillatory" (a pair), "unstable" (more
        than these), "neutral" (none positive, some on the imaginary axis to rounding).
    spurious : str
        Why only the truncation makes this state, "" where it is one of the expansion.
    complete : bool
        Whether the states found with it are all there are.
    rates : tuple of float
        The rate ν of each cyclic phase in the frame, zero for driven problems.
    """

    state: Array
    amplitudes: tuple[float, ...]
    phases: tuple[float, ...]
    eigenvalues: Array
    stable: bool
    kind: str
    spurious: str
    complete: bool
    rates: tuple[float, ...] = ()


def kind_of(eigenvalues: Array) -> str:
    """The name of the stability that eigenvalues decide."""
    sizes = abs(eigenvalues)
    rounding = 1e-10 * float(np.max(sizes[np.isfinite(sizes)], initial=1e-300))
    growing = eigenvalues[eigenvalues.real > rounding]
    if len(growing) == 0:
        return "stable" if np.all(eigenvalues.real < -rounding) else "neutral"
    if np.all(abs(growing.imag) > rounding):
        return "oscillatory" if len(growing) == 2 else "unstable"
    return "saddle" if len(growing) == 1 else "unstable"


def equilibria(expansion: Expansion, parameters: Mapping[Any, Any]) -> tuple[Equilibrium, ...]:
    """Every steady state of the slow flow, smallest amplitude first.

    One driven mode: all of them, at any order, by elimination of the phase. One mode without phases: all, the limit
    cycles and the state of rest. Several modes: those that Newton's method finds from many starts, ``complete`` being
    False. Stability is that of the Cartesian form, which is regular at zero amplitude.

    With forces that are not polynomial, one mode is scanned over its amplitude, from 1e-9 in the unit of the unknown to
    where the drive is outweighed or the force ends; ``complete`` is then False, since two states closer than the step
    of the scan may be missed. Dry friction that outweighs the drive holds the mode at rest: the eigenvalues there are
    −∞, because the rest is reached in finite time. Averaging cannot tell sticking and sliding within a period.

    Parameters
    ----------
    expansion : Expansion
    parameters : mapping
        A number for each parameter, by Symbol or name. A drive frequency may stand for its detuning.

    Raises
    ------
    ResonanceError
        The flow depends on time explicitly: it has no equilibria.
    EvaluationError
        Parameters missing, unknown or not finite; every amplitude is a steady state (no damping, no drive).

    Warns
    -----
    SmallDivisorWarning
        At these parameters a combination of frequencies comes close to a natural frequency.

    Examples
    --------
    >>> import sympy as sp, multiscale as ms
    >>> t = sp.Symbol("t", real=True)
    >>> eps, mu, f, Omega = sp.symbols("epsilon mu f Omega", positive=True)
    >>> sigma = sp.Symbol("sigma", real=True)
    >>> u = sp.Function("u")(t)
    >>> equation = u.diff(t, 2) + u + eps*(2*mu*u.diff(t) + u**3 - f*sp.cos(Omega*t))
    >>> driven = ms.expand(ms.Problem(equation, u, small=eps, resonances={Omega: 1 + eps*sigma}), order=1)
    >>> states = ms.equilibria(driven, {eps: 0.01, mu: 0.1, f: 0.6, sigma: 1.0})
    >>> [(round(s.amplitudes[0], 3), s.kind) for s in states]
    [(0.31, 'stable'), (1.482, 'saddle'), (1.744, 'stable')]
    """
    flow = SteadyFlow.of(expansion)
    values = flow.values(parameters)
    for name, value in zip(flow.flow.parameters, values, strict=True):
        if np.ndim(value):
            raise EvaluationError(
                f"parameter {name} is an array: equilibria takes numbers; for a sweep use frequency_response"
            )
    values = tuple(float(v) for v in values)
    warn_at(expansion, dict(zip(flow.flow.parameters, values, strict=True)))
    _, states, complete = states_at(flow, values, 1)
    return tuple(_equilibrium(flow, y, values, complete) for y in states.T)


def _equilibrium(flow: SteadyFlow, y: Array, values: tuple[Any, ...], complete: bool) -> Equilibrium:
    nu = rotation_rates(flow, y, values)
    refuse_continua(flow, y, nu, values)
    eigenvalues = reduced_eigenvalues(flow, y, nu, values)
    amplitudes, phases = flow.polar(y)
    kind = kind_of(eigenvalues)
    state = np.array(y)
    for frozen in (state, eigenvalues):
        frozen.flags.writeable = False
    return Equilibrium(
        state,
        tuple(float(a) for a in amplitudes),
        tuple(float(g) for g in phases),
        eigenvalues,
        kind == "stable",
        kind,
        spurious_reason(flow, y, values),
        complete,
        tuple(float(x) for x in nu),
    )
