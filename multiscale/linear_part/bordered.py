"""Sparse solves of L_0(ir) = M (ir)² + G ir + K with the carried modes bordered away, and their bookkeeping.

    [ L_0(ir)   B ] [ U' ]     [ part ]
    [ E         0 ] [ x  ] = − [ 0    ]        E picks one coordinate of each bordered mode

M and K symmetric, no G: every carried mode is bordered at every rate, B = M φ, and what lies along the φ_j is put back
by hand, so that nothing is lost where a rate comes close to a carried frequency, or where a relation moved it,

    L_0(s) = M s² + K − Σ_j (ω_j² − ω_j0²) M φ_j φ_j^T M / m_j ,      m_j = φ_j^T M φ_j :

    D_j = −φ_j^T part / (2ir m_j)   at r = ω_j0,        U along φ_j:  −φ_j^T part / (m_j (ω_j0² − r²))   elsewhere.

Otherwise the modes of the rate alone are bordered, with B = L_0'(ir) φ, and x is D_nA; no left vector is needed.

A factorisation serves its rate at every level, and all monomials of one rate are solved for together.
"""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass, field, replace
from functools import cached_property
from time import thread_time
from typing import Any

import numpy as np
import numpy.typing as npt

__all__ = ["RIGID", "Bordered", "Nearest", "Stopwatch", "combination", "singular"]

Array = npt.NDArray[Any]
SINGULAR = 1e-8
"""Relative distance of a rate from a frequency that is not carried, below which no bounded solution is claimed."""
RIGID = 1e-13
"""ω² relative to that of the stiffest parts, below which a motion counts as rigid."""


@dataclass
class Stopwatch:
    """Processor seconds of this thread spent in finding the modes, in factorisations, in solves for levels, and in
    looking for what is near; how many factorisations and right-hand sides there were."""

    finding: float = 0.0
    factoring: float = 0.0
    solving: float = 0.0
    examining: float = 0.0
    factorisations: int = 0
    solved: int = 0


@dataclass(frozen=True)
class Nearest:
    """The frequency that is not carried closest to a rate, and its motion."""

    frequency: float
    shape: Array


@dataclass(frozen=True, eq=False)
class Bordered:
    """The matrices of L_0 and the carried modes: `shapes` (n, modes), 1 in their own `references`.

    `own` are the frequencies ω_j of the matrices, `leading` those of L_0 (different where a relation detunes a mode).
    """

    mass: Any
    gyroscopic: Any
    stiffness: Any
    shapes: Array
    references: tuple[int, ...]
    own: tuple[float, ...]
    leading: tuple[float, ...]
    symmetric: bool
    watch: Stopwatch = field(default_factory=Stopwatch)
    _factored: dict[tuple[float, tuple[int, ...]], Any] = field(default_factory=dict, repr=False)

    @property
    def size(self) -> int:
        return int(self.mass.shape[0])

    @cached_property
    def scale(self) -> float:
        """The size of ω² of the stiffest parts, against which rounding is measured."""
        return float(abs(self.stiffness.diagonal()).max() / abs(self.mass.diagonal()).max())

    @cached_property
    def weighted(self) -> Array:
        """M φ."""
        return np.asarray(self.mass @ self.shapes)

    @cached_property
    def places(self) -> list[int]:
        """A coordinate for each carried mode, such that these coordinates of the shapes are far from dependent."""
        left, found = np.array(self.shapes), []
        for j in range(left.shape[1]):
            found.append(int(np.argmax(np.abs(left[:, j]))))
            row = left[found[j]] / left[found[j], j]
            row[: j + 1] = 0
            left = left - np.outer(left[:, j], row)
        return found

    @cached_property
    def modal_masses(self) -> Array:
        """m_j = φ_j^T M φ_j."""
        return np.asarray(np.einsum("ij,ij->j", self.shapes, self.weighted))

    def along(self, j: int) -> Callable[[Array], Array]:
        """x -> M φ_j φ_j^T M x / m_j, which moves the squared frequency of mode j alone."""
        weighted, mass = self.weighted[:, j], self.modal_masses[j]
        return lambda x: np.asarray(np.multiply.outer(weighted, weighted @ x) / mass)

    def matrix(self, rate: float) -> Any:
        """L_0(i rate) but for detuned modes; real where it can be."""
        plain = self.stiffness - rate**2 * self.mass
        return plain if self.gyroscopic is None else plain + 1j * rate * self.gyroscopic

    def slope(self, rate: float, columns: Array) -> Array:
        """L_0'(i rate) columns."""
        inertial = 2j * rate * (self.mass @ columns)
        return np.asarray(inertial if self.gyroscopic is None else inertial + self.gyroscopic @ columns)

    def act(self, rate: float, columns: Array) -> Array:
        """L_0(i rate) columns."""
        result = self.matrix(rate) @ columns
        for j, (w, w0) in enumerate(zip(self.own, self.leading, strict=True)):
            if w != w0:
                result = result - (w**2 - w0**2) * self.along(j)(columns)
        return np.asarray(result)

    def factored(self, rate: float, modes: tuple[int, ...]) -> Any:
        """The sparse LU of the bordered matrix; `modes` are those at this rate."""
        key = (abs(rate), ()) if self.symmetric else (rate, modes)
        if key not in self._factored:
            from scipy.sparse import bmat, coo_matrix
            from scipy.sparse.linalg import splu

            start = thread_time()
            chosen = tuple(range(len(self.references))) if self.symmetric else modes
            matrix = self.matrix(rate)
            if chosen:
                border = self.weighted if self.symmetric else self.slope(rate, self.shapes[:, list(chosen)])
                count, places = len(chosen), self.places if self.symmetric else [self.references[j] for j in chosen]
                rows = coo_matrix((np.ones(count), (np.arange(count), places)), shape=(count, self.size))
                matrix = bmat([[matrix, coo_matrix(border)], [rows, None]])
            self._factored[key] = splu(matrix.tocsc().astype(float if self.symmetric else complex))
            self.watch.factoring += thread_time() - start
            self.watch.factorisations += 1
        return self._factored[key]

    def _solved(self, rate: float, modes: tuple[int, ...], part: Array) -> Array:
        """(U', x) stacked, for columns of −part."""
        factors = self.factored(rate, modes)
        start = thread_time()
        rhs = np.zeros((factors.shape[0], part.shape[1]), dtype=complex, order="F")
        rhs[: self.size] = -part
        if not self.symmetric:
            found = factors.solve(rhs)
        elif not np.any(rhs.imag):
            found = factors.solve(np.asfortranarray(rhs.real))
        else:
            found = factors.solve(np.asfortranarray(rhs.real)) + 1j * factors.solve(np.asfortranarray(rhs.imag))
        self.watch.solving += thread_time() - start
        self.watch.solved += part.shape[1]
        return np.asarray(found)

    def solve(self, rate: float, modes: tuple[int, ...], part: Array) -> tuple[Array, Array]:
        """(U, D): the columns of U_n and of the D_nA of `modes`, for the columns of the residual `part`."""
        found = self._solved(rate, modes, part)
        if not self.symmetric:
            return found[: self.size], found[self.size :]
        shares = self.shapes.T @ part / self.modal_masses[:, None]
        across = self.across(found[: self.size])
        others = [j for j in range(len(self.references)) if j not in modes]
        if others:
            # A mode that is met although the forcing does not reach it stays at rest.
            met = [singular(abs(self.leading[j] - abs(rate)), self.leading[j]) for j in others]
            scale = np.array(
                [np.inf if m else self.leading[j] ** 2 - rate**2 for j, m in zip(others, met, strict=True)]
            )
            across = across - ((shares[others] / scale[:, None]).T @ self.shapes[:, others].T).T
        if not modes:
            return across, np.zeros((0, part.shape[1]))
        chosen, places = list(modes), [self.references[j] for j in modes]
        own = self.shapes[np.ix_(places, chosen)]
        across = across - (np.linalg.solve(own, across[places]).T @ self.shapes[:, chosen].T).T
        return across, -shares[chosen] / (2j * rate)

    def across(self, columns: Array) -> Array:
        """What is left of columns without the carried modes."""
        shares = self.weighted.T @ columns / self.modal_masses[:, None]
        return np.asarray(columns - (shares.T @ self.shapes.T).T)

    def nearest(self, rate: float, modes: tuple[int, ...], steps: int) -> Nearest | None:
        """By inverse iteration; None where nothing real is near. Cheap and rough unless something is very near."""
        before = replace(self.watch)
        if self.size <= len(self.references):
            return None
        v = np.random.default_rng(0).normal(size=(self.size, 1)).astype(float if self.symmetric else complex)
        share: complex = 0
        for _ in range(steps):
            v = self.across(v) if self.symmetric else v
            v = v / np.linalg.norm(v)
            weighted = self.mass @ v if self.symmetric else self.slope(rate, v)
            w = -self._solved(rate, modes, weighted)[: self.size]
            w = self.across(w) if self.symmetric else w
            share = complex((v.conj().T @ w)[0, 0])
            if abs(share) == 0:
                return None
            v = w
        self.watch.examining += self.watch.solving - before.solving
        self.watch.solving, self.watch.solved = before.solving, before.solved
        shape = v[:, 0] / np.linalg.norm(v)
        if self.symmetric:
            square = rate**2 + (1 / share).real
            return Nearest(float(np.sqrt(max(square, 0.0))), shape) if square > -RIGID * self.scale else None
        found = 1j * rate - 1 / share
        return Nearest(abs(found.imag), shape) if abs(found.real) < 0.5 * abs(found.imag) else None


def singular(distance: float, frequency: float) -> bool:
    """Whether a rate so far from a frequency has no bounded response."""
    return distance <= SINGULAR * frequency


def combination(exponents: Sequence[int], names: Sequence[str], sign: int = 1) -> str:
    """The frequency of a monomial, times `sign`, in words, from its exponents in the paired generators.

    Generators without a name are constant phases.
    """
    counts = [sign * (exponents[2 * k] - exponents[2 * k + 1]) for k in range(len(names))]
    text = ""
    for k in sorted(range(len(names)), key=lambda k: counts[k] < 0):
        if counts[k] and names[k]:
            size = abs(counts[k])
            text += (" - " if counts[k] < 0 else " + ") + (names[k] if size == 1 else f"{size}*{names[k]}")
    return text.removeprefix(" + ").lstrip() or "0"
