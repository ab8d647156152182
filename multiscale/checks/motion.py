"""The motion that an expansion describes, put into the user's own equations, numerically.

Along the slow flow y' = g(t, y) the displacement is a function of one variable,

    h(s) = U(t + s, y(t + s)),      y(t + s) = y + s g + ½ s² dg/dt + O(s³),

analytic because the generated kernels are. Its derivatives h' and h'' are the *total* time derivatives of the truncated
displacement, not the truncated series of the derivatives; they come from Cauchy's formula on a circle of complex s,
exact to rounding. The residual of the equations of motion, divided by their inertia, is an acceleration.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from functools import cached_property
from math import gcd
from typing import Any

import numpy as np
import numpy.typing as npt
import sympy as sp

from multiscale.codegen.numpy_function import NumpyFunction
from multiscale.errors import EvaluationError
from multiscale.expansion import Expansion
from multiscale.problem import Problem

__all__ = ["Motion", "motion_of"]

Array = npt.NDArray[Any]
STEP = 1e-30
CIRCLE = 12
"""Points on the circle; its radius is RADIUS over the fastest frequency."""
RADIUS = 0.3
PER_PERIOD = 48
"""Samples over a fast period, and four times as many over several where the motion has two base frequencies or more."""


@dataclass(frozen=True, eq=False)
class Motion:
    """Numeric functions of one expansion at fixed parameter values.

    `values` are those of the generated functions, `frequencies` the natural ones in the order of the unknowns, `rates`
    those and the drives' as they are, detuning and all.
    """

    expansion: Expansion
    values: tuple[float, ...]
    displacement: NumpyFunction
    flow: NumpyFunction
    frequencies: Array
    rates: Array

    @property
    def small(self) -> float:
        """The value of the small parameter."""
        return self.values[self.flow.parameters.index(str(self.expansion.problem.small.name))]

    @cached_property
    def turning(self) -> Array:
        """The rate of the fast angle of each mode: its natural frequency, or what a drive imposes."""
        angles = self.expansion.computation.frame.angles
        return np.asarray([sum(float(x) * w for x, w in zip(row, self.rates, strict=True)) for row in angles])

    @property
    def periodic(self) -> bool:
        """Whether the fast motion has one period: a single base frequency."""
        return len(self.expansion.computation.canonical.bases.values) == 1

    @cached_property
    def fast_times(self) -> Array:
        """Evenly spaced times that sample the fast motion: its period, or many incommensurate ones."""
        if self.periodic:
            rates = self.expansion.computation.canonical.bases.rates
            drives = [d.rate for d in self.expansion.computation.canonical.drives]
            common = gcd(*(int(r[0]) for r in (*rates, *drives)))
            period = 2 * np.pi / abs(self.turning[0]) * abs(int(rates[0][0])) / common
            count = PER_PERIOD * min(max(1, round(period * abs(self.rates).max() / (2 * np.pi))), 8)
            return np.asarray(np.arange(count) * period / count)
        # The golden section of the shortest period fills the torus of phases evenly.
        return np.asarray(np.arange(4 * PER_PERIOD) * (np.sqrt(5) - 1) * np.pi / abs(self.rates).max())

    def _of(self, function: NumpyFunction, t: Array, y: Array) -> Array:
        return np.array(np.broadcast_arrays(*function.kernel(t, *y, *self.values), t)[:-1])

    def rate(self, t: Array, y: Array) -> Array:
        """g(t, y), also for complex arguments."""
        return self._of(self.flow, t, y)

    def jets(self, t: Array, y: Array) -> tuple[Array, Array, Array]:
        """(u, u', u''), each (unknowns,) + B, at times t and states y of shape (n,) + B."""
        t, y = np.broadcast_to(t, np.shape(y)[1:]), np.asarray(y)
        g = self.rate(t, y)
        turned = self.rate(t + 1j * STEP, y + 1j * STEP * g).imag / STEP
        radius = RADIUS / abs(self.rates).max()
        values, first, second = (np.zeros((len(self.frequencies), *t.shape)) for _ in range(3))
        # h is real for real s, so the lower half of the circle gives the conjugates of the upper one.
        for k in range(CIRCLE // 2 + 1):
            s = radius * np.exp(2j * np.pi * k / CIRCLE)
            weight = (1 if k in (0, CIRCLE // 2) else 2) / CIRCLE
            found = weight * self._of(self.displacement, t + s, y + s * g + s**2 / 2 * turned)
            values += found.real
            first += (found / s).real
            second += 2 * (found / s**2).real
        return values, first, second

    @cached_property
    def _equations(self) -> tuple[Any, Any]:
        return _compiled(self.expansion.problem)

    def residual(self, t: Array, y: Array) -> tuple[Array, Array]:
        """(acceleration left over by the equations, displacement), each (unknowns,) + B."""
        forces, inertia = self._equations
        u, v, w = self.jets(t, y)
        named = dict(zip(self.flow.parameters, self.values, strict=True))
        left = np.array(np.broadcast_arrays(*forces(t, u, v, w, named), u[0])[:-1])
        return np.tensordot(np.linalg.inv(inertia(named)), left, axes=1), u


def motion_of(expansion: Any, parameters: Mapping[Any, Any]) -> Motion:
    """With finite numbers for all parameters, or refused."""
    if not isinstance(expansion, Expansion):
        raise EvaluationError(f"an Expansion was expected, got a {type(expansion).__name__}: call expand first")
    canonical = expansion.computation.canonical
    if canonical.harmonics or canonical.torus or canonical.left_out:
        raise EvaluationError(
            "the range of validity is worked out for forces that are polynomial or given by Taylor polynomials; this "
            "expansion averages a force over a cycle. Use compare(expansion, …) at the amplitudes in question"
        )
    flow = expansion.slow_flow.to_numpy("cartesian")
    values = flow.values(parameters)
    for name, value in zip(flow.parameters, values, strict=True):
        if np.ndim(value) or not np.isfinite(value):
            raise EvaluationError(f"parameter {name} = {value}: expected a finite number")
    numbers = tuple(float(v) for v in values)
    named = dict(zip(_symbols(expansion.problem), numbers, strict=True))
    natural = [_number(w, named) for w in expansion.problem.natural_frequencies]
    drives = [_number(d.reduced_frequency, named) for d in expansion.computation.canonical.drives]
    rates = np.array([*natural, *drives])
    return Motion(expansion, numbers, expansion.to_numpy(), flow, np.array(natural), rates)


def _symbols(problem: Problem) -> list[sp.Symbol]:
    return sorted((*problem.parameters, problem.small), key=lambda s: str(s.name))


def _number(x: sp.Expr, values: Mapping[sp.Symbol, float]) -> float:
    value = sp.N(x.subs(values))
    if value.free_symbols:
        raise EvaluationError(
            f"the frequency {x} varies slowly: residuals are worked out for constant frequencies only"
        )
    if not value.is_real or not np.isfinite(float(value)):
        raise EvaluationError(f"the frequency {x} is {value} at these parameters: expected a finite number")
    return float(value)


def _compiled(problem: Problem) -> tuple[Any, Any]:
    """The equations with relations put in, and their inertia at rest: functions of (t, u, u', u'', parameters)."""
    symbols, t = _symbols(problem), problem.time
    jets = {
        u.diff(t, d) if d else u: sp.Dummy(f"u{k}_{d}", real=True)
        for d in (2, 1, 0)
        for k, u in enumerate(problem.unknowns)
    }
    plain = []
    for x in map(problem.with_relations, problem.equations):
        for jet, symbol in jets.items():
            x = x.xreplace({jet: symbol})
        plain.append(x)
    accelerations = [jets[u.diff(t, 2)] for u in problem.unknowns]
    rest = {**dict.fromkeys(jets.values(), 0), t: 0}
    weightless = {s: 0 for s, q in (problem.ordering or {}).items() if isinstance(s, sp.Symbol) and q} | {
        problem.small: 0
    }
    leading = [x.subs(weightless) for x in plain]
    rows = [_own_row(x, problem, jets, rest) for x in leading]
    for key, value in problem.resonances:
        # A relation for the frequency of an unknown gives its stiffness, whatever the equations say.
        if key in problem.unknowns:
            j = rows.index(problem.unknowns.index(key))
            mass, stiffness = (leading[j].diff(jets[x]).subs(rest) for x in (key.diff(t, 2), key))
            plain[j] = sp.expand(plain[j] + (mass * problem.with_relations(value) ** 2 - stiffness) * jets[key])
    mass = sp.Matrix(plain).jacobian(accelerations).subs(rest)
    # In the order in which jets were made: accelerations, velocities, displacements.
    # In floats: NumPy makes objects of whole numbers beyond 64 bits.
    run = sp.lambdify([t, list(jets.values()), symbols], [sp.N(x, 17) for x in plain], "numpy", cse=True)
    weigh = sp.lambdify([symbols], sp.N(mass, 17), "numpy")

    def forces(time: Array, u: Array, v: Array, w: Array, values: Mapping[str, float]) -> list[Array]:
        return run(time, [*w, *v, *u], [values[str(s.name)] for s in symbols])  # type: ignore[no-any-return]

    return forces, lambda values: np.asarray(weigh([values[str(s.name)] for s in symbols]), dtype=float)


def _own_row(
    x: sp.Expr, problem: Problem, jets: Mapping[sp.Expr, sp.Symbol], rest: Mapping[sp.Expr, sp.Expr | int]
) -> int:
    """The unknown whose oscillator an equation is at leading order; refused where it holds another one linearly."""
    t = problem.time
    found = [k for k, u in enumerate(problem.unknowns) if x.diff(jets[u.diff(t, 2)]).subs(rest) != 0]
    stiff = [k for k, u in enumerate(problem.unknowns) if sp.expand(x.diff(jets[u]).subs(rest)) != 0]
    if len(found) != 1 or stiff != found or any(x.diff(jets[u.diff(t)]).subs(rest) != 0 for u in problem.unknowns):
        raise EvaluationError(
            "the range of validity is worked out for oscillators that are uncoupled at leading order, u'' + ω²u = …; "
            "state the problem in modal coordinates"
        )
    return found[0]
