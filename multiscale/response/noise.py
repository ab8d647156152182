"""A slow flow under weak random forcing.

With a stationary random force ξ_k(t) on the right of the equation of u_k, m_k u_k'' + … = ξ_k, of two-sided spectral
density S_k(ω) = ∫ ⟨ξ(t) ξ(t + τ)⟩ e^{−iωτ} dτ that is flat across the resonance (white noise ⟨ξξ⟩ = S δ(τ)), the
quadratures of the leading motion p cos + q sin obey, averaged over a period,

    dp = F_p dt + √d dW_1,    dq = F_q dt + √d dW_2,    d_k = S_k(ω_k)/(2 m_k² ω_k²)

with independent W_1, W_2. The noise is additive, so that the Itô and Stratonovich readings of this form are the same.
In amplitude and phase (Itô):

    da = (F_a + d/(2a)) dt + √d dW_a,     dβ = F_β dt + (√d/a) dW_β

Source: R. L. Stratonovich, *Topics in the Theory of Random Noise*, vol. 2, 1967, ch. 4 (from memory); confirmed in the
tests by simulation of the full equation. The intensities are those of the leading order in ε.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from functools import cached_property
from typing import Any

import numpy as np
import numpy.typing as npt
import sympy as sp

from multiscale.errors import EvaluationError, ProblemError
from multiscale.expansion import Expansion

__all__ = ["NoisyFlow", "noisy_flow"]

Array = npt.NDArray[Any]


@dataclass(frozen=True, eq=False, repr=False)
class NoisyFlow:
    """Drift and diffusion of a slow flow; made by `noisy_flow`.

    Attributes
    ----------
    intensity : {p: d, q: d, …}
        Variance of each quadrature gained per unit time; different quadratures are independent.
    """

    expansion: Expansion
    intensity: dict[sp.Symbol, sp.Expr]

    def __repr__(self) -> str:
        return f"NoisyFlow({', '.join(f'd_{x} = {d}' for x, d in self.intensity.items())})"[:199]

    @cached_property
    def drift(self) -> dict[sp.Symbol, sp.Expr]:
        """{a: …, γ or β: …}: mean rates in amplitude and phase, in the sense of Itô: the slow flow and d/(2a)."""
        symbols = self.expansion.symbols
        found = dict(self.expansion.slow_flow.polar)
        for a, p in zip(symbols.a, symbols.p, strict=True):
            found[a] = found[a] + self.intensity[p] / (2 * a)
        return found

    def intensities(self, parameters: Mapping[Any, Any]) -> Array:
        """The variances per unit time as numbers, (2·modes,), in the order of a Cartesian state.

        `parameters` names every parameter of the problem, and any that only the spectral densities contain.
        """
        return np.array([self._number(d, parameters) for d in self.intensity.values()])

    def _number(self, d: sp.Expr, parameters: Mapping[Any, Any]) -> float:
        named = {str(getattr(key, "name", key)): value for key, value in parameters.items()}
        own = {str(s.name) for s in d.free_symbols} - set(self._function.parameters)
        if missing := sorted(own - set(named)):
            raise EvaluationError(f"missing parameter {', '.join(missing)}, which the spectral densities contain")
        known = dict(zip(self._function.parameters, self._values(parameters), strict=True)) | named
        value = d.subs({s: known[str(s.name)] for s in d.free_symbols})
        if not value.is_number or not value.is_real or not value >= 0:
            raise EvaluationError(f"the intensity {d} is {value} at these parameters: expected a number ≥ 0")
        return float(value)

    @cached_property
    def _function(self) -> Any:
        return self.expansion.slow_flow.to_numpy(wrt="state")

    def _values(self, parameters: Mapping[Any, Any]) -> tuple[Any, ...]:
        """The problem's own parameters; those of the spectral densities alone are left out."""
        beside = {str(s.name) for d in self.intensity.values() for s in d.free_symbols} - set(self._function.parameters)
        own = {k: v for k, v in parameters.items() if str(getattr(k, "name", k)) not in beside}
        return self._function.values(own)  # type: ignore[no-any-return]

    def _decaying(self, state: npt.ArrayLike, parameters: Mapping[Any, Any]) -> Array:
        jacobian = np.asarray(self._function(0.0, state, *self._values(parameters)))
        if jacobian.ndim != 2 or np.linalg.eigvals(jacobian).real.max() >= 0:
            raise EvaluationError(
                "fluctuations about this state do not settle: give one stable steady state (see equilibria)"
            )
        return jacobian

    def covariance(self, state: npt.ArrayLike, parameters: Mapping[Any, Any]) -> Array:
        """⟨δy δyᵀ⟩ of small fluctuations about a stable steady state, (n, n): JC + CJᵀ + D = 0.

        state : array (n,), Cartesian. Raises `EvaluationError` where fluctuations grow or drift.
        """
        jacobian, strength = self._decaying(state, parameters), np.diag(self.intensities(parameters))
        n = len(jacobian)
        # vec(JC + CJᵀ) = (1⊗J + J⊗1) vec(C)
        operator = np.kron(np.eye(n), jacobian) + np.kron(jacobian, np.eye(n))
        return np.asarray(np.linalg.solve(operator, -strength.ravel()).reshape(n, n))

    def spectrum(self, frequencies: npt.ArrayLike, state: npt.ArrayLike, parameters: Mapping[Any, Any]) -> Array:
        """Two-sided spectral densities of the same, (n, n) + F: (iν − J)^{-1} D (iν − J)^{-H}, ν in rad per unit time.

        ν counts from the fast angle of the frame: the spectrum of the motion has these lines at ω ± ν.
        """
        jacobian, strength = self._decaying(state, parameters), np.diag(self.intensities(parameters))
        nu = np.asarray(frequencies, dtype=float)
        inverse = np.linalg.inv(1j * nu[..., None, None] * np.eye(len(jacobian)) - jacobian)
        return np.asarray(np.moveaxis(inverse @ strength @ np.conj(np.swapaxes(inverse, -1, -2)), (-2, -1), (0, 1)))


def noisy_flow(expansion: Expansion, densities: Mapping[sp.Expr, Any]) -> NoisyFlow:
    """The slow flow under weak random forces on the equations of motion.

    Parameters
    ----------
    expansion : Expansion
    densities : {unknown: two-sided spectral density}
        Of the force on the right of the equation of that unknown, as the equation was written, at the natural
        frequency: S(ω) = ∫ ⟨ξ(t) ξ(t + τ)⟩ e^{−iωτ} dτ, so that white noise ⟨ξξ⟩ = S δ(τ) has S. A number or an
        expression, of order ε at most; forces on different equations are independent.

    Raises
    ------
    ProblemError
        A key that is no unknown; equations that are coupled at leading order or contain slaved unknowns.

    Examples
    --------
    >>> import sympy as sp, multiscale as ms
    >>> t = sp.Symbol("t", real=True)
    >>> eps, mu, m, k, S = sp.symbols("epsilon mu m k S", positive=True)
    >>> x = sp.Function("x")(t)
    >>> damped = ms.expand(ms.Problem(m*x.diff(t, 2) + 2*eps*mu*x.diff(t) + k*x, x, small=eps), order=1)
    >>> ms.noisy_flow(damped, {x: S}).drift
    {a: S/(4*a*k*m) - a*epsilon*mu/m, beta: 0}
    """
    problem = expansion.problem
    unknown = [x for x in densities if x not in problem.unknowns]
    if unknown:
        raise ProblemError(
            f"{unknown[0]} is not an unknown of the problem: expected {', '.join(map(str, problem.unknowns))}"
        )
    if expansion.computation.canonical.operator is not None:
        raise ProblemError(
            "the equations are coupled at leading order, or contain an unknown without an oscillator of its own: a "
            "force on one equation then acts on several modes, which noisy_flow does not treat. State the problem in "
            "modal coordinates"
        )
    intensity: dict[sp.Symbol, sp.Expr] = {}
    for k, u in enumerate(problem.unknowns):
        density = sp.sympify(densities.get(u, 0))
        rate = density / (2 * (_inertia(expansion, u) * problem.natural_frequencies[k]) ** 2)
        intensity[expansion.symbols.p[k]] = intensity[expansion.symbols.q[k]] = sp.cancel(rate)
    return NoisyFlow(expansion, intensity)


def _inertia(expansion: Expansion, u: sp.Expr) -> sp.Expr:
    """The coefficient of u'' at rest and at leading order."""
    problem = expansion.problem
    second = u.diff(problem.time, 2)
    acceleration = sp.Dummy("acceleration")
    rest: dict[sp.Expr, Any] = {x.diff(problem.time, d): 0 for x in problem.unknowns for d in (2, 1)}
    rest |= dict.fromkeys(problem.unknowns, 0)
    found = [
        c
        for equation in problem.equations
        if (c := sp.diff(equation.xreplace({second: acceleration}).subs(rest), acceleration).subs(problem.small, 0))
        != 0
    ]
    if len(found) != 1:
        raise ProblemError(f"{u} has no oscillator of its own at leading order: state the noise on its modes")
    return found[0]
