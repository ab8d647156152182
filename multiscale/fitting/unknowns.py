"""What is fitted: which parameters are free, and how the parameters of the generated functions follow from them.

    P(θ):  free parameters θ and known ones -> every parameter of the problem,        ∂P/∂θ by the chain rule

A free or known parameter may be a symbol that a relation eliminated (a drive frequency instead of its detuning); the
detuning then depends on every parameter of the relation.
"""

from __future__ import annotations

from collections.abc import Iterable, Mapping
from dataclasses import dataclass
from typing import Any

import numpy as np
import numpy.typing as npt
import sympy as sp

from multiscale.codegen.numpy_function import NumpyFunction
from multiscale.errors import EvaluationError
from multiscale.problem import Problem

__all__ = ["Unknowns"]

Array = npt.NDArray[Any]


@dataclass(frozen=True)
class Unknowns:
    """`names` of the free parameters in their order, and the values of the known ones by name."""

    problem: Problem
    function: NumpyFunction
    names: tuple[str, ...]
    known: tuple[tuple[str, Any], ...]

    @classmethod
    def of(
        cls, problem: Problem, function: NumpyFunction, free: Iterable[Any], known: Mapping[Any, Any] | None
    ) -> Unknowns:
        """Raises `EvaluationError` for names that are unknown, missing, repeated, or both free and known."""
        names = tuple(_name(x) for x in ((free,) if isinstance(free, str | sp.Symbol) else free))
        given = {_name(key): value for key, value in (known or {}).items()}
        if repeated := [x for k, x in enumerate(names) if x in names[:k] or x in given]:
            raise EvaluationError(f"parameter {repeated[0]!r} is given twice: it is either free, once, or known")
        if several := [x for x, value in given.items() if np.size(value) != 1]:
            raise EvaluationError(
                f"parameter {several[0]!r} has {np.size(given[several[0]])} values: expected one number"
            )
        given = {x: np.reshape(value, ())[()] for x, value in given.items()}
        found = cls(problem, function, names, tuple(given.items()))
        function.values({**given, **dict.fromkeys(names, 1.0)})
        return found

    def values(self, free: Array, **more: Any) -> tuple[Any, ...]:
        """Every parameter, in the order of the generated functions."""
        return self.function.values({**dict(self.known), **dict(zip(self.names, free.tolist(), strict=True)), **more})

    def _given(self, more: Iterable[str]) -> set[str]:
        return {*self.names, *dict(self.known), *more}

    def _slopes(self, given: set[str]) -> list[tuple[int, int, Any, tuple[str, ...]]]:
        """(place of a detuning, place of a free parameter, ∂ formula, its arguments)."""
        slopes = []
        for d in self.problem.detunings:
            name = "" if d.detuning is None else str(d.detuning.name)
            if name in given or name not in self.function.parameters:
                continue
            arguments = tuple(sorted(d.formula.free_symbols, key=lambda s: str(s.name)))
            for k, free in enumerate(self.names):
                slope = sp.Add(*(sp.diff(d.formula, s) for s in arguments if s.name == free))
                if slope != 0:
                    place = self.function.parameters.index(name)
                    call = sp.lambdify(arguments, slope, "numpy")
                    slopes.append((place, k, call, tuple(str(s.name) for s in arguments)))
        return slopes

    def chain(self, free: Array, **more: Any) -> Array:
        """∂P/∂θ, shape (parameters, free) + B, B the shape of the values in `more`."""
        parameters = self.function.parameters
        batch = np.broadcast_shapes(*(np.shape(x) for x in more.values()))
        result = np.zeros((len(parameters), len(self.names), *batch))
        for k, name in enumerate(self.names):
            if name in parameters:
                result[parameters.index(name), k] = 1.0
        named = {**dict(self.function.defaults), **dict(self.known), **more}
        named |= dict(zip(parameters, self.values(free, **more), strict=True))
        named |= dict(zip(self.names, free.tolist(), strict=True))
        for place, k, slope, arguments in self._slopes(self._given(more)):
            result[place, k] += slope(*(named[x] for x in arguments))
        return result


def _name(x: Any) -> str:
    if not isinstance(x, str | sp.Symbol):
        raise EvaluationError(f"{x!r} is no parameter: give symbols or names")
    return str(x.name) if isinstance(x, sp.Symbol) else x
