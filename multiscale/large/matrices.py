"""What the user gives of a large model, checked: matrices, tensors, springs, loads."""

from __future__ import annotations

from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass
from numbers import Integral
from typing import Any

import numpy as np
import numpy.typing as npt

from multiscale.errors import ProblemError
from multiscale.forces.multilinear import Called, Products, Shape

__all__ = ["Springs", "loads_of", "matrix_of", "orders_of", "scipy_sparse", "spring_shapes", "tensor_shape"]

Array = npt.NDArray[Any]
ORDERS = {"C": 2, "K1": 2, "quadratic": 1, "cubic": 2, "drive": 2}


@dataclass(frozen=True, eq=False)
class Springs:
    """Nonlinear springs: the force B^T (k_2 (B u)² + k_3 (B u)³) on the left-hand side, beside K u.

    Parameters
    ----------
    elongation : sparse or dense matrix (springs, n)
        B: the elongation of each spring from the displacements. A spring between masses i and j has −1 and 1 in its
        row, a spring to the ground a single 1.
    quadratic, cubic : number or array (springs,), optional
        Stiffness coefficients k_2 and k_3, in any consistent units.

    Examples
    --------
    >>> import numpy as np, multiscale as ms
    >>> springs = ms.Springs(np.array([[1.0, 0.0], [-1.0, 1.0], [0.0, -1.0]]), cubic=2.0)
    """

    elongation: Any
    quadratic: Any = None
    cubic: Any = None


def scipy_sparse() -> Any:
    """The module scipy.sparse."""
    try:
        import scipy.sparse
        import scipy.sparse.linalg
    except ImportError as error:
        raise ImportError(
            "large models need SciPy's sparse solvers: pip install 'multiscale-expansions[check]'"
        ) from error
    return scipy.sparse


def matrix_of(name: str, given: Any, size: int | None = None) -> Any:
    """A real sparse matrix of shape (n, n)."""
    sparse = scipy_sparse()
    try:
        matrix = sparse.csr_matrix(given)
    except (TypeError, ValueError) as error:
        raise ProblemError(f"{name} cannot be read as a matrix of numbers: {error}") from error
    if matrix.dtype == object or np.iscomplexobj(matrix.data):
        raise ProblemError(f"{name} holds {matrix.dtype} entries: expected real numbers; symbols go into `scales`")
    rows, columns = matrix.shape
    if rows != columns or size not in (None, rows):
        wanted = "square" if size is None else f"{size} × {size}, as K is"
        raise ProblemError(f"{name} is {rows} × {columns}: expected it to be {wanted}")
    if not np.all(np.isfinite(matrix.data)):
        raise ProblemError(f"{name} holds entries that are not finite")
    return matrix.astype(float)


def orders_of(given: Mapping[str, int] | None) -> dict[str, int]:
    """The powers of ε; only a drive may stand at leading order."""
    powers = dict(ORDERS)
    for name, power in (given or {}).items():
        least = 0 if name == "drive" else 1
        if name not in ORDERS or not isinstance(power, Integral) or isinstance(power, bool) or power < least:
            raise ProblemError(
                f"orders has {name!r}: {power!r}: expected integers ≥ 1 for {', '.join(map(repr, ORDERS))}, "
                "0 too for 'drive'; what acts at leading order goes into M, G and K"
            )
        powers[name] = int(power)
    return powers


def tensor_shape(name: str, given: Any, size: int, degree: int) -> Shape:
    """A quadratic or cubic map from a function, a mapping {(i, j, …): c}, (indices, values), or an array."""
    if callable(given):
        return Called(_checked_function(name, given, size, degree), degree)
    indices, values = _entries(name, given, size, degree + 1)
    keep = values != 0
    indices, values = indices[keep], values[keep]
    sparse, count = scipy_sparse(), len(values)
    places = np.arange(count)
    out = sparse.csr_matrix((values, (indices[:, 0], places)), shape=(size, count))
    picks = [
        sparse.csr_matrix((np.ones(count), (places, indices[:, k])), shape=(count, size)) for k in range(1, degree + 1)
    ]
    return Products(out, tuple(picks))


def _entries(name: str, given: Any, size: int, rank: int) -> tuple[Array, Array]:
    if isinstance(given, Mapping):
        pair: tuple[Any, Any] = (list(given.keys()), list(given.values()))
    elif isinstance(given, tuple) and len(given) == 2:
        pair = given
    else:
        array = np.asarray(given, dtype=float)
        if array.shape != (size,) * rank:
            raise ProblemError(
                f"{name} has the shape {array.shape}: expected {(size,) * rank}, or a mapping of indices, or a pair "
                f"(indices of shape (entries, {rank}), values), or a function of {rank - 1} vectors"
            )
        where = np.argwhere(array)
        pair = (where, array[tuple(where.T)])
    indices, values = np.asarray(pair[0]), np.asarray(pair[1], dtype=float)
    if indices.size == 0:
        indices = np.zeros((0, rank), dtype=int)
    if indices.ndim != 2 or indices.shape != (len(values), rank) or not np.issubdtype(indices.dtype, np.integer):
        raise ProblemError(
            f"{name} has indices of shape {indices.shape} and type {indices.dtype} for {len(values)} values: expected "
            f"integers of shape (entries, {rank}), the equation first"
        )
    if indices.size and (indices.min() < 0 or indices.max() >= size):
        raise ProblemError(f"{name} has the index {int(indices.max())}: expected 0 … {size - 1}")
    return indices, values


def _checked_function(name: str, given: Callable[..., Any], size: int, degree: int) -> Callable[..., Array]:
    """Refuses a function that is not symmetric and multilinear on a random triple of vectors."""
    rng = np.random.default_rng(0)
    vectors = [rng.normal(size=size) + 1j * rng.normal(size=size) for _ in range(degree)]
    value = np.asarray(given(*vectors))
    if value.shape != (size,):
        raise ProblemError(
            f"{name} returned the shape {value.shape} for vectors of shape ({size},): expected ({size},)"
        )
    scale = float(np.max(np.abs(value), initial=1e-300))
    turned = np.asarray(given(*vectors[1:], vectors[0]))
    scaled = np.asarray(given(1j * vectors[0], *vectors[1:]))
    plus = np.asarray(given(vectors[0] + vectors[1], *vectors[1:])) - np.asarray(given(vectors[1], *vectors[1:]))
    for law, other in (("symmetric", turned), ("linear in each vector", -1j * scaled), ("additive", plus)):
        if not np.allclose(other, value, rtol=1e-9, atol=1e-9 * scale):
            raise ProblemError(f"{name} is a function that is not {law}: expected a symmetric multilinear one")
    return given


def spring_shapes(given: Any, size: int) -> dict[str, list[Shape]]:
    """The quadratic and cubic maps of springs."""
    if not isinstance(given, Springs):
        raise ProblemError(f"springs is a {type(given).__name__}: expected multiscale.Springs(elongation, …)")
    sparse = scipy_sparse()
    elongation = sparse.csr_matrix(given.elongation).astype(float)
    count, columns = elongation.shape
    if columns != size:
        raise ProblemError(f"elongation is {count} × {columns}: expected (springs, {size})")
    shapes: dict[str, list[Shape]] = {}
    for name, degree, stiffness in (("quadratic", 2, given.quadratic), ("cubic", 3, given.cubic)):
        if stiffness is None:
            continue
        values = np.asarray(stiffness, dtype=float)
        if values.shape not in ((), (count,)):
            raise ProblemError(f"{name} of springs has the shape {values.shape}: expected a number or ({count},)")
        out = (elongation.T @ sparse.diags(np.broadcast_to(values, (count,)))).tocsr()
        shapes[name] = [Products(out, (elongation,) * degree)]
    return shapes


def loads_of(given: Any, size: int) -> list[tuple[Array, Any]]:
    """[(b, g(t))] from one pair or a sequence of pairs."""
    if given is None:
        return []
    pairs = [given] if isinstance(given, tuple) and len(given) == 2 and np.ndim(given[0]) == 1 else list(given)
    loads = []
    for pair in pairs:
        if not isinstance(pair, Sequence) or len(pair) != 2:
            raise ProblemError("drive has an entry that is no pair: expected (vector of shape (n,), expression in t)")
        vector = np.asarray(pair[0], dtype=float)
        if vector.shape != (size,):
            raise ProblemError(f"drive has a vector of shape {vector.shape}: expected ({size},)")
        loads.append((vector, pair[1]))
    return loads
