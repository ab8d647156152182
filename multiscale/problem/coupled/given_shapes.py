"""Modes that the user knows: frequencies with their shapes, for matrices whose frequencies no machine finds.

    L_0(iω) φ = 0,      ψ^H L_0(iω) = 0

are verified in the ring of the problem, with every relation in force; nothing is taken on trust. A frequency may be
an expression in the parameters, or a symbol of its own that a relation ties to them, {k: m ω²}. All other roots of
det L_0 stay unknown: they are divisors like any other rate.
"""

from __future__ import annotations

from collections.abc import Iterable, Mapping, Sequence
from dataclasses import dataclass
from typing import Any

import sympy as sp

from multiscale.algebra.matrices import Matrix, applied
from multiscale.algebra.quotient import vanishes
from multiscale.algebra.ring import Ring
from multiscale.errors import ProblemError
from multiscale.problem.canonical import Working
from multiscale.problem.coupled.radicals import Radicals
from multiscale.problem.coupled.spectrum import Found
from multiscale.problem.reading import IMAGINARY_UNIT, Reader, decimals, given_expression

__all__ = ["GivenShape", "Shapes", "check_symbols", "given_shapes", "roots_given", "shapes_given"]

Vector = tuple[sp.Expr, ...]
Shapes = dict[sp.Expr, tuple[Vector, ...]]


@dataclass(frozen=True)
class GivenShape:
    """A frequency with its right kernel vectors, and left ones (none: they follow from the matrix)."""

    frequency: sp.Expr
    right: tuple[Vector, ...]
    left: tuple[Vector, ...] = ()

    def mapped(self, change: Any) -> GivenShape:
        """`change` applied to every expression."""
        right, left = (tuple(tuple(change(x) for x in v) for v in side) for side in (self.right, self.left))
        return GivenShape(change(self.frequency), right, left)


def shapes_given(given: Any, unknowns: Sequence[sp.Expr], name: str) -> Shapes:
    """{frequency: vectors} from what `shapes` or `left_shapes` was given."""
    if given is not None and not isinstance(given, Mapping):
        raise ProblemError(f"{name} is {given!r}: expected {{frequency: components of the shape by unknown, in order}}")
    result: Shapes = {}
    for key, value in dict(given or {}).items():
        frequency = given_expression(key)
        if frequency is None or frequency.is_nonpositive:
            raise ProblemError(f"{name} has the frequency {key!r}: expected a positive number or an expression")
        result[decimals(frequency)] = _vectors(value, unknowns, f"{name}[{frequency}]")
    return result


def _vectors(given: Any, unknowns: Sequence[sp.Expr], name: str) -> tuple[Vector, ...]:
    """One vector, or several of one frequency."""
    if isinstance(given, Mapping):
        if strange := [u for u in given if u not in unknowns]:
            raise ProblemError(f"{name} has the key {strange[0]!r}: expected unknowns, {tuple(unknowns)}")
        given = [given.get(u, 0) for u in unknowns]
    if hasattr(given, "tolist") and len(given.shape) == 2:
        # Shapes are the columns of a matrix.
        given = [list(column) for column in zip(*given.tolist(), strict=True)]
    if isinstance(given, str) or not isinstance(given, Iterable):
        raise ProblemError(f"{name} is {given!r}: expected one component for each of {tuple(unknowns)}")
    items = list(given)
    if items and all(isinstance(x, Iterable) and not isinstance(x, str | sp.Expr) for x in items):
        several = [_vectors(x, unknowns, name) for x in items]
        return tuple(v for vectors in several for v in vectors)
    entries = [_component(x) for x in items]
    if None in entries or len(entries) != len(unknowns):
        raise ProblemError(
            f"{name} is {items}: expected {len(unknowns)} numbers or expressions, the components of {tuple(unknowns)}"
        )
    if not any(entries):
        raise ProblemError(f"{name} is zero: a shape needs a component that moves")
    return (tuple(decimals(x) for x in entries if x is not None),)


def _component(x: Any) -> sp.Expr | None:
    if isinstance(x, complex):
        return sp.Float(x.real) + sp.I * sp.Float(x.imag)
    return given_expression(x)


def given_shapes(shapes: Shapes, left: Shapes) -> tuple[GivenShape, ...]:
    if strange := [w for w in left if w not in shapes]:
        raise ProblemError(f"left_shapes has the frequency {strange[0]}, which shapes does not have: {list(shapes)}")
    return tuple(GivenShape(w, vectors, left.get(w, ())) for w, vectors in shapes.items())


def check_symbols(shapes: Sequence[GivenShape], symbols: set[sp.Symbol]) -> None:
    """Refuse symbols that look like those of the equations and are others."""
    found = set().union(*(x.free_symbols for g in shapes for v in (*g.right, *g.left) for x in (g.frequency, *v)))
    names = {s.name: s for s in symbols}
    if strange := sorted((s for s in found - symbols if s.name in names), key=str):
        raise ProblemError(
            f"the symbol {strange[0]} of `shapes` and one of the equations have the same name and different "
            "assumptions: use the same symbol"
        )


def roots_given(
    shapes: Sequence[GivenShape],
    matrices: tuple[sp.Matrix, sp.Matrix, sp.Matrix],
    working: Working,
    radicals: Radicals,
    meanings: Mapping[sp.Symbol, sp.Expr],
) -> list[Found]:
    """The roots, verified. Raises `ProblemError` with what is left over, and `EliminatedError`."""
    settled = [g.mapped(lambda x: _settled(_in_force(x, working), radicals)) for g in shapes]
    leaves = [x.xreplace({sp.I: IMAGINARY_UNIT}) for g in settled for v in (*g.right, *g.left) for x in v]
    entries = [x for m in matrices for x in m]
    reader = Reader([*entries, *(g.frequency for g in settled), *leaves], (), {}, working.relations)
    ring = reader.ring
    known: list[Any] = []
    read = [[[reader.read(x) for x in m.row(k)] for k in range(m.rows)] for m in matrices]
    for g, stated in zip(settled, shapes, strict=True):
        w = ring.normal(reader.read(g.frequency))
        if vanishes(ring, w) or any(vanishes(ring, w - v) or vanishes(ring, w + v) for v in known):
            raise ProblemError(
                f"shapes gives the frequency {stated.frequency} twice, or zero: several shapes of one frequency stand "
                "in one entry, {frequency: [shape, shape]}"
            )
        known.append(w)
        matrix = _at(ring, read, w)
        transposed = [list(column) for column in zip(*matrix, strict=True)]
        for side, vectors in (("", g.right), ("left ", g.left)):
            for v in vectors:
                used = (reader, transposed if side else matrix)
                _verify(side, v, g.frequency, stated.frequency, used, matrices, working, meanings)
        if _dependent(ring, [[reader.read(x.xreplace({sp.I: IMAGINARY_UNIT})) for x in v] for v in g.right]):
            raise ProblemError(f"the shapes given for the frequency {stated.frequency} are not independent")
    return [Found(g.frequency, len(g.right), s.frequency, True) for g, s in zip(settled, shapes, strict=True)]


def _in_force(x: sp.Expr, working: Working) -> sp.Expr:
    """x without the parameters that were eliminated."""
    for symbol, value in working.changes:
        x = x.subs(symbol, value)
    return x


def _settled(x: sp.Expr, radicals: Radicals) -> sp.Expr:
    """x with its square roots as the symbols of the ring."""
    if not any(p.exp.is_Rational and p.exp.q == 2 for p in x.atoms(sp.Pow)) or x.has(sp.I):
        return x.replace(_is_root, lambda p: radicals(_settled(p.base, radicals)) ** p.exp.p) if x.has(sp.Pow) else x
    square = sp.cancel(sp.expand(x**2))
    if not any(_is_root(p) for p in square.atoms(sp.Pow)):
        root = radicals(square)
        return -root if x.is_negative else root
    return x.replace(_is_root, lambda p: radicals(_settled(p.base, radicals)) ** p.exp.p)


def _is_root(x: sp.Expr) -> bool:
    return bool(x.is_Pow and x.exp.is_Rational and x.exp.q == 2)


def _at(ring: Ring, matrices: Sequence[Matrix], w: Any) -> list[list[Any]]:
    """L_0(iω)."""
    square, turn = ring.normal(w * w), ring.normal(ring.generators[0] * w)
    rows = zip(*matrices, strict=True)
    return [[ring.normal(k + turn * c - square * m) for m, c, k in zip(*row, strict=True)] for row in rows]


def _verify(
    side: str,
    vector: Vector,
    frequency: sp.Expr,
    stated: sp.Expr,
    read: tuple[Reader, Matrix],
    matrices: tuple[sp.Matrix, sp.Matrix, sp.Matrix],
    working: Working,
    meanings: Mapping[sp.Symbol, sp.Expr],
) -> None:
    reader, matrix = read
    # ψ^H L = 0 is L^T conj(ψ) = 0.
    own = [x.subs(sp.I, -sp.I) if side else x for x in vector]
    wrong = _left_over(reader, matrix, own)
    if not wrong:
        return
    mass, damping, stiffness = (m.T if side else m for m in matrices)
    left = (stiffness + sp.I * frequency * damping - frequency**2 * mass) * sp.Matrix(own)
    shown = [sp.factor(left[k].subs(working.hidden).subs(meanings)) for k in wrong]
    law = "psi^H L_0(i*omega)" if side else "L_0(i*omega) phi"
    text = str(shown[0])
    if own != (mirrored := [x.subs(sp.I, -sp.I) for x in own]) and not _left_over(reader, matrix, mirrored):
        remedy = ". Its complex conjugate is one: motions are written phi*exp(+i*omega*t) with a positive frequency"
    else:
        remedy = _remedy(stated, shown)
    raise ProblemError(
        f"the {side}shape given for the frequency {stated} is none: component {wrong[0] + 1} of {law} is "
        f"{text if len(text) < 300 else text[:290] + ' …'}, not zero{remedy}"
    )


def _left_over(reader: Reader, matrix: Matrix, vector: Sequence[sp.Expr]) -> list[int]:
    """The components of the product that are not zero."""
    rest = applied(reader.ring, matrix, [reader.read(x.xreplace({sp.I: IMAGINARY_UNIT})) for x in vector])
    return [k for k, x in enumerate(rest) if not vanishes(reader.ring, x)]


def _remedy(frequency: sp.Expr, left: Sequence[sp.Expr]) -> str:
    """The relation that makes all that is left over vanish, where one parameter enters it linearly."""
    if not frequency.is_Symbol:
        return ". Correct the shape or the frequency"
    for p in sorted(left[0].free_symbols - {frequency}, key=str):
        above = sp.numer(sp.together(left[0]))
        slope = sp.diff(above, p)
        if slope.is_zero or p in slope.free_symbols:
            continue
        value = sp.factor(-above.subs(p, 0) / slope)
        if frequency in value.free_symbols and all(sp.cancel(x.subs(p, value)) == 0 for x in left):
            return f". If {frequency} is meant to follow from the parameters, add resonances={{{p}: {value}}}"
    return ". Correct the shape, or tie the frequency to the parameters by a relation in `resonances`"


def _dependent(ring: Ring, vectors: list[list[Any]]) -> bool:
    """Whether the vectors are linearly dependent, by elimination without division."""
    rows = [list(v) for v in vectors]
    while rows:
        row = rows.pop()
        place = next((k for k, x in enumerate(row) if not vanishes(ring, ring.normal(x))), None)
        if place is None:
            return True
        rows = [[ring.normal(row[place] * x - r[place] * y) for x, y in zip(r, row, strict=True)] for r in rows]
    return False
