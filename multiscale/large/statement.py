"""The symbolic side of a large model: a problem in the carried modes that says what the ring, the clock and the
coefficients of the weak terms are. What the terms do to vectors is said elsewhere.

    u_j'' + ω_j² u_j + ε^p c u_1' + ε^o c u_1'³ + ε^q c u_1² + ε^r c u_1³ = Σ_d ε^s g_d(t) u_1^(5+2d)

Frequencies are symbols here, so that relations between them are read as they are everywhere, and become numbers at the
end; the weak terms stand in the first equation as place holders for the matrix or tensor that they multiply, each
recognised by its powers of u_1. So the equations of this problem are not those of the model, and reading them raises.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import replace
from typing import Any

import sympy as sp

from multiscale.errors import MultiscaleError, ProblemError, ResonanceError
from multiscale.problem import Problem
from multiscale.problem.canonical import Canonical
from multiscale.problem.preparation import Prepared
from multiscale.problem.reading import given_expression
from multiscale.problem.relations import relation_pairs

__all__ = ["PLACES", "ModelStatement", "drive_place", "state"]

PLACES = {"C": ((0, 1),), "K1": ((0, 1),) * 3, "quadratic": ((0, 0),) * 2, "cubic": ((0, 0),) * 3}
"""The factors by which the terms of a kind are known."""
REFUSAL = (
    "the equations of a large model stand in its matrices, not in this problem: what reads them (certify, compare, "
    "to_json, write_module, backbone of a driven model, …) does not apply; use the methods of a ReducedModel, such as "
    "certify() and residual()"
)


def drive_place(number: int) -> tuple[tuple[int, int], ...]:
    """The factors of the place holder of a load."""
    return ((0, 0),) * (5 + 2 * number)


class ModelStatement(Problem):
    """A `Problem` in the references of the carried modes; its frequencies are numbers, its equations are shut."""

    def __init__(
        self,
        equations: Sequence[sp.Expr],
        unknowns: Sequence[sp.Expr],
        small: sp.Symbol,
        resonances: Sequence[tuple[sp.Expr, sp.Expr]],
        numbers: Mapping[sp.Symbol, float],
    ) -> None:
        self._numbers = {s: sp.Float(x) for s, x in numbers.items()}
        self._finished: dict[int, Canonical] = {}
        self._shut = False
        relations = [sp.Eq(key, value, evaluate=False) for key, value in resonances]
        super().__init__(equations, unknowns, small=small, resonances=relations)
        _ = self.parameters, self.small
        self._shut = True

    @property
    def equations(self) -> tuple[sp.Expr, ...]:
        """Shut once the statement has been read."""
        if self._shut:
            raise MultiscaleError(REFUSAL)
        return self._stated

    @equations.setter
    def equations(self, given: tuple[sp.Expr, ...]) -> None:
        self._stated = given

    def _prepared(self, order: int) -> Prepared:
        """What the statement itself reads of its equations, for relations and higher orders."""
        shut, self._shut = self._shut, False
        try:
            return super()._prepared(order)
        finally:
            self._shut = shut

    @property
    def parameters(self) -> tuple[sp.Symbol, ...]:
        """Those of loads, coefficients and detunings; the frequencies are numbers."""
        if "_own_parameters" not in self.__dict__:
            self._own_parameters = tuple(s for s in super().parameters if s not in self._numbers)
        return self._own_parameters

    def canonical(self, order: int) -> Canonical:
        """The canonical form with numbers for the frequencies."""
        form = super().canonical(order)
        if id(form) not in self._finished:
            self._finished[id(form)] = _with_numbers(form, self._numbers)
        return self._finished[id(form)]

    def in_numbers(self, x: sp.Expr) -> sp.Expr:
        """An expression in parameters and time, relations and frequencies put in."""
        return self.with_relations(x).subs(self._numbers)

    def check_detunings(self) -> None:
        """Refuses a relation that would move a frequency of the matrices by a fixed amount."""
        for (symbol, own), shift in zip(self._numbers.items(), self.shifts, strict=True):
            if not shift.free_symbols - {self.small} and abs(shift.subs(self.small, 0)) > 1e-9 * own**2:
                raise ResonanceError(
                    f"the relation for {symbol} makes it {self.in_numbers(symbol).subs(self.small, 0):.10g}, but the "
                    f"matrices have {own:.10g}: add a detuning, {{{symbol}: … + {self.small}*sigma}}"
                )

    @property
    def shifts(self) -> list[sp.Expr]:
        """ω² by its relation less the ω² of the matrices, for each carried mode; 0 where no relation moves it."""
        found = []
        for symbol, own in self._numbers.items():
            related = self.with_relations(symbol)
            found.append(sp.Integer(0) if related == symbol else related.subs(self._numbers) ** 2 - own**2)
        return found

    def _key(self) -> tuple[Any, ...]:
        return (id(self),)

    def __reduce__(self) -> tuple[Any, ...]:
        raise MultiscaleError(REFUSAL)

    def __repr__(self) -> str:
        values = ", ".join(f"{w:.6g}" for w in self.natural_frequencies)
        return f"statement of a large model in {', '.join(map(str, self.unknowns))}, frequencies {values}"

    def _repr_latex_(self) -> str:
        return repr(self)


def _with_numbers(form: Canonical, numbers: Mapping[sp.Symbol, sp.Expr]) -> Canonical:
    def put(x: sp.Expr) -> sp.Expr:
        return x.subs(numbers)

    drives = tuple(
        replace(d, frequency=put(d.frequency), angle=put(d.angle), reduced_frequency=put(d.reduced_frequency))
        for d in form.drives
    )
    return replace(
        form,
        meanings=tuple((name, put(x)) for name, x in form.meanings),
        frequencies=tuple(sp.Float(put(w)) for w in form.frequencies),
        drives=drives,
        detunings=tuple(
            replace(d, formula=d.formula.subs({s: x for s, x in numbers.items() if s != d.eliminated}))
            for d in form.detunings
        ),
    )


def state(
    frequencies: Sequence[float],
    scales: Mapping[str, Any],
    drives: Sequence[sp.Expr],
    orders: Mapping[str, int],
    resonances: Any,
    small: sp.Symbol | None,
    time: sp.Symbol | None,
) -> ModelStatement:
    """The statement; `scales` are the coefficients of the kinds of terms that the model has."""
    drives = [_expression("drive", g) for g in drives]
    time = time if time is not None else _time_in(drives)
    small = small if small is not None else sp.Symbol("epsilon", positive=True)
    unknowns = [sp.Function(f"u_{k + 1}")(time) for k in range(len(frequencies))]
    symbols = [sp.Symbol(f"omega_{k + 1}", positive=True) for k in range(len(frequencies))]
    equations = [u.diff(time, 2) + w**2 * u for u, w in zip(unknowns, symbols, strict=True)]
    first = unknowns[0]
    held = {"C": first.diff(time), "K1": first.diff(time) ** 3, "quadratic": first**2, "cubic": first**3}
    for name, scale in scales.items():
        equations[0] += small ** orders[name] * _expression(f"scale of {name}", scale) * held[name]
    for d, g in enumerate(drives):
        equations[0] -= small ** max(orders["drive"], 1) * g * first ** len(drive_place(d))
    named = {s.name: s for s in symbols}
    relations = [(_renamed(key, named), _renamed(value, named)) for key, value in relation_pairs(resonances)]
    return ModelStatement(equations, unknowns, small, relations, dict(zip(symbols, frequencies, strict=True)))


def _expression(name: str, given: Any) -> sp.Expr:
    value = given_expression(given)
    if value is None:
        raise ProblemError(f"{name} is {given!r}, a {type(given).__name__}: expected a number or a SymPy expression")
    return value


def _time_in(drives: Sequence[sp.Expr]) -> sp.Symbol:
    """The symbol t of the drives, whatever is assumed of it."""
    found = {s for g in drives for s in g.free_symbols if s.name == "t"}
    return min(found, key=str) if found else sp.Symbol("t", real=True)


def _renamed(x: sp.Expr, named: Mapping[str, sp.Symbol]) -> sp.Expr:
    """omega_1, omega_2, … mean the carried modes, whatever is assumed of the user's symbols."""
    return x.xreplace({s: named[s.name] for s in x.free_symbols if s.name in named})
