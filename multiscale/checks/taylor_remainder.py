"""What the Taylor polynomials of an expansion leave out at a working amplitude.

    ρ_k = max |f_k − T_k| / max_j |K_kj| a_j        over |u_j| ≤ a_j, |du_j/dt| ≤ ω_j a_j, all times

f_k is equation k as stated, T_k its Taylor polynomial as the expansion uses it, K_kj a_j the largest linear restoring
force in it. For coupled equations the largest frequency stands for each ω_j. Points of a grid, its corners among them;
in double precision, so that below about 1e-15 there is no telling. A small ρ does not bound the error of the expansion;
a large one says that it cannot be right.
"""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
import numpy.typing as npt
import sympy as sp

from multiscale.checks.singularities import singular_places
from multiscale.errors import EvaluationError
from multiscale.expansion import Expansion
from multiscale.problem import Problem

__all__ = ["TaylorRemainder", "taylor_remainder"]

POINTS = 4001
"""Grid points in all, for one variable or several."""

ALIASES = {"Abs": "abs", "asin": "arcsin", "acos": "arccos", "atan": "arctan", "asinh": "arcsinh"}
ALIASES |= {"acosh": "arccosh", "atanh": "arctanh", "atan2": "arctan2"}
ALIASES |= {"cot": "tan", "sec": "cos", "csc": "sin", "coth": "tanh", "sech": "cosh", "csch": "sinh"}

Array = npt.NDArray[np.float64]


@dataclass(frozen=True, eq=False)
class TaylorRemainder:
    """Remainders of Taylor polynomials.

    Attributes
    ----------
    amplitude : tuple of arrays
        a_j, one entry for each unknown.
    relative : array, (equations,) + S
        Largest remainder in each equation over the largest linear restoring force in it, ``max_j |K_kj| a_j``.
    radius : tuple of float or None
        For each unknown the distance to the nearest singularity, real or complex, with the others at rest: the radius
        of convergence. Infinite for entire functions, None where it is not decided.
    order : int
        Of the expansion.
    """

    amplitude: tuple[Array, ...]
    relative: Array
    radius: tuple[float | None, ...]
    order: int


def taylor_remainder(
    expansion: Expansion, amplitude: Any, parameters: Mapping[Any, Any] | None = None
) -> TaylorRemainder:
    """The remainder of the Taylor polynomials in use, relative to the linear restoring force.

    Parameters
    ----------
    expansion : Expansion
    amplitude : number or array of shape S, or mapping {unknown: number or array}
        Largest displacement from the state of rest, > 0; one value for all unknowns, or one for each.
    parameters : mapping, optional
        Numbers for all parameters (symbols or names), as for the generated functions.

    Returns
    -------
    TaylorRemainder

    Raises
    ------
    EvaluationError
        A force is singular inside the range of motion; the stiffness at rest is not positive (pull-in); a value is
        missing.

    Examples
    --------
    >>> import sympy as sp, multiscale as ms
    >>> t = sp.Symbol("t")
    >>> u = sp.Function("u")(t)
    >>> result = ms.expand(ms.Problem(u.diff(t, 2) + sp.sin(u), u, ordering={u: 1}), order=4)
    >>> found = ms.taylor_remainder(result, [0.5, 1.0, 2.0])
    >>> [round(float(x), 6) for x in found.relative[0]]
    [3e-06, 0.000196, 0.012018]
    >>> found.radius
    (inf,)
    """
    if not isinstance(expansion, Expansion):
        raise EvaluationError(f"taylor_remainder was given a {type(expansion).__name__}: pass an Expansion")
    problem = expansion.problem
    sizes = _amplitudes(problem, amplitude)
    values = _numbers(expansion, parameters or {})
    frequencies = _frequencies(expansion, values)
    jets = {sp.Symbol(f"@{k}.{d}", real=True): (k, d) for k in range(len(problem.unknowns)) for d in (0, 1, 2)}
    stated = [_plain(x, problem, jets, values) for x in problem.equations]
    polynomials = [_plain(x, problem, jets, values) for x in problem.polynomials(expansion.order)]
    radii = tuple(_radius(stated, polynomials, jets, k, sizes[k], problem) for k in range(len(problem.unknowns)))
    relative = []
    for x, y in zip(stated, polynomials, strict=True):
        remainder = _largest(x - y, jets, problem, sizes, frequencies, values)
        relative.append(remainder / _restoring(y, jets, sizes, problem))
    return TaylorRemainder(tuple(sizes), np.stack(np.broadcast_arrays(*relative)), radii, expansion.order)


def _amplitudes(problem: Problem, given: Any) -> list[Array]:
    each = [given.get(u) for u in problem.unknowns] if isinstance(given, Mapping) else [given] * len(problem.unknowns)
    if isinstance(given, Mapping) and (set(given) != set(problem.unknowns)):
        raise EvaluationError(f"amplitude has the keys {tuple(given)}: expected {problem.unknowns}")
    try:
        arrays = np.broadcast_arrays(*(np.asarray(x, dtype=np.float64) for x in each))
    except (TypeError, ValueError):
        raise EvaluationError(f"amplitude is {given!r}: expected numbers that broadcast") from None
    if not all((x > 0).all() and np.isfinite(x).all() for x in arrays):
        raise EvaluationError(f"amplitude is {given!r}: expected positive numbers")
    return [np.array(x) for x in arrays]


def _numbers(expansion: Expansion, parameters: Mapping[Any, Any]) -> dict[sp.Symbol, float]:
    """Every parameter of the problem, ε among them, as a number; the rules are those of the generated functions."""
    function = expansion.to_numpy()
    by_name = {str(s.name): s for s in (*expansion.problem.parameters, expansion.problem.small)}
    values = function.values(parameters)
    if any(np.ndim(x) for x in values):
        raise EvaluationError("parameters must be numbers here: arrays are for the amplitude")
    return {by_name[name]: float(x) for name, x in zip(function.parameters, values, strict=True)}


def _frequencies(expansion: Expansion, values: Mapping[sp.Symbol, float]) -> list[float]:
    """One for each unknown: its own, or for coupled equations the largest."""
    problem, found = expansion.problem, []
    for name, w in zip(problem.frequency_names, problem.natural_frequencies, strict=True):
        value = complex(w.subs({problem.time: 0}).subs(values))
        if not (value.real > 0 and abs(value.imag) < 1e-12 * value.real):
            raise EvaluationError(
                f"the squared frequency {name}**2 at the state of rest is {(value**2).real:.6g}, not positive: the "
                "rest is unstable there (pull-in, buckling) and no oscillation is expanded about it"
            )
        found.append(value.real)
    if expansion.computation.canonical.operator is not None:
        return [max(found)] * len(problem.unknowns)
    return found


def _plain(
    x: sp.Expr, problem: Problem, jets: Mapping[sp.Symbol, tuple[int, int]], values: Mapping[sp.Symbol, float]
) -> sp.Expr:
    """An equation in jets and time, all else numbers."""
    named = {problem.unknowns[k].diff(problem.time, d): s for s, (k, d) in jets.items() if d}
    named_zero = {problem.unknowns[k]: s for s, (k, d) in jets.items() if not d}
    return problem.with_relations(x).xreplace(named).xreplace(named_zero).subs(values)


def _restoring(
    x: sp.Expr, jets: Mapping[sp.Symbol, tuple[int, int]], sizes: Sequence[Array], problem: Problem
) -> Array:
    """max_j |K_kj| a_j in equation k, K its constant part: drives are left out."""
    forces = []
    for s, (j, derivative) in jets.items():
        if derivative == 0:
            slope = sp.expand(sp.diff(x, s).subs(dict.fromkeys(jets, 0)))
            steady = sp.Add(*(term for term in sp.Add.make_args(slope) if problem.time not in term.free_symbols))
            forces.append(abs(float(steady)) * sizes[j])
    found: Array = np.max(np.broadcast_arrays(*forces), axis=0)
    return found


def _radius(
    stated: list[sp.Expr],
    polynomials: list[sp.Expr],
    jets: Mapping[sp.Symbol, tuple[int, int]],
    k: int,
    size: Array,
    problem: Problem,
) -> float | None:
    own = next(s for s, jet in jets.items() if jet == (k, 0))
    others, ones = ({s: value for s in jets if s != own} for value in (0, 1))
    radius: float | None = math.inf
    for x, y in zip(stated, polynomials, strict=True):
        if x == y:
            continue
        terms = [term for term in sp.Add.make_args(x) if own in term.free_symbols]
        # A factor that vanishes at rest, such as a velocity, hides no singularity of the rest of its term.
        alone = sp.Add(*(term.subs(others) or term.subs(ones) for term in terms))
        if alone.has(sp.zoo, sp.nan):
            return None
        places = singular_places(alone, own)
        if places is None:
            radius = None
            continue
        inside = [z.real for z in places if abs(z.imag) < 1e-9 * abs(z) and abs(z) <= size.max()]
        if inside:
            raise EvaluationError(
                f"a force is singular at {problem.unknowns[k]} = {min(inside, key=abs):.6g} from rest, inside the "
                f"range of motion: amplitudes must stay below it, {size.max():.6g} was given"
            )
        if radius is not None and places.size:
            radius = min(radius, float(np.abs(places).min()))
    return radius


def _largest(
    difference: sp.Expr,
    jets: Mapping[sp.Symbol, tuple[int, int]],
    problem: Problem,
    sizes: list[Array],
    frequencies: list[float],
    values: Mapping[sp.Symbol, float],
) -> Array:
    """max |difference| over the grid, for each amplitude."""
    used = [s for s in jets if s in difference.free_symbols]
    moving = problem.time in difference.free_symbols
    if not used:
        return np.zeros_like(sizes[0])
    count = len(used) + moving
    points = max(5, round(POINTS ** (1 / count)) // 2 * 2 + 1)
    axis = np.linspace(-1.0, 1.0, points)
    grid = np.stack(np.meshgrid(*[axis] * count, indexing="ij")).reshape(count, -1)
    shape = (-1,) + (1,) * sizes[0].ndim
    arguments = [
        row.reshape(shape) * sizes[jets[s][0]] * frequencies[jets[s][0]] ** jets[s][1]
        for s, row in zip(used, grid[: len(used)], strict=True)
    ]
    if moving:
        slowest = min((abs(float(w.subs(values))) for w in map(problem.with_relations, problem.drives)), default=1.0)
        arguments.append((grid[-1] * math.pi / slowest).reshape(shape))
    function = sp.lambdify([*used, problem.time][:count], difference, modules=_modules(difference))
    with np.errstate(all="ignore"):
        found = np.abs(function(*arguments) + np.zeros_like(arguments[0]))
    if not np.isfinite(found).all():
        raise EvaluationError(
            f"a force of {problem.unknowns} is singular or complex inside the range of motion: use smaller amplitudes"
        )
    return np.asarray(found.max(axis=0), dtype=np.float64)


def _modules(x: sp.Expr) -> list[str]:
    """Where the functions of an expression come from: SciPy is asked only for what NumPy does not have."""
    special = [f for f in x.atoms(sp.Function) if not hasattr(np, ALIASES.get(f.func.__name__, f.func.__name__))]
    return ["scipy", "numpy"] if special else ["numpy"]
