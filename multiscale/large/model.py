"""The result of a reduction: a slow flow for a few modes, and the whole structure from a slow state.

u(t) = Σ_n ε^n Σ_m c_{n,m} · Π z_j^k z̄_j^l e_d^i …,     z_j = ½ (p_j − i q_j) e^{iΦ_j(t)},   c_{n,m} vectors
"""

from __future__ import annotations

from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass, field
from typing import TYPE_CHECKING, Any

import numpy as np
import numpy.typing as npt
import sympy as sp

from multiscale.errors import EvaluationError, MultiscaleError
from multiscale.expansion import Expansion, extend
from multiscale.forces.multilinear import Shape
from multiscale.large.computation import LargeComputation
from multiscale.large.eigenmodes import LargeMode
from multiscale.linear_part.bordered import Stopwatch
from multiscale.linear_part.sparse import Near

if TYPE_CHECKING:
    from multiscale.large.residual import ModelCertificate
    from multiscale.level import Level
    from multiscale.slow_flow import SlowFlow

__all__ = ["ReducedModel"]

Array = npt.NDArray[Any]
SHOWN = 3
"""Small divisors told of, the smallest."""


@dataclass(frozen=True, eq=False, repr=False)
class ReducedModel:
    """A large model reduced to the slow flow of its carried modes.

    Attributes
    ----------
    expansion : Expansion
        Its slow flow, frequencies, steady states and generated functions are those of every expansion, so that
        `equilibria`, `frequency_response`, `limit_cycles`, `initial_state` and, without drive, `backbone` take it. Its
        unknowns are the displacements in which the modes are measured. The equations stand in the matrices: `certify`,
        `compare` and `to_json` do not apply to it, the methods here do.
    modes : tuple of LargeMode
        Frequency, shape and reference of each carried mode.
    matrices : dict
        M, G, K as sparse matrices, None where absent.
    weak : tuple of (Expr, shape)
        Coefficient, in the small parameter, the parameters and time, and map of every other term of the left-hand side.

    The functions it gives can be pickled, the model itself cannot.

    Examples
    --------
    Two of three masses measured, under a load on the first, in resonance with the first mode:

    >>> import numpy as np, sympy as sp, multiscale as ms
    >>> t, eps, f, Omega, w = (sp.Symbol(name, positive=True) for name in ("t", "epsilon", "f", "Omega", "omega_1"))
    >>> sigma, K = sp.Symbol("sigma", real=True), np.array([[2.0, -1.0, 0.0], [-1.0, 2.5, -1.0], [0.0, -1.0, 2.2]])
    >>> model = ms.reduce_model(
    ...     np.eye(3), K, C=0.2 * np.eye(3), springs=ms.Springs(np.eye(3), cubic=1.0), order=2,
    ...     drive=([1.0, 0.0, 0.0], f * sp.cos(Omega * t)), resonances={Omega: w + eps**2 * sigma},
    ... )
    >>> (state,) = ms.equilibria(model.expansion, {eps: 0.3, f: 0.2, sigma: 0.5})
    >>> model.displacement(0.0, state.state, {eps: 0.3, f: 0.2, sigma: 0.5}, dofs=[0, 2]).round(4)
    array([-0.0584, -0.0624])
    """

    expansion: Expansion
    modes: tuple[LargeMode, ...]
    matrices: Mapping[str, Any] = field(repr=False)
    weak: tuple[tuple[sp.Expr, Shape], ...] = field(default=(), repr=False)

    def __repr__(self) -> str:
        frequencies = ", ".join(f"{m.frequency:.6g}" for m in self.modes)
        return f"ReducedModel of {self.size} degrees of freedom, order {self.order}, frequencies {frequencies}"

    @property
    def size(self) -> int:
        """n, the number of degrees of freedom."""
        return int(self.matrices["K"].shape[0])

    @property
    def order(self) -> int:
        return self.expansion.order

    @property
    def slow_flow(self) -> SlowFlow:
        """The slow flow of the carried modes: complex, polar, Cartesian, `to_numpy`."""
        return self.expansion.slow_flow

    @property
    def computation(self) -> LargeComputation:
        """The levels behind the result."""
        computation: Any = self.expansion.computation
        return computation  # type: ignore[no-any-return]

    @property
    def timing(self) -> Stopwatch:
        """Seconds spent in factorisations, solves, and in looking for modes nearby."""
        linear: Any = self.computation.hierarchy.linear_part
        return linear.bordered.watch  # type: ignore[no-any-return]

    @property
    def small_divisors(self) -> str:
        """The combinations of frequencies in the forcing that come close to a mode, carried or not; or ""."""
        linear: Any = self.computation.hierarchy.linear_part
        return _remark(list(linear.near.values())) if linear.near else ""

    @property
    def warnings(self) -> tuple[str, ...]:
        """What a careful analyst would say about this result; see `Expansion.warnings`."""
        return (*([self.small_divisors] if self.small_divisors else []), *self.expansion.warnings)

    def frequency(self, mode: int = 0) -> sp.Expr:
        """ω(a) of a mode as a series in the small parameter; see `Expansion.frequency`."""
        return self.expansion.frequency(mode)

    def extended(self, order: int, *, on_level: Callable[[Level], object] | None = None) -> ReducedModel:
        """The same model to a higher order; no level is computed again."""
        return ReducedModel(extend(self.expansion, order, on_level=on_level), self.modes, self.matrices, self.weak)

    def values(self, parameters: Mapping[Any, Any]) -> dict[str, Any]:
        """All parameters by name. A drive frequency may stand for its detuning; the detuning of two carried modes is
        worked out from their frequencies unless it is given."""
        given = {s.name if isinstance(s, sp.Symbol) else s: x for s, x in parameters.items()}
        for detuning in self.expansion.problem.detunings:
            key = "" if detuning.eliminated is None else str(detuning.eliminated.name)
            own = key.startswith("omega_") and key[6:].isdigit()
            if own and key not in given and (detuning.detuning is None or detuning.detuning.name not in given):
                given[key] = self.modes[int(key[6:]) - 1].frequency
        function = self.expansion.slow_flow.to_numpy()
        return dict(zip(function.parameters, function.values(given), strict=True))

    def displacement(
        self, t: Any, y: Any, parameters: Mapping[Any, Any], *, dofs: Sequence[int] | None = None, derivative: int = 0
    ) -> Array:
        """The displacements (or velocities, accelerations) of all or some degrees of freedom from slow states.

        Parameters
        ----------
        t : float or array
            Time.
        y : array (2·modes,) + S
            Slow states, Cartesian in the rotating frame, as in ``slow_flow.to_numpy("cartesian")``.
        parameters : mapping
            Numbers for all parameters and the small parameter, by Symbol or name.
        dofs : sequence of int, optional
            Default: all of them.
        derivative : 0, 1 or 2

        Returns
        -------
        array (n,) + B or (len(dofs),) + B, B the broadcast shape of t and S.
        """
        if derivative not in (0, 1, 2):
            raise EvaluationError(f"derivative is {derivative!r}: expected 0, 1 or 2")
        y = np.asarray(y, dtype=float)
        if y.shape[:1] != (2 * len(self.modes),):
            raise EvaluationError(f"y has the shape {y.shape}: expected ({2 * len(self.modes)},), p and q of each mode")
        t, *parts = np.broadcast_arrays(np.asarray(t, dtype=float), *y)
        values = self.values(parameters)
        z = self.phasors(t, np.array(parts), values)
        chosen = slice(None) if dofs is None else list(dofs)
        small = values[str(self.expansion.problem.small.name)]
        rows, columns = [], []
        for n in range(self.order + 1):
            for exponents, c in self.computation.vectors(n, derivative).items():
                own = self.monomial(exponents, z, values)
                rows.append(small**n * own.reshape(-1))
                columns.append(c[chosen])
        total = np.stack(columns, axis=1) @ np.stack(rows)
        return np.asarray(total.real.reshape(-1, *t.shape))

    def turning(self, values: Mapping[str, Any]) -> list[tuple[Any, Any]]:
        """(rate, angle at t = 0) of the fast angle of each paired generator, modes first, then drives."""
        c, time = self.computation, self.expansion.problem.time
        natural: list[tuple[Any, Any]] = [(float(w), 0.0) for w in c.canonical.frequencies]
        driven: list[tuple[Any, Any]] = []
        for d in c.canonical.drives:
            moving = d.frequency != 0
            expression = d.reduced_frequency if moving else d.angle
            names = sorted(expression.free_symbols, key=str)
            if time in names:
                raise MultiscaleError(
                    f"the frequency of a drive varies in time ({expression}): that is not evaluated here"
                )
            value = sp.lambdify(names, expression, "numpy")(*(values[s.name] for s in names))
            driven.append((value, 0.0) if moving else (0.0, value))
        angles = [*natural, *driven]
        rows = [[float(x) for x in row] for row in c.frame.angles]
        own = [tuple(sum(x * angle[k] for x, angle in zip(row, angles, strict=True)) for k in (0, 1)) for row in rows]
        return [*own, *driven]

    def phasors(self, t: Array, y: Array, values: Mapping[str, Any]) -> dict[str, Array]:
        """The complex value of each paired generator at slow states y and times t."""
        found: dict[str, Array] = {}
        for k, (rate, phase) in enumerate(self.turning(values)):
            name, bar = self.computation.canonical.spec.pairs[k]
            size = (y[2 * k] - 1j * y[2 * k + 1]) / 2 if k < len(self.modes) else 1.0
            found[name] = size * np.exp(1j * (rate * t + phase))
            found[bar] = found[name].conj()
        return found

    def monomial(self, exponents: Sequence[int], z: Mapping[str, Any], values: Mapping[str, Any]) -> Any:
        """A monomial of the ring, its parameters included, at values of its generators."""
        meanings = dict(self.computation.canonical.meanings)
        result: Any = 1.0
        for name, e in zip(self.computation.canonical.spec.names, exponents, strict=False):
            if e:
                result = result * (z[name] if name in z else values[str(meanings[name].name)]) ** e
        return result + np.zeros_like(next(iter(z.values())))

    def residual(self, t: float, y: Any, parameters: Mapping[Any, Any]) -> Array:
        """What is left of the equations of motion at time t along the slow flow, of shape (n,).

        The reconstruction, with its exact time derivatives along the slow flow that is published, is put into the
        equations as they were given. It is O(ε^{order+1}).
        """
        from multiscale.large.residual import residual

        return residual(self, float(t), np.asarray(y, dtype=float), self.values(parameters))

    def certify(self, *, parameters: Mapping[Any, Any] | None = None, seed: int = 0) -> ModelCertificate:
        """Whether the residual falls like ε^{order+1}, measured in double precision at seeded random states.

        Parameters
        ----------
        parameters : mapping, optional
            Values of the parameters but for the small one; default: random. A detuning of carried modes is among them.
        """
        from multiscale.large.residual import certify_model

        return certify_model(self, parameters or {}, seed)


def _remark(near: list[Near]) -> str:
    near = sorted(near, key=lambda x: abs(x.value / x.frequency - 1))
    told = []
    for x in near[:SHOWN]:
        whose = "a mode that is not carried" if x.mode is None else f"omega_{x.mode + 1}"
        remedy = f"add {x.frequency:.10g} to modes, with" if x.mode is None else "declare"
        key = "that frequency" if x.mode is None else f"omega_{x.mode + 1}"
        told.append(f"{x.name} = {x.value:.8g} is close to {x.frequency:.8g}, {whose}: {remedy} a relation for {key}")
    more = f"; and {len(near) - SHOWN} more" if len(near) > SHOWN else ""
    return (
        "small divisors: "
        + "; ".join(told)
        + more
        + ". The result holds only while the frequencies shift by less than "
        "these distances"
    )
