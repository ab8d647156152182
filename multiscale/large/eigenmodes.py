"""The few modes of M u'' + G u' + K u = 0 that are carried: (M s² + G s + K) φ = 0 at s = iω, by sparse Lanczos or
Arnoldi iteration (SciPy). Shapes are 1 in their reference coordinate.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from numbers import Integral, Real
from typing import Any

import numpy as np
import numpy.typing as npt

from multiscale.errors import ProblemError
from multiscale.large.matrices import scipy_sparse
from multiscale.linear_part.bordered import RIGID

__all__ = ["LargeMode", "eigenmodes", "is_symmetric"]

Array = npt.NDArray[Any]
REAL = 1e-7
"""Largest growth rate of a mode, relative to its frequency, that counts as rounding."""


@dataclass(frozen=True, eq=False)
class LargeMode:
    """A carried mode: u = φ A e^{iωt} + conjugate, φ = 1 at the reference.

    Attributes
    ----------
    frequency : float
        ω, in radians per unit of time.
    shape : array (n,)
        φ; complex for gyroscopic systems.
    reference : int
        The degree of freedom in which the amplitude is measured.
    """

    frequency: float
    shape: Array
    reference: int


def is_symmetric(matrix: Any) -> bool:
    difference = matrix - matrix.T
    return bool(difference.nnz == 0 or np.max(np.abs(difference.data)) <= 1e-12 * np.max(np.abs(matrix.data)))


def eigenmodes(
    mass: Any, gyroscopic: Any, stiffness: Any, chosen: Sequence[Any], references: Mapping[int, int]
) -> list[LargeMode]:
    """`chosen`: integers count from 0 by increasing frequency, floats ask for the mode nearest to a frequency."""
    chosen = list(chosen)
    if not chosen:
        raise ProblemError("modes is empty: give at least one, such as modes=[0]")
    for x in chosen:
        if isinstance(x, bool) or not isinstance(x, Real) or x < 0:
            raise ProblemError(f"modes has the entry {x!r}: expected an integer ≥ 0 (by frequency) or a frequency")
    symmetric = gyroscopic is None and is_symmetric(mass) and is_symmetric(stiffness)

    def solve(near: float, count: int) -> list[tuple[float, Array]]:
        if symmetric:
            return _symmetric(mass, stiffness, near, count)
        return _general(mass, gyroscopic, stiffness, near, count)

    found: list[tuple[float, Array]] = []
    numbers = [int(x) for x in chosen if isinstance(x, Integral)]
    lowest = solve(0.0, max(numbers) + 1) if numbers else []
    if numbers and len(lowest) <= max(numbers):
        raise ProblemError(f"mode {max(numbers)} was asked for, but only {len(lowest)} oscillations were found")
    for x in chosen:
        if isinstance(x, Integral):
            found.append(lowest[int(x)])
        else:
            near = solve(float(x), 2)
            if not near:
                raise ProblemError(f"no oscillation was found near the frequency {x}")
            found.append(min(near, key=lambda pair: abs(pair[0] - float(x))))
    for k, (w, shape) in enumerate(found):
        for _, other in found[:k]:
            if abs(shape.conj() @ other) > 0.999 * np.linalg.norm(shape) * np.linalg.norm(other):
                raise ProblemError(f"modes asks twice for the mode of frequency {w:.10g}")
    return [_normalised(w, shape, k, references) for k, (w, shape) in enumerate(found)]


def _normalised(frequency: float, shape: Array, number: int, references: Mapping[int, int]) -> LargeMode:
    largest = int(np.argmax(np.abs(shape)))
    reference = references.get(number, largest)
    if not isinstance(reference, Integral) or not 0 <= reference < len(shape):
        raise ProblemError(f"references[{number}] is {reference!r}: expected a degree of freedom, 0 … {len(shape) - 1}")
    own = shape[reference]
    if abs(own) < 1e-9 * abs(shape[largest]):
        raise ProblemError(
            f"the mode of frequency {frequency:.10g} does not move the degree of freedom {reference}: measure its "
            f"amplitude elsewhere, such as references={{{number}: {largest}}}"
        )
    return LargeMode(frequency, shape / own, int(reference))


def _symmetric(mass: Any, stiffness: Any, near: float, count: int) -> list[tuple[float, Array]]:
    """The `count` modes with ω nearest to `near`, by increasing frequency."""
    size = mass.shape[0]
    if count >= size - 1 or size <= 32:
        values, shapes = _dense_pencil(stiffness, mass)
        order = np.argsort(np.abs(np.sqrt(np.abs(values)) - near))[:count] if near else np.arange(min(count, size))
    else:
        values, shapes = _lanczos(stiffness, mass, near, count)
        order = np.arange(len(values))
    scale = abs(stiffness.diagonal()).max() / abs(mass.diagonal()).max()
    pairs = []
    for k in order:
        if values[k] <= RIGID * scale and near:
            continue
        if values[k] <= RIGID * scale:
            raise ProblemError(
                f"a carried mode has ω² = {values[k]:.3g}: it does not oscillate (a rigid or an unstable motion). Hold "
                "the structure, or choose other modes"
            )
        pairs.append((float(np.sqrt(values[k])), shapes[:, k]))
    return sorted(pairs, key=lambda pair: pair[0])


def _lanczos(stiffness: Any, mass: Any, near: float, count: int) -> tuple[Array, Array]:
    """Shift-invert iteration about ω² = near²."""
    from scipy.sparse.linalg import eigsh

    start = np.random.default_rng(0).normal(size=mass.shape[0])
    # A shift that is an eigenvalue cannot be factored; exactly zero is one where there are rigid motions.
    shift = near**2 * (1 + 1e-7)
    try:
        return eigsh(stiffness, k=count, M=mass, sigma=shift, v0=start)  # type: ignore[no-any-return]
    except RuntimeError:
        lower = 1e-6 * abs(stiffness.diagonal()).max() / abs(mass.diagonal()).max()
        return eigsh(stiffness, k=count, M=mass, sigma=shift - lower, v0=start)  # type: ignore[no-any-return]


def _dense_pencil(stiffness: Any, mass: Any) -> tuple[Array, Array]:
    from scipy.linalg import eigh

    values, shapes = eigh(stiffness.toarray(), mass.toarray())
    return values, shapes


def _general(mass: Any, gyroscopic: Any, stiffness: Any, near: float, count: int) -> list[tuple[float, Array]]:
    """Of the first-order pencil (u, v): u' = v, M v' = −K u − G v."""
    sparse = scipy_sparse()
    size = mass.shape[0]
    one = sparse.identity(size, format="csr")
    below = sparse.csr_matrix((size, size)) if gyroscopic is None else gyroscopic
    left = sparse.bmat([[None, one], [-stiffness, -below]], format="csc")
    right = sparse.block_diag([one, mass], format="csc")
    if size <= 64 or 2 * count + 4 >= 2 * size - 1:
        from scipy.linalg import eig

        values, vectors = eig(left.toarray(), right.toarray())
    else:
        from scipy.sparse.linalg import eigs

        scale = np.sqrt(abs(stiffness.diagonal()).max() / abs(mass.diagonal()).max())
        shift = 1j * near * (1 + 1e-7) if near else 1e-3j * scale / size
        start = np.random.default_rng(0).normal(size=2 * size).astype(complex)
        values, vectors = eigs(left.astype(complex), k=2 * count + 4, M=right.astype(complex), sigma=shift, v0=start)
    pairs = []
    for value, vector in zip(values, vectors.T, strict=True):
        if value.imag <= 1e-9 * abs(value) or not np.isfinite(value):
            continue
        if abs(value.real) > REAL * abs(value):
            raise ProblemError(
                f"a mode near the carried ones has the root {value:.6g}, which is not imaginary: at leading order it "
                "grows or decays. What damps weakly goes into C"
            )
        shape = vector[:size]
        pairs.append((float(value.imag), shape * np.exp(-1j * np.angle(shape[np.argmax(np.abs(shape))]))))
    pairs.sort(key=lambda pair: abs(pair[0] - near))
    return sorted(pairs[:count], key=lambda pair: pair[0])
