"""The rotating frame of a slow flow, and the phases that drive it.

A term of dA_j/dt turns with the phase of A_j plus a combination Σ k_l arg z_l + Σ m_l θ_l whose rate is zero, θ_l the
exact angles of the drives. The frame gives each mode a fast angle Φ_j, a combination of drive angles and of natural
phases ω_f t, such that every one of these combinations vanishes when arg z_l = Φ_l. What is left are the deviations

    δ_j = arg z_j − Φ_j ,       A_j = ½ a_j e^{iδ_j} in the frame,

on which the flow depends through the *resonant phases* γ = Γ δ only:

    a mode whose fast angle consists of drives alone has its lag γ = −δ_j for one of them:  u = a cos(Φ_j − γ) + …
    the other combinations of deviations form a lattice, whose Z-basis gives the rest.

Modes that complete Γ keep their own, *cyclic*, phase β_j = δ_j, relative to their fast angle.
Combinations of drive angles alone that do not vanish stay in the flow as explicit functions of time: it is then
non-autonomous in every frame.
"""

from __future__ import annotations

from collections.abc import Iterable, Sequence
from dataclasses import dataclass
from fractions import Fraction
from itertools import combinations

import sympy as sp

from multiscale.algebra.ring import Exponents
from multiscale.problem.lattice import saturated_basis

__all__ = ["Frame", "frame_of", "turns"]

Vector = tuple[int, ...]
Row = tuple[Fraction, ...]


def turns(exponents: Exponents) -> Vector:
    """The net exponent of each pair: how often a monomial turns with each phase."""
    return tuple(exponents[2 * k] - exponents[2 * k + 1] for k in range(len(exponents) // 2))


@dataclass(frozen=True)
class Frame:
    """`angles[j]` is Φ_j as coefficients over (ω_f t for every mode f, θ_l for every drive l)."""

    modes: int
    angles: tuple[Row, ...]
    resonant: tuple[Vector, ...]
    cyclic: tuple[int, ...]

    def relative(self, exponents: Exponents, mode: int) -> Vector:
        """The combination (k, m) of a term of dA_mode/dt, relative to the phase of A_mode."""
        return tuple(n - (k == mode) for k, n in enumerate(turns(exponents)))

    def fast(self, combination: Vector) -> Row:
        """Σ k_l Φ_l + Σ m_l θ_l over the same generators as `angles`."""
        total = [Fraction(0)] * self.modes + [Fraction(m) for m in combination[self.modes :]]
        for k, angle in zip(combination, self.angles, strict=False):
            total = [x + k * y for x, y in zip(total, angle, strict=True)]
        return tuple(total)

    def coordinates(self, combination: Vector) -> Vector:
        """The integers n with Σ n_i γ_i = Σ k_l δ_l."""
        k = combination[: self.modes]
        if not any(k):
            return (0,) * len(self.resonant)
        columns = sp.Matrix(self.resonant).T
        solution = (columns.T * columns).LUsolve(columns.T * sp.Matrix(k))
        return tuple(int(x) for x in solution)

    def deviations(self, gamma: Sequence[sp.Expr], beta: Sequence[sp.Expr]) -> list[sp.Expr]:
        """δ_j in terms of the resonant phases and the cyclic ones (β_j for every mode, of which those are used)."""
        if not self.resonant:
            return list(beta)
        own = sp.eye(self.modes)
        matrix = sp.Matrix([*self.resonant, *(list(own.row(j)) for j in self.cyclic)])
        return list(matrix.LUsolve(sp.Matrix([*gamma, *(beta[j] for j in self.cyclic)])))


def _reduced_rows(found: Iterable[Vector], modes: int) -> list[tuple[int, Row]]:
    """(pivot, row) of the reduced echelon form of the combinations.

    Pivots are taken from the last mode backwards, so that the first modes keep their natural phase in the frame.
    """
    rows = sorted({k for k in found if any(k)})
    if not rows:
        return []
    order = [*reversed(range(modes)), *range(modes, len(rows[0]))]
    matrix, pivots = sp.Matrix([[row[k] for k in order] for row in rows]).rref()
    result = []
    for i, p in enumerate(pivots):
        values = {order[k]: Fraction(int(x.p), int(x.q)) for k, x in enumerate(matrix.row(i))}
        result.append((order[p], tuple(values[k] for k in range(len(order)))))
    return result


def frame_of(found: Iterable[Vector], modes: int, drives: int) -> Frame:
    """The frame for the combinations (k, m) that a flow contains."""
    found = list(found)
    size = modes + drives
    angles = [tuple(Fraction(int(k == j)) for k in range(size)) for j in range(modes)]
    driven = []
    for pivot, row in _reduced_rows(found, modes):
        if pivot < modes:
            angles[pivot] = tuple(Fraction(0) if k == pivot else -x for k, x in enumerate(row))
            if not any(x for k, x in enumerate(row[:modes]) if k != pivot):
                driven.append(pivot)
    driven.sort()
    others = [j for j in range(modes) if j not in driven]
    lattice = saturated_basis([tuple(k[j] if j in others else 0 for j in range(modes)) for k in found], modes)
    resonant = [tuple(-int(k == j) for k in range(modes)) for j in driven]
    resonant += [_oriented(row, angles) for row in lattice]
    matrix = sp.Matrix(resonant) if resonant else sp.zeros(0, modes)
    # Phases of modes that turn with their own natural frequency are kept first: they mean the same in every frame.
    natural_first = sorted(others, key=lambda j: any(angles[j][modes:]))
    candidates = combinations(natural_first, modes - len(resonant))
    cyclic = next(c for c in candidates if not resonant or matrix[:, [j for j in range(modes) if j not in c]].det())
    return Frame(modes, tuple(angles), tuple(resonant), cyclic)


def _oriented(row: Vector, angles: Sequence[Row]) -> Vector:
    """A combination that a drive takes part in is a lag behind the drive: −Σ row_j δ_j if Σ row_j Φ_j is positive."""
    modes = len(row)
    parts = [
        sum((n * angle[k] for n, angle in zip(row, angles, strict=True)), Fraction(0))
        for k in range(modes, len(angles[0]))
    ]
    lead = next((x for x in parts if x), Fraction(0))
    return tuple(-x for x in row) if lead > 0 else row
