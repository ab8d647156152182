"""States of rest of the equations as stated: all derivatives zero, drives that vary with time left out.

    F(u) = 0,     stable where every eigenvalue of M⁻¹ ∂F/∂u, a squared frequency, is positive

One unknown in a rational force: exact where the polynomial has factors of degree one or two, and all real roots where
its coefficients are numbers. Otherwise by Newton's method in high precision, from a given place.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import Any

import mpmath
import sympy as sp

from multiscale.errors import EvaluationError
from multiscale.problem.given import read_statement
from multiscale.problem.reading import decimals, given_expression

__all__ = ["RestState", "states_of_rest"]

DIGITS = 30


@dataclass(frozen=True)
class RestState:
    """A state of rest.

    Attributes
    ----------
    position : dict
        {unknown: position}, exact where `exact` says so, else numbers of 30 digits.
    squared_frequencies : tuple of Expr
        The eigenvalues of mass⁻¹ · stiffness there.
    exact : bool
    """

    position: dict[sp.Expr, sp.Expr]
    squared_frequencies: tuple[sp.Expr, ...]
    exact: bool

    @property
    def stable(self) -> bool | None:
        """Whether every squared frequency is positive; None where that depends on parameters."""
        signs = [sp.re(x).is_positive if x.is_number else x.is_positive for x in self.squared_frequencies]
        return None if None in signs else all(signs)


def states_of_rest(
    equations: sp.Expr | sp.Eq | Sequence[sp.Expr | sp.Eq],
    unknowns: sp.Expr | Sequence[sp.Expr],
    parameters: Mapping[Any, Any] | None = None,
    *,
    start: Mapping[sp.Expr, Any] | None = None,
) -> tuple[RestState, ...]:
    """The states of rest of equations of motion: what `Problem` can be told to measure the unknowns from.

    Parameters
    ----------
    equations, unknowns
        As for `Problem`, before any shift.
    parameters : mapping, optional
        Values of symbols (or of names); what is left out stays a symbol.
    start : mapping, optional
        {unknown: a place near the state of rest}, zero by default; used where the equations are not those of one
        unknown with a rational force.

    Returns
    -------
    tuple of RestState
        By position, where it is a number. For one rational force with numeric coefficients: all of them.

    Raises
    ------
    EvaluationError
        No state of rest is found, or a value is missing that a numeric search needs.

    Examples
    --------
    A plate in front of an electrode at the distance 1: the second state, past pull-in at u = 1/3, is unstable, and the
    third lies beyond the electrode.

    >>> import sympy as sp, multiscale as ms
    >>> t, V = sp.symbols("t V", positive=True)
    >>> u = sp.Function("u")(t)
    >>> states = ms.states_of_rest(u.diff(t, 2) + u - V**2/(1 - u)**2, u, {V: sp.sqrt(2)/4})
    >>> [(state.position[u], state.stable) for state in states]
    [(3/4 - sqrt(5)/4, True), (1/2, False), (sqrt(5)/4 + 3/4, True)]
    """
    stated, names, time = read_statement(equations, unknowns)
    values = _values(parameters or {}, set().union(*(x.free_symbols for x in stated)))
    places = [sp.Symbol(f"@{k}", real=True) for k in range(len(names))]
    static, mass = _static(stated, names, time, places, values)
    if len(places) == 1 and static[0].is_rational_function(places[0]):
        found = _roots(static[0], places[0])
    else:
        found = [_newton(static, places, names, start or {})]
    return tuple(_state(static, mass, places, names, *x) for x in found)


def _values(given: Mapping[Any, Any], symbols: set[sp.Symbol]) -> dict[sp.Symbol, sp.Expr]:
    by_name = {str(s.name): s for s in symbols}
    result = {}
    for key, value in given.items():
        name = key.name if isinstance(key, sp.Symbol) else key
        number = given_expression(value)
        if name not in by_name or number is None:
            known = ", ".join(sorted(by_name))
            raise EvaluationError(f"parameter {key!r} = {value!r}: expected numbers for some of {known}")
        result[by_name[name]] = decimals(number)
    return result


def _static(
    stated: Sequence[sp.Expr],
    names: Sequence[sp.Expr],
    time: sp.Symbol,
    places: Sequence[sp.Symbol],
    values: Mapping[sp.Symbol, sp.Expr],
) -> tuple[list[sp.Expr], sp.Matrix]:
    """(F, M) in the places: the static forces and the coefficients of the accelerations."""
    accelerations = [sp.Dummy() for _ in names]
    static, rows = [], []
    for x in stated:
        hidden = decimals(x).xreplace({u.diff(time, 2): a for u, a in zip(names, accelerations, strict=True)})
        hidden = hidden.xreplace({d: sp.Integer(0) for d in hidden.atoms(sp.Derivative)})
        hidden = hidden.xreplace(dict(zip(names, places, strict=True))).subs(values)
        steady = [term for term in sp.Add.make_args(sp.expand(hidden)) if time not in term.free_symbols]
        hidden = sp.Add(*steady)
        rows.append([sp.diff(hidden, a).subs(dict.fromkeys(accelerations, 0)) for a in accelerations])
        static.append(hidden.subs(dict.fromkeys(accelerations, 0)))
    return static, sp.Matrix(rows)


def _roots(force: sp.Expr, place: sp.Symbol) -> list[tuple[list[sp.Expr], bool]]:
    """The zeros of a rational force: exact from factors of degree one and two, else numbers."""
    above, below = sp.fraction(sp.cancel(sp.together(force)))
    if place not in above.free_symbols:
        raise EvaluationError(f"the static force {force} does not vanish anywhere: there is no state of rest")
    found: list[tuple[sp.Expr, bool]] = []
    for factor, _ in sp.factor_list(above, place)[1]:
        polynomial = sp.Poly(factor, place)
        if polynomial.degree() <= 2:
            found += [(r, True) for r in sp.roots(polynomial) if r.is_real is not False]
        elif all(c.is_Rational for c in polynomial.coeffs()):
            found += [(r.n(DIGITS), False) for r in polynomial.real_roots()]
        else:
            raise EvaluationError(
                f"the states of rest are roots of {factor.subs(place, sp.Symbol('u'))}, of degree "
                f"{polynomial.degree()}: give values for its parameters, or use about={{u: u_s}} with a symbol"
            )
    found = [(r, exact) for r, exact in found if below.subs(place, r) != 0]
    if not found:
        raise EvaluationError("the static force has no real zero: there is no state of rest under these parameters")
    numeric = all(r.is_number for r, _ in found)
    return [([r], exact) for r, exact in (sorted(found, key=lambda x: float(x[0])) if numeric else found)]


def _newton(
    static: Sequence[sp.Expr], places: Sequence[sp.Symbol], names: Sequence[sp.Expr], start: Mapping[sp.Expr, Any]
) -> tuple[list[sp.Expr], bool]:
    free = set().union(*(x.free_symbols for x in static)) - set(places)
    if free:
        raise EvaluationError(
            f"the states of rest are found numerically here: give values for {', '.join(sorted(map(str, free)))}"
        )
    if strange := [u for u in start if u not in names]:
        raise EvaluationError(f"start has the key {strange[0]!r}: expected some of {tuple(names)}")
    begin = [mpmath.mpf(str(start.get(u, 0))) for u in names]
    function = sp.lambdify(places, list(static), modules="mpmath")
    with mpmath.workdps(DIGITS + 10):
        try:
            if len(begin) == 1:
                values = [mpmath.findroot(lambda x: function(x)[0], begin[0])]
            else:
                values = list(mpmath.findroot(lambda *x: function(*x), begin))
        except (ValueError, ZeroDivisionError) as error:
            reached = ", ".join(f"{u} = {mpmath.nstr(x, 6)}" for u, x in zip(names, begin, strict=True))
            raise EvaluationError(f"no state of rest was found from {reached} ({error}): give another start") from None
    return [sp.Float(x, DIGITS) for x in values], False


def _state(
    static: Sequence[sp.Expr],
    mass: sp.Matrix,
    places: Sequence[sp.Symbol],
    names: Sequence[sp.Expr],
    position: Sequence[sp.Expr],
    exact: bool,
) -> RestState:
    there = dict(zip(places, position, strict=True))
    stiffness = sp.Matrix([[sp.diff(f, x) for x in places] for f in static]).subs(there)
    inertia = mass.subs(there)
    if len(places) == 1:
        squares: tuple[sp.Expr, ...] = (sp.factor(sp.simplify(stiffness[0] / inertia[0])),)
    else:
        matrix = mpmath.matrix(inertia.inv() * stiffness)
        squares = tuple(sp.sympify(x) for x in mpmath.eig(matrix, left=False, right=False))
    return RestState(dict(zip(names, position, strict=True)), squares, exact)
