"""A generated function on the arrays of another library: the same kernel, its functions from another namespace."""

from __future__ import annotations

from collections.abc import Callable, Mapping
from dataclasses import dataclass
from functools import cached_property
from typing import TYPE_CHECKING, Any

from multiscale.codegen.travelling import NUMPY, QUADRATURE, travelling
from multiscale.errors import EvaluationError

if TYPE_CHECKING:
    from multiscale.codegen.numpy_function import NumpyFunction

__all__ = ["NamespaceFunction"]

_GUARDS = frozenset(["inverse_or_zero", "reciprocal", "nonzero", "or_one", "clipped", "within", "positive"])
"""Functions of the runtime that any such library can evaluate, its functions in the place of NumPy's."""
_GUARDS_NEED = ("where", "equal", "greater", "maximum", "minimum", "abs")
_NEEDED = ("asarray", "broadcast_arrays", "reshape", "stack")


@dataclass(frozen=True)
class NamespaceFunction:
    """``f(t, y, *parameters)`` like `function`, on arrays of `namespace`, in their own precision.

    It is functional: no in-place writes and no branches on values, so it can be compiled, mapped and differentiated by
    libraries that trace their arrays. Shapes are those of `NumpyFunction`. Averages over a phase by quadrature, Bessel,
    gamma and digamma functions work with NumPy alone, since how many nodes or steps they take depends on values.
    """

    function: NumpyFunction
    namespace: Any

    def __post_init__(self) -> None:
        laws = [name.removeprefix("law_") for name, _ in self.function.laws]
        numeric = sorted(QUADRATURE.intersection(self.function.functions))
        if laws or numeric:
            raise EvaluationError(
                f"the function calls {', '.join(laws or numeric)}, "
                + ("a force law of NumPy arrays" if laws else "whose number of nodes or steps depends on the values")
                + ": it works on NumPy arrays only and cannot be traced. Call it as it is, without with_namespace"
            )
        needed = (*_NEEDED, *(NUMPY.get(name, name) for name in self.function.functions if name not in _GUARDS))
        needed += _GUARDS_NEED if _GUARDS.intersection(self.function.functions) else ()
        if missing := [name for name in needed if not hasattr(self.namespace, name)]:
            raise EvaluationError(
                f"{getattr(self.namespace, '__name__', self.namespace)} has no {', '.join(missing)}: expected a "
                "namespace of array functions such as numpy or jax.numpy"
            )

    @cached_property
    def _kernel(self) -> Callable[..., tuple[Any, ...]]:
        names = self.function.functions
        scope: dict[str, Any] = {"np": self.namespace, "Any": Any}
        exec("\n".join(travelling(_GUARDS.intersection(names)).lines), scope)
        plain = {name: getattr(self.namespace, NUMPY.get(name, name)) for name in names if name not in _GUARDS}
        return self.function.compiled(plain | {name: scope[name] for name in names if name in _GUARDS})

    def __call__(self, t: Any, y: Any, *parameters: Any) -> Any:
        function, arrays = self.function, self.namespace
        if len(parameters) != len(function.parameters):
            raise EvaluationError(
                f"{len(parameters)} parameter values were given, expected {len(function.parameters)}: "
                f"{', '.join(function.parameters)}"
            )
        state = arrays.asarray(y)
        if state.ndim < 1 or state.shape[0] != function.size:
            raise EvaluationError(f"y has shape {tuple(state.shape)}: expected ({function.size},) + S")
        inputs = [arrays.asarray(t), *(state[k] for k in range(function.size)), *map(arrays.asarray, parameters)]
        outputs = [arrays.asarray(x) for x in self._kernel(*inputs)]
        rows = arrays.broadcast_arrays(*outputs, *inputs)[: len(outputs)]
        stacked = arrays.stack(list(rows))
        return arrays.reshape(stacked, (*function.shape, *stacked.shape[1:]))

    def bind(self, mapping: Mapping[Any, Any] | None = None, /, **by_name: Any) -> Callable[[Any, Any], Any]:
        """f(t, y) with all parameters fixed to numbers or NumPy arrays."""
        return _Bound(self, self.function.values(mapping, **by_name))


@dataclass(frozen=True, eq=False)
class _Bound:
    function: NamespaceFunction
    parameters: tuple[Any, ...]

    def __call__(self, t: Any, y: Any) -> Any:
        return self.function(t, y, *self.parameters)
