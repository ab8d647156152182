"""All equilibria of one driven mode, by elimination of the phase.

    F(A, Ā) = Σ c_mn A^m Ā^n = 0,     ρ = AĀ:   P(A) = Σ c_mn ρ^n A^{m−n} = 0,   Q(A) = Σ c̄_mn ρ^m A^{n−m} = 0

P and Q, cleared of negative powers, are two polynomials in A (in W = A^k, where only every k-th power of A occurs)
whose coefficients are polynomials in ρ. They share a root where their Sylvester matrix S(ρ) is singular, so that the
squared amplitudes are among the eigenvalues of the matrix polynomial S(ρ) = S_0 + ρS_1 + …, and the null vector
(W^{D−1}, …, W, 1) gives the phase. No squaring and adding, which works at the first order alone.

The eigenvalues are computed in a rotated coordinate of the complex ρ-sphere, ρ = (cμ + sφ)/(−s φ̄ μ + c) with |φ| = 1,
in which ρ = ∞ is nothing special and the leading matrix is regular, for all points of a sweep at once.

Source of the resultant in this form: classical; D. A. Cox, J. Little, D. O'Shea, *Using Algebraic Geometry*, 2005,
ch. 3, "hidden variables" (from memory).
"""

from __future__ import annotations

from math import comb, gcd
from typing import Any

import numpy as np
import numpy.typing as npt

__all__ = ["candidates", "natural_scale"]

Array = npt.NDArray[Any]
Table = dict[tuple[int, int], Array]
COSINE, SINE, TURN = np.cos(0.9), np.sin(0.9), np.exp(1.1j)


def candidates(terms: Table, scale: Array) -> tuple[Array, Array]:
    """Approximations to every non-zero root A of F, as (index of the point, A).

    `terms` holds c_mn by (m, n), each an array over points; `scale` is a typical |A| at each point. Roots that are
    nearly real count as real: what is handed back is to be polished by Newton's method, which decides.
    """
    index, roots = [np.zeros(0, dtype=int)], [np.zeros(0, dtype=complex)]
    present = np.array([c != 0 for c in terms.values()])
    for pattern in np.unique(present, axis=1).T:
        points = np.flatnonzero((present == pattern[:, None]).all(axis=0))
        kept = {m: c[points] for (m, c), here in zip(terms.items(), pattern, strict=True) if here}
        if len({m - n for m, n in kept}) < 2:
            continue
        found, amplitude = _of_pattern(kept, scale[points])
        index.append(points[found])
        roots.append(amplitude)
    return np.concatenate(index), np.concatenate(roots)


def natural_scale(terms: Table, levels: dict[tuple[int, int], int], points: int) -> Array:
    """|A| at which the nonlinear terms of the lowest levels balance the linear and constant ones."""
    highest = max((levels[m] for m in terms), default=1)
    for top in range(1, highest + 1):
        if any(sum(m) > 1 and levels[m] <= top for m in terms):
            break
    sizes: dict[int, Array] = {}
    for m, c in terms.items():
        if levels[m] <= top:
            sizes[sum(m)] = sizes.get(sum(m), np.zeros(points)) + abs(c)
    degree = max(sizes, default=0)
    result = np.zeros(points)
    with np.errstate(divide="ignore", invalid="ignore"):
        for k, c in sizes.items():
            if k < degree:
                balance = (c / sizes[degree]) ** (1 / (degree - k))
                result = np.where(np.isfinite(balance), np.maximum(result, balance), result)
    return np.where(result > 0, result, 1.0)


def _of_pattern(terms: Table, scale: Array) -> tuple[Array, Array]:
    """As `candidates`, where every c_mn is different from zero."""
    scaled = {(m, n): c * scale ** (m + n) for (m, n), c in terms.items()}
    largest = np.max([abs(c) for c in scaled.values()], axis=0)
    turns = sorted({m - n for m, n in scaled})
    k = gcd(*(j - turns[0] for j in turns))
    matrices = _sylvester({m: c / largest for m, c in scaled.items()}, turns[0], turns[-1], k)
    squares = _eigenvalues(matrices)
    near = (abs(squares.imag) <= 1e-3 * abs(squares) + 1e-7) & (squares.real > 0) & (abs(squares) < 1e12)
    point, column = np.nonzero(near)
    square = squares[point, column].real
    size = matrices.shape[-1]
    at = np.zeros((len(point), size, size), dtype=complex)
    for power in range(matrices.shape[1] - 1, -1, -1):
        at = at * square[:, None, None] + matrices[point, power]
    # Rows of very different size would let rounding of the larger hide the smaller.
    rows = np.linalg.norm(at, axis=2, keepdims=True)
    null = np.linalg.svd(at / np.where(rows > 0, rows, 1.0))[2][:, -1].conj()
    ratio = np.sum(null[:, 1:].conj() * null[:, :-1], axis=1) if size > 1 else np.ones(len(point))
    angles = (np.angle(ratio)[:, None] + 2 * np.pi * np.arange(k)) / k
    amplitude = scale[point, None] * np.sqrt(square)[:, None] * np.exp(1j * angles)
    return np.repeat(point, k), amplitude.ravel()


def _sylvester(terms: Table, lowest: int, highest: int, k: int) -> Array:
    """The coefficients of S(ρ), of shape (points, powers of ρ, 2D, 2D); columns are W^{2D−1}, …, W, 1."""
    degree = (highest - lowest) // k
    first, second = min(n for _, n in terms), min(m for m, _ in terms)
    powers = 1 + max(max(n for _, n in terms) - first, max(m for m, _ in terms) - second)
    points = len(next(iter(terms.values())))
    matrices = np.zeros((points, powers, 2 * degree, 2 * degree), dtype=complex)
    for (m, n), c in terms.items():
        above, below = (m - n - lowest) // k, (highest - m + n) // k
        for shift in range(degree):
            column = 2 * degree - 1 - shift
            matrices[:, n - first, shift, column - above] += c
            matrices[:, m - second, degree + shift, column - below] += c.conj()
    return matrices


def _eigenvalues(matrices: Array) -> Array:
    """All ρ, of shape (points, powers·2D), with det S(ρ) = 0."""
    points, powers, size, _ = matrices.shape
    degree = powers - 1
    if degree == 0:
        return np.full((points, 1), -1.0 + 0j)
    alpha, beta, gamma, delta = COSINE, SINE * TURN, -SINE / TURN, COSINE
    change = np.zeros((powers, powers), dtype=complex)
    for j in range(powers):
        for a in range(j + 1):
            for b in range(degree - j + 1):
                change[a + b, j] += (
                    comb(j, a) * alpha**a * beta ** (j - a)
                    * comb(degree - j, b) * gamma**b * delta ** (degree - j - b)
                )  # fmt: skip
    turned = np.einsum("lk,pkij->plij", change, matrices)
    monic = np.linalg.solve(turned[:, -1:], turned[:, :-1])
    companion = np.zeros((points, degree * size, degree * size), dtype=complex)
    for block in range(degree):
        columns = slice(block * size, (block + 1) * size)
        companion[:, (degree - 1) * size :, columns] = -monic[:, block]
        if block:
            companion[:, (block - 1) * size : block * size, columns] = np.eye(size)
    mu = np.linalg.eigvals(companion)
    with np.errstate(divide="ignore", invalid="ignore"):
        rho = (alpha * mu + beta) / (gamma * mu + delta)
    return np.where(np.isfinite(rho), rho, -1.0)
