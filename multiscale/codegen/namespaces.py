"""A generated function on the arrays of another library: the same kernel, its functions from another namespace."""

from __future__ import annotations

from collections.abc import Callable, Mapping
from dataclasses import dataclass
from functools import cached_property
from typing import TYPE_CHECKING, Any

from multiscale.errors import EvaluationError

if TYPE_CHECKING:
    from multiscale.codegen.numpy_function import NumpyFunction

__all__ = ["NamespaceFunction"]

_NEEDED = ("asarray", "broadcast_arrays", "reshape", "stack")


@dataclass(frozen=True)
class NamespaceFunction:
    """``f(t, y, *parameters)`` like `function`, on arrays of `namespace`, in their own precision.

    It is functional: no in-place writes and no branches on values, so it can be compiled, mapped and differentiated by
    libraries that trace their arrays. Shapes are those of `NumpyFunction`.
    """

    function: NumpyFunction
    namespace: Any

    def __post_init__(self) -> None:
        needed = (*_NEEDED, *self.function.functions)
        if missing := [name for name in needed if not hasattr(self.namespace, name)]:
            raise EvaluationError(
                f"{getattr(self.namespace, '__name__', self.namespace)} has no {', '.join(missing)}: expected a "
                "namespace of array functions such as numpy or jax.numpy"
            )

    @cached_property
    def _kernel(self) -> Callable[..., tuple[Any, ...]]:
        return self.function.compiled({name: getattr(self.namespace, name) for name in self.function.functions})

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
