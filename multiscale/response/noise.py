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
from multiscale.problem.reading import given_expression

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
        A key that is no unknown; unknowns that are coupled at leading order; a density that depends on time.

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
    if problem.canonical(1).operator is not None:
        raise ProblemError(
            f"{', '.join(map(str, problem.unknowns))} have no oscillators of their own at leading order, so a force "
            "on one equation drives several modes: state the problem in modal coordinates, and the noise on these"
        )
    intensity: dict[sp.Symbol, sp.Expr] = {}
    for k, u in enumerate(problem.unknowns):
        given = given_expression(densities.get(u, 0))
        if given is None:
            raise ProblemError(f"the density {densities[u]!r} of {u} is no number and no SymPy expression")
        density = problem.with_relations(given)
        if density.has(problem.time, *problem.unknowns):
            raise ProblemError(f"the density {densities[u]} depends on time: expected that of a stationary force")
        rate = density / (2 * (_inertia(expansion, u) * problem.natural_frequencies[k]) ** 2)
        intensity[expansion.symbols.p[k]] = intensity[expansion.symbols.q[k]] = sp.cancel(rate)
    return NoisyFlow(expansion, intensity)


def _inertia(expansion: Expansion, u: sp.Expr) -> sp.Expr:
    """The coefficient of u'' at rest and at leading order, in the one equation that has it."""
    problem = expansion.problem
    acceleration = sp.Dummy("acceleration")
    small = [problem.small, *(x for x in problem.ordering or () if isinstance(x, sp.Symbol))]
    rest: dict[sp.Expr, Any] = {x.diff(problem.time, d): 0 for x in problem.unknowns for d in (2, 1)}
    rest |= dict.fromkeys([*problem.unknowns, *small], 0)
    second = u.diff(problem.time, 2)
    slopes = (sp.diff(x.xreplace({second: acceleration}).subs(rest), acceleration) for x in problem.equations)
    return next(slope for slope in slopes if slope != 0)
