"""Force laws that are known as functions or tables of numbers only."""

from __future__ import annotations

from collections.abc import Callable, Iterable, Mapping, Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
import numpy.typing as npt
import sympy as sp

from multiscale.errors import EvaluationError, ProblemError

__all__ = ["ForceLaw", "law_name", "laws_of", "with_calls", "without_calls"]


@dataclass(frozen=True)
class ForceLaw:
    """What an undefined function F in the equations stands for: ``Problem(…, laws={F: ForceLaw(function)})``.

    A law that is a Python function cannot be written into a stand-alone module.

    Parameters
    ----------
    function : callable
        ``function(x)`` (or of several arguments), element by element on NumPy arrays of any shape. Any consistent
        units.
    kinks : sequence of float
        The values of the argument at which the function or its derivative jumps; F may then stand for one argument that
        is a multiple of one displacement or velocity, plus a constant. A kink that is not declared is found when a
        phase average does not converge, and raises `EvaluationError`.
    derivative : callable, optional
        The derivative, needed only for Jacobians of the slow flow.

    Examples
    --------
    >>> import numpy as np, sympy as sp, multiscale as ms
    >>> t = sp.Symbol("t", real=True)
    >>> eps = sp.Symbol("epsilon", positive=True)
    >>> u, F = sp.Function("u")(t), sp.Function("F")
    >>> problem = ms.Problem(u.diff(t, 2) + u + eps*F(u.diff(t)), u, small=eps, laws={F: ms.ForceLaw(np.tanh)})
    >>> rhs = ms.expand(problem, 1).slow_flow.to_numpy("polar")
    >>> rhs.bind(epsilon=0.1)(0, [2.0, 0.0]).round(6)
    array([-0.055897,  0.      ])
    """

    function: Callable[..., Any]
    kinks: tuple[float, ...] = ()
    derivative: Callable[..., Any] | None = None

    def __post_init__(self) -> None:
        if not callable(self.function):
            raise ProblemError(f"force law {self.function!r}: expected a function of numbers, or ForceLaw.table(x, y)")
        kinks = np.atleast_1d(np.asarray(self.kinks, dtype=float))
        if not np.isfinite(kinks).all() or kinks.ndim != 1:
            raise ProblemError(f"kinks are {self.kinks!r}: expected finite values of the argument")
        object.__setattr__(self, "kinks", tuple(sorted({float(k) for k in kinks})))

    @classmethod
    def table(cls, x: npt.ArrayLike, y: npt.ArrayLike) -> ForceLaw:
        """A measured law: straight lines between the points (x_i, y_i), x increasing; nothing beyond the last ones."""
        points, values = np.asarray(x, dtype=float), np.asarray(y, dtype=float)
        if points.ndim != 1 or points.shape != values.shape or len(points) < 2:
            raise ProblemError(
                f"table of shapes {points.shape} and {values.shape}: expected two 1-D arrays of one length ≥ 2"
            )
        if not (np.isfinite(points).all() and np.isfinite(values).all() and (np.diff(points) > 0).all()):
            raise ProblemError("table: expected finite numbers with increasing arguments")
        table = _Table(tuple(points.tolist()), tuple(values.tolist()))
        return cls(table, tuple(points[1:-1].tolist()), _Slope(table))

    @property
    def points(self) -> tuple[tuple[float, ...], tuple[float, ...]] | None:
        """(x, y) of a table, None for a function."""
        return (self.function.x, self.function.y) if isinstance(self.function, _Table) else None


@dataclass(frozen=True)
class _Table:
    """Straight lines between points; a picklable function."""

    x: tuple[float, ...]
    y: tuple[float, ...]

    def _checked(self, x: Any) -> Any:
        found = np.asarray(x)
        slack = 1e-12 * (self.x[-1] - self.x[0])
        if (found < self.x[0] - slack).any() or (found > self.x[-1] + slack).any():
            raise EvaluationError(
                f"a force law given as a table is asked for at {float(found.min()):.6g} … {float(found.max()):.6g}, "
                f"but was measured from {self.x[0]:.6g} to {self.x[-1]:.6g}: measure further, or keep the motion within"
            )
        return found

    def __call__(self, x: Any) -> Any:
        return np.interp(self._checked(x), self.x, self.y)

    def slope(self, x: Any) -> Any:
        slopes = np.diff(self.y) / np.diff(self.x)
        index = np.searchsorted(self.x, self._checked(x), side="right") - 1
        return slopes[np.clip(index, 0, len(slopes) - 1)]


@dataclass(frozen=True)
class _Slope:
    """The derivative of a table; equal where the tables are."""

    table: _Table

    def __call__(self, x: Any) -> Any:
        return self.table.slope(x)


class LawCall(sp.Function):  # type: ignore[misc]
    """LawCall(name, arguments …) stands for an undefined function where an equation travels."""


def with_calls(x: sp.Expr, names: Iterable[str]) -> sp.Expr:
    """x with `LawCall` for the functions of these names, which do not pickle with every SymPy themselves."""
    known = set(names)

    def is_law(e: sp.Basic) -> bool:
        return isinstance(e, sp.core.function.AppliedUndef) and str(e.func) in known

    return x.replace(is_law, lambda e: LawCall(sp.Symbol(str(e.func)), *e.args)) if known else x


def without_calls(x: sp.Expr) -> sp.Expr:
    """The inverse of `with_calls`."""
    return x.replace(lambda e: isinstance(e, LawCall), lambda e: sp.Function(e.args[0].name)(*e.args[1:]))


def law_name(function: Any) -> str:
    """The name of a law in generated source: ASCII, whatever the user called it."""
    word = "".join(c if c.isascii() and (c.isalnum() or c == "_") else "_" for c in str(function))
    return f"law_{word}"


def laws_of(given: Mapping[Any, Any]) -> dict[str, ForceLaw]:
    """{name of the undefined function: its law}, from what the user gave."""
    laws: dict[str, ForceLaw] = {}
    words: set[str] = set()
    for key, value in given.items():
        if not isinstance(key, sp.core.function.UndefinedFunction):
            raise ProblemError(f"laws has the key {key!r}: expected an undefined function, F = sympy.Function('F')")
        if isinstance(value, ForceLaw):
            law = value
        elif callable(value):
            law = ForceLaw(value)
        elif isinstance(value, Sequence | np.ndarray) and not isinstance(value, str) and len(value) == 2:
            law = ForceLaw.table(*value)
        else:
            raise ProblemError(
                f"the law of {key} is {value!r}: expected a function of numbers, a table (x, y) or a ForceLaw"
            )
        name = str(key)
        if law_name(name) in words:
            raise ProblemError(f"two force laws are both called {law_name(name)[4:]!r} in generated code: rename one")
        words.add(law_name(name))
        laws[name] = law
    return laws
