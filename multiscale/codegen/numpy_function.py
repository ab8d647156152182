"""A generated kernel behind a thin wrapper with fixed rules for shapes and names."""

from __future__ import annotations

import math
from collections.abc import Callable, Mapping
from dataclasses import dataclass, field
from functools import cache
from typing import TYPE_CHECKING, Any

import numpy as np
import numpy.typing as npt
import sympy as sp

from multiscale.codegen.runtime import RUNTIME, IntegralError
from multiscale.errors import EvaluationError

if TYPE_CHECKING:
    from multiscale.codegen.namespaces import NamespaceFunction

__all__ = ["BoundFunction", "NumpyFunction"]

Array = npt.NDArray[Any]
LONG = 20_000
"""Characters of source from which fixing the parameters works out the coefficients, which takes some milliseconds."""
_SCALARS = {float, int, np.float64}
_NUMPY: dict[str, Callable[..., Any]] = {
    "sin": np.sin,
    "cos": np.cos,
    "exp": np.exp,
    "log": np.log,
    "sqrt": np.sqrt,
    "conj": np.conjugate,
    **RUNTIME,
}
_MATH = {"sin": math.sin, "cos": math.cos, "exp": math.exp, "log": math.log, "sqrt": math.sqrt, "absolute": abs}


@dataclass(frozen=True)
class Inversion:
    """A detuning from the frequencies of its relation: `source` defines ``kernel(*arguments) -> (detuning,)``.

    `eliminated` are names that a mapping may give although they are no parameters any more. `detuning` is one of them
    (or "") where a relation has no detuning: then what is given can only be checked.
    """

    eliminated: tuple[str, ...]
    detuning: str
    arguments: tuple[str, ...]
    source: str
    functions: tuple[str, ...]

    def completed(self, found: Mapping[str, Any]) -> dict[str, Any]:
        """`found` with the detuning worked out where its frequencies are given, and checked where it is given too."""
        given = [name for name in self.eliminated if name in found]
        lacking = [name for name in self.arguments if name not in found]
        if lacking:
            if given and given != [self.detuning]:
                raise EvaluationError(
                    f"{given[0]} is given, but not {', '.join(lacking)}: {self.detuning} cannot be worked out"
                )
            return dict(found)
        with np.errstate(all="ignore"):
            # Complex values pass: the derivative of a detuning by its frequency may be taken by a complex step.
            numbers = [
                _array(found[name], np.complex128 if np.iscomplexobj(found[name]) else np.float64, name)
                for name in self.arguments
            ]
            formula = _compiled(self.source, self.functions)
            (value,) = formula(*numbers)
        if self.detuning in found:
            own = _array(found[self.detuning], np.float64, self.detuning)
            stated = ", ".join(f"{name} = {found[name]}" for name in given if name != self.detuning) or "the others"
            # A detuning is a small difference of frequencies: it is known as well as these are, to twelve digits.
            with np.errstate(all="ignore"):
                changed = [[*numbers[:k], x * (1 + 1e-12), *numbers[k + 1 :]] for k, x in enumerate(numbers)]
                slack = np.abs([formula(*others)[0] - value for others in changed]).sum(axis=0)
            if not np.allclose(own - value, 0.0, rtol=0.0, atol=1e-9 * np.abs(value) + slack):
                raise EvaluationError(
                    f"{self.detuning} = {found[self.detuning]} contradicts {stated}, "
                    f"which needs {self.detuning} = {value}: give one of them"
                )
        elif not np.isfinite(value).all():
            raise EvaluationError(
                f"{self.detuning} cannot be worked out from {', '.join(self.arguments)}: give it directly"
            )
        return {**found, self.detuning: value} if self.detuning else dict(found)


@cache
def _compiled(text: str, functions: tuple[str, ...]) -> Callable[..., tuple[Any, ...]]:
    """The kernel of generated source, which holds no text of the user's, with NumPy's functions."""
    scope: dict[str, Any] = {name: _NUMPY[name] for name in functions}
    exec(compile(text, "<multiscale detuning>", "exec"), scope)
    return scope["kernel"]  # type: ignore[no-any-return]


@dataclass(frozen=True, repr=False)
class NumpyFunction:
    """``f(t, y, *parameters)``, generated from a finished result.

    Shapes: y is (n,) or (n,) + S, and with B the broadcast of t, S and the parameters the result is ``shape`` + B, also
    where a component is constant. Values are float64 (complex128 for the complex form). Any consistent units.

    Attributes
    ----------
    parameters : tuple of str
        All parameters of the problem and the small parameter, sorted by name, whatever the order or form.
    source : str
        The kernel, the same byte for byte on every run. It takes scalars or arrays. The functions it calls are
        NumPy's and those of `multiscale.codegen.runtime`, which needs NumPy alone.
    laws : tuple
        The user's own force laws among those functions, by name; where there are any, the source does not stand alone.

    Examples
    --------
    >>> import sympy as sp, multiscale as ms
    >>> t = sp.Symbol("t", real=True)
    >>> eps, mu = sp.symbols("epsilon mu", positive=True)
    >>> u = sp.Function("u")(t)
    >>> rhs = ms.expand(ms.Problem(u.diff(t, 2) + u + 2*eps*mu*u.diff(t), u, small=eps), order=1).slow_flow.to_numpy()
    >>> rhs.parameters
    ('epsilon', 'mu')
    >>> rhs.bind(epsilon=0.1, mu=0.5)(0.0, [2.0, 0.0])
    array([-0.1, -0. ])
    """

    source: str
    functions: tuple[str, ...]
    parameters: tuple[str, ...]
    size: int
    shape: tuple[int, ...]
    is_complex: bool = False
    defaults: tuple[tuple[str, float], ...] = ()
    inversions: tuple[Inversion, ...] = ()
    laws: tuple[tuple[str, Callable[..., Any]], ...] = ()
    kernel: Callable[..., tuple[Any, ...]] = field(init=False, compare=False)
    _scalar_kernel: Callable[..., tuple[Any, ...]] | None = field(init=False, compare=False)

    def __post_init__(self) -> None:
        object.__setattr__(self, "kernel", self.compiled(_NUMPY | dict(self.laws)))
        plain = not self.is_complex and _MATH.keys() >= set(self.functions)
        object.__setattr__(self, "_scalar_kernel", self.compiled(_MATH) if plain else None)

    def compiled(self, namespace: Mapping[str, Any]) -> Callable[..., tuple[Any, ...]]:
        """The kernel with its functions (`functions`) taken from `namespace`."""
        scope: dict[str, Any] = {name: namespace[name] for name in self.functions}
        exec(compile(self.source, "<multiscale kernel>", "exec"), scope)
        return scope["kernel"]  # type: ignore[no-any-return]

    @property
    def arguments(self) -> tuple[str, ...]:
        """``("t", "y", *parameters)``."""
        return ("t", "y", *self.parameters)

    def __call__(self, t: npt.ArrayLike, y: npt.ArrayLike, *parameters: npt.ArrayLike) -> Array:
        if len(parameters) != len(self.parameters):
            raise EvaluationError(
                f"{len(parameters)} parameter values were given, expected {len(self.parameters)}: "
                f"{', '.join(self.parameters)}"
            )
        if type(t) in _SCALARS and _SCALARS.issuperset(map(type, parameters)):
            return self._at_scalars(t, y, parameters)
        return self._at_arrays(t, y, parameters)

    def _at_scalars(
        self,
        t: Any,
        y: npt.ArrayLike,
        parameters: tuple[Any, ...],
        staged: Callable[..., tuple[Any, ...]] | None = None,
    ) -> Array:
        """One state and scalar parameters: plain Python numbers are several times faster than NumPy scalars.

        `staged` is the kernel at these parameters, if there is one.
        """
        try:
            state = np.asarray(y)
        except ValueError:
            return self._at_arrays(t, y, parameters)  # which says what is wrong with it
        if (
            state.ndim != 1
            or self._scalar_kernel is None
            or state.dtype.kind not in "fiu"
            or state.shape[0] != self.size
        ):
            return self._at_arrays(t, state, parameters)
        try:
            values = state.tolist()
            rows = staged(t, *values) if staged is not None else self._scalar_kernel(t, *values, *parameters)
            result = np.array(rows, dtype=np.float64)
        except (ArithmeticError, ValueError):
            # Python numbers raise where NumPy gives inf or nan; the array path answers as NumPy does.
            return self._at_arrays(t, state, parameters)
        return result if len(self.shape) == 1 else result.reshape(self.shape)

    def _at_arrays(self, t: Any, y: Any, parameters: tuple[Any, ...]) -> Array:
        kind = np.complex128 if self.is_complex else np.float64
        state = _array(y, kind, "y")
        if state.ndim < 1 or state.shape[0] != self.size:
            raise EvaluationError(
                f"y has shape {state.shape}: expected ({self.size},) or ({self.size},) + S, states along axis 0"
            )
        time = _array(t, np.float64, "t")
        values = [_array(x, np.float64, name) for x, name in zip(parameters, self.parameters, strict=True)]
        try:
            batch = np.broadcast_shapes(time.shape, state.shape[1:], *(x.shape for x in values))
        except ValueError:
            shapes = ", ".join(
                f"{name} {x.shape}" for name, x in zip(("t", *self.parameters), (time, *values), strict=True)
            )
            raise EvaluationError(f"shapes do not broadcast: states {state.shape[1:]}, {shapes}") from None
        try:
            outputs = self.kernel(time, *state, *values)
        except IntegralError as error:
            raise EvaluationError(str(error)) from None
        result = np.empty((len(outputs), *batch), dtype=kind)
        for row, value in zip(result, outputs, strict=True) if batch else ():
            row[...] = value
        if not batch:
            result[...] = [complex(x) if self.is_complex else float(x) for x in outputs]
        return result.reshape(self.shape + batch)

    def values(self, mapping: Mapping[Any, Any] | None = None, /, **by_name: Any) -> tuple[Any, ...]:
        """The parameter values in the order of `parameters`, for ``args=``. Keys are symbols or names.

        A frequency that a relation eliminated may be given instead of its detuning; given both, they are compared.
        """
        found: dict[str, Any] = {}
        for key, value in [*(mapping or {}).items(), *by_name.items()]:
            name = key.name if isinstance(key, sp.Symbol) else key
            if name not in self.parameters and name not in {n for x in self.inversions for n in x.eliminated}:
                raise EvaluationError(f"unknown parameter {name!r}: expected {', '.join(self.parameters)}")
            if name in found:
                raise EvaluationError(f"parameter {name!r} is given twice")
            found[name] = value
        found = dict(self.defaults) | found
        for inversion in self.inversions:
            found = inversion.completed(found)
        if missing := [name for name in self.parameters if name not in found]:
            raise EvaluationError(
                f"missing parameter {', '.join(missing)}: give a value for each of {', '.join(self.parameters)}"
            )
        return tuple(found[name] for name in self.parameters)

    def bind(self, mapping: Mapping[Any, Any] | None = None, /, **by_name: Any) -> BoundFunction:
        """f(t, y) with all parameters fixed, picklable."""
        values = self.values(mapping, **by_name)
        for name, value in zip(self.parameters, values, strict=True):
            _array(value, np.float64, name)
        return BoundFunction(
            self, tuple(float(x) if np.ndim(x) == 0 else np.array(x, dtype=np.float64) for x in values)
        )

    def with_namespace(self, namespace: Any) -> NamespaceFunction:
        """The same function on the arrays of another library, ``jax.numpy`` say, to compile, map or differentiate."""
        from multiscale.codegen.namespaces import NamespaceFunction

        return NamespaceFunction(self, namespace)

    def __hash__(self) -> int:
        return hash((self.source, self.parameters, self.shape))

    def __repr__(self) -> str:
        return f"NumpyFunction({', '.join(self.arguments)}) -> {self.shape} + B"

    def __reduce__(self) -> tuple[Any, ...]:
        return type(self), (
            self.source,
            self.functions,
            self.parameters,
            self.size,
            self.shape,
            self.is_complex,
            self.defaults,
            self.inversions,
            self.laws,
        )


@dataclass(frozen=True, eq=False)
class BoundFunction:
    """A `NumpyFunction` with its parameters fixed: f(t, y)."""

    function: NumpyFunction
    parameters: tuple[Any, ...]

    def __post_init__(self) -> None:
        scalar = all(type(x) is float for x in self.parameters)
        object.__setattr__(self, "_scalar", scalar)
        object.__setattr__(self, "_staged", self._in_stages() if scalar else None)

    def _in_stages(self) -> Callable[..., tuple[Any, ...]] | None:
        """A long kernel with its coefficients worked out once."""
        function = self.function
        if len(function.source) < LONG or function._scalar_kernel is None:
            return None
        from multiscale.codegen.staging import staged

        return staged(function.source, {name: _MATH[name] for name in function.functions}, self.parameters)

    def __reduce__(self) -> tuple[Any, ...]:
        return type(self), (self.function, self.parameters)

    def __call__(self, t: npt.ArrayLike, y: npt.ArrayLike) -> Array:
        if self._scalar and type(t) in _SCALARS:  # type: ignore[attr-defined]
            return self.function._at_scalars(t, y, self.parameters, self._staged)  # type: ignore[attr-defined]
        return self.function(t, y, *self.parameters)


def _array(x: Any, kind: Any, name: str) -> Array:
    """x as an array of the kind, refusing what would lose something."""
    try:
        result = np.asarray(x)
        if result.dtype.kind == "c" and kind is np.float64:
            raise EvaluationError(f"{name} is complex: expected real values")
        if result.dtype.kind in "USmM":
            raise TypeError
        if result.dtype.kind not in "fiucb":
            if any(x is None for x in result.flat):  # which NumPy would make nan
                raise TypeError
            result = result.astype(np.complex128 if kind is np.complex128 else np.float64)
        return result.astype(kind, copy=False)
    except (TypeError, ValueError, OverflowError) as error:
        if isinstance(error, EvaluationError):
            raise
        raise EvaluationError(f"{name} is {repr(x)[:60]}: expected numbers") from None
