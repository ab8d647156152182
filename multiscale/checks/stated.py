"""The equations of motion as the user stated them, in first-order form, for direct numerical integration.

    F(u, u', u'', t) = 0      →      u' = v,   v' = a   with   F(u, v, a, t) = 0

solved for the highest derivatives: in closed form where they enter linearly (also with inertia that depends on the
motion), by Newton's method where they do not. An unknown without an acceleration has its velocity in the place of it.
Nothing is expanded: relations are put in exactly, drives keep their exact phase.
"""

from __future__ import annotations

from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass
from functools import lru_cache
from typing import Any

import numpy as np
import numpy.typing as npt
import sympy as sp

from multiscale.errors import EvaluationError
from multiscale.problem import Problem
from multiscale.problem.force_law import law_name

__all__ = ["Stated", "stated"]

Array = npt.NDArray[Any]
RightHandSide = Callable[[float, Array], list[float]]
ITERATIONS = 30
ROUNDING = 1e-14
STALLED = 1e-10


@dataclass(frozen=True, eq=False)
class Stated:
    """`compiled` gives the highest derivatives, or (F, its Jacobian) at given ones: where F is `linear` in them one
    step solves it, where they are `implicit` several. Its last arguments are the `parameters`; `second` are the
    unknowns that have a velocity of their own."""

    size: int
    second: tuple[int, ...]
    parameters: tuple[str, ...]
    compiled: Callable[..., Any]
    implicit: bool
    linear: bool = False

    def start(self, places: Sequence[float], velocities: Sequence[float]) -> tuple[float, ...]:
        """y of given displacements and velocities."""
        return (*places, *(velocities[k] for k in self.second))

    def rhs(self, values: Mapping[str, float]) -> RightHandSide:
        """f(t, y) for y = (u_1, …, u_n, u_1', …), velocities of the `second`; not-a-number where there is no value."""
        n, numbers, compiled = self.size, [values[name] for name in self.parameters], self.compiled
        nowhere = [np.nan] * n

        def highest(time: float, state: list[float]) -> list[float]:
            try:
                if self.implicit:
                    return _newton(lambda x: compiled(time, *state, *x, *numbers), n)
                if self.linear:
                    residual, slope = compiled(time, *state, *[0.0] * n, *numbers)
                    return (-_step(residual, slope, n)[0]).tolist()  # type: ignore[no-any-return]
                return list(compiled(time, *state, *numbers))
            except EvaluationError:
                # A table was asked for beyond its ends, and says so.
                raise
            except (ArithmeticError, ValueError, np.linalg.LinAlgError):
                return nowhere

        def all_second(time: float, y: Array) -> list[float]:
            state = y.tolist()
            return [*state[n:], *highest(time, state)]

        def mixed(time: float, y: Array) -> list[float]:
            state = y.tolist()
            found = highest(time, state)
            velocities = list(found)
            for place, k in enumerate(self.second):
                velocities[k] = state[n + place]
            return [*velocities, *(found[k] for k in self.second)]

        return all_second if len(self.second) == n else mixed


def _step(residual: Any, slope: Any, n: int) -> tuple[Array, Array]:
    """(slope⁻¹ residual, units of its components): rows and columns are brought to one size first, as equations and
    unknowns may be in any units."""
    matrix = np.array(slope, dtype=float).reshape(n, n)
    rows = 1 / np.abs(matrix).max(axis=1)
    columns = 1 / np.abs(rows[:, None] * matrix).max(axis=0)
    found = np.linalg.solve(rows[:, None] * matrix * columns, rows * np.array(residual, dtype=float))
    return columns * found, columns


def _newton(equations: Callable[[list[float]], Any], n: int) -> list[float]:
    a, before = np.zeros(n), np.inf
    for _ in range(ITERATIONS):
        residual, slope = equations(a.tolist())
        step, units = _step(residual, slope, n)
        a = a - step
        change, size = np.max(np.abs(step / units)), np.max(np.abs(a / units))
        # Steps end where rounding does, which is later for inertia matrices that are nearly singular.
        if change <= ROUNDING * size or before / 2 < change <= STALLED * size:
            return a.tolist()
        before = change
    raise ArithmeticError("the equations have no highest derivatives near zero")


@lru_cache(maxsize=32)
def stated(problem: Problem) -> Stated:
    """The equations of a problem, ready for numbers.

    With `ordering` they hold in the user's own unknowns and parameters, without a small parameter. Raises
    EvaluationError for what has no numeric value, naming it.
    """
    count = range(len(problem.unknowns))
    x, v, a = ([sp.Dummy(f"{letter}{k}", real=True) for k in count] for letter in "xva")
    equations = _hidden(problem, x, v, a)
    time = sp.Dummy("t", real=True)
    plain = {problem.time: time} | ({problem.small: sp.Integer(1)} if problem.ordering is not None else {})
    equations, laws = _named_laws(problem, [e.subs(plain) for e in equations])
    names = {s.name: s for s in (*problem.parameters, problem.small)}
    present = set().union(*(e.free_symbols for e in equations))
    used = present - {time, *x, *v, *a}
    second = tuple(k for k in count if a[k] in present)
    highest = [a[k] if k in second else v[k] for k in count]
    state = [*x, *(v[k] for k in second)]
    if strange := sorted(used - set(names.values()), key=str):
        raise EvaluationError(f"the equations contain {strange[0]}, which is no parameter of the problem")
    applied = set().union(*(e.atoms(sp.core.function.AppliedUndef) for e in equations))
    if unknown := sorted((f for f in applied if str(f.func) not in laws), key=str):
        shown = unknown[0].subs(time, problem.time)
        raise EvaluationError(f"{shown} has no numeric value: state the problem with a known function in its place")
    parameters = sorted((s for s in used), key=lambda s: str(s.name))
    inertia = sp.Matrix([[sp.diff(e, y) for y in highest] for e in equations])
    if inertia.has(sp.Derivative):
        raise EvaluationError(
            "a force law depends on an acceleration, so that the equations cannot be solved for it: state the law in "
            "displacements and velocities"
        )
    rest = sp.Matrix([e.subs(dict.fromkeys(highest, 0)) for e in equations])
    linear = not inertia.free_symbols & set(highest)
    explicit = _explicit(inertia, rest) if linear else None
    if explicit is not None:
        arguments, output = [time, *state, *parameters], explicit
    else:
        arguments, output = [time, *state, *highest, *parameters], [equations, list(inertia)]
    compiled = sp.lambdify(arguments, output, modules=[laws, "math"], cse=True)
    return Stated(
        len(x), second, tuple(str(s.name) for s in parameters), compiled, not linear, linear and explicit is None
    )


def _named_laws(
    problem: Problem, equations: Sequence[sp.Expr]
) -> tuple[list[sp.Expr], dict[str, Callable[..., float]]]:
    """The equations with force laws under names that source code can hold, and what these names stand for."""
    called = {name: sp.Function(law_name(name)) for name in problem.laws}

    def is_law(x: sp.Basic) -> bool:
        return isinstance(x, sp.core.function.AppliedUndef) and str(x.func) in called

    laws = {law_name(name): lambda *x, function=law.function: float(function(*x)) for name, law in problem.laws.items()}
    return [e.replace(is_law, lambda x: called[str(x.func)](*x.args)) for e in equations], laws


def _explicit(inertia: sp.Matrix, rest: sp.Matrix) -> list[sp.Expr] | None:
    """The highest derivatives in closed form: one or two coupled ones, or each alone in an equation; None otherwise."""
    size = inertia.rows
    if size <= 2:
        found = -inertia.adjugate() * rest
        return [x / inertia.det() for x in found]
    alone = {j: i for i in range(size) for j in [j for j in range(size) if inertia[i, j] != 0][:1]}
    if len(alone) < size or any(sum(x != 0 for x in inertia.row(i)) != 1 for i in range(size)):
        return None
    return [-rest[alone[j]] / inertia[alone[j], j] for j in range(size)]


def _hidden(problem: Problem, x: Sequence[sp.Symbol], v: Sequence[sp.Symbol], a: Sequence[sp.Symbol]) -> list[sp.Expr]:
    """The equations in symbols for displacements, velocities and accelerations, every relation put in."""
    derivatives, places = {}, {}
    for k, u in enumerate(problem.unknowns):
        derivatives[u.diff(problem.time, 2)], derivatives[u.diff(problem.time)], places[u] = a[k], v[k], x[k]
    equations = [problem.with_relations(e.xreplace(derivatives).xreplace(places)) for e in problem.equations]
    named = set().union(*(e.free_symbols for e in problem.equations))
    for key, value in problem.resonances:
        if key in problem.unknowns:
            k = problem.unknowns.index(key)
            equations = _with_frequency(problem, equations, (*x, *v, *a), (x[k], a[k]), problem.with_relations(value))
        elif not key.free_symbols & named:
            raise _of_a_mode(key)
    return equations


def _with_frequency(
    problem: Problem,
    equations: list[sp.Expr],
    jets: Sequence[sp.Symbol],
    own: tuple[sp.Symbol, sp.Symbol],
    frequency: sp.Expr,
) -> list[sp.Expr]:
    """The equations with a natural frequency given: own stiffness becomes inertia times its square.

    `own` are the displacement and the acceleration of the unknown.
    """
    place, acceleration = own
    # At leading order: at rest, without the small parameter and without parameters that carry an order.
    ordered = [s for s, q in (problem.ordering or {}).items() if isinstance(s, sp.Symbol) and q]
    leading = dict.fromkeys([*jets, problem.small, *ordered], sp.Integer(0))
    slopes = [{y: sp.diff(e, y).subs(leading) for y in jets} for e in equations]
    i = next((i for i, slope in enumerate(slopes) if slope[acceleration] != 0), 0)
    if any(slopes[i][y] != 0 for y in jets if y not in own) or any(
        slope[y] != 0 for j, slope in enumerate(slopes) if j != i for y in own
    ):
        raise _of_a_mode(problem.unknowns[jets.index(place)])
    changed = sp.expand(equations[i] - slopes[i][place] * place) + slopes[i][acceleration] * frequency**2 * place
    return [*equations[:i], changed, *equations[i + 1 :]]


def _of_a_mode(key: sp.Expr) -> EvaluationError:
    return EvaluationError(
        f"the relation for {key} gives the natural frequency of a mode of coupled equations, which then have another "
        "stiffness than stated: state the equations with a stiffness that has this frequency, and compare those"
    )
