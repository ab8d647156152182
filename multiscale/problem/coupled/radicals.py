"""Radicals of frequencies as positive symbols.

    w = √(k/m)     eliminates a parameter where one enters linearly, k = m w²: w is then a free symbol
    w = √(a² + b²) is a generator with the relation w² = a² + b² otherwise; so are nested radicals √(5 + √17)

Square roots of rational numbers stay as they are: the reader splits them into roots of primes.
"""

from __future__ import annotations

from collections.abc import Callable, Container, Iterable, Sequence

import sympy as sp

from multiscale.algebra.quotient import reduced
from multiscale.problem.frequencies import Root, square_root
from multiscale.problem.reading import Reader

__all__ = ["EliminatedError", "Radicals"]


class EliminatedError(Exception):
    """A parameter was eliminated: whatever was read before is to be read again."""


class Radicals:
    """Takes square roots.

    `eliminate(symbol, square)` says whether a parameter was eliminated by symbol² = square, `adjoin(symbol, square)`
    notes a relation of the ring, `name(value)` gives a symbol for a number; `relations` are those so far, a symbol
    before those in its square.
    """

    def __init__(
        self,
        eliminate: Callable[[sp.Symbol, sp.Expr], bool],
        adjoin: Callable[[sp.Symbol, sp.Expr], None],
        relations: Sequence[tuple[sp.Symbol, sp.Expr]],
        name: Callable[[sp.Expr], sp.Symbol],
        written: Container[sp.Expr],
    ) -> None:
        self._eliminate, self._adjoin, self._name = eliminate, adjoin, name
        self._relations, self._written = relations, written

    def _split(self, square: sp.Expr) -> Root:
        reader = Reader([square], (), {})
        return square_root(reader, reduced(reader.ring, reader.ring.normal(reader.read(square))), self._written)

    def _nested(self, square: sp.Expr) -> bool:
        if square.is_number:
            return not square.is_Rational
        return any(s in square.free_symbols for s, _ in self._relations)

    def settle(self, entries: Iterable[sp.Expr]) -> None:
        """Square roots of parameters in L_0 become symbols too, √k beside k = √k². Raises `EliminatedError`."""
        for p in sorted({p for x in entries for p in x.atoms(sp.Pow)}, key=str):
            if not p.exp.is_Rational or p.exp.q != 2 or not p.base.free_symbols:
                continue
            if self._eliminate(sp.Symbol(f"sqrt({p.base})", positive=True), p.base):
                raise EliminatedError

    def number(self, value: sp.Expr) -> sp.Expr:
        """A symbol for a number without a closed form."""
        return self._name(value)

    def rational(self, square: sp.Expr) -> sp.Expr | None:
        """The root of the square of a rational function, None for anything else."""
        if square.is_negative or self._nested(square):
            return None
        root = self._split(square)
        return root.outside if root.radicand == 1 and not _has_root(root.outside) else None

    def __call__(self, square: sp.Expr) -> sp.Expr:
        """√square. Raises `EliminatedError`."""
        if square.is_Rational:
            return sp.sqrt(square)
        outside = sp.Integer(1)
        if not self._nested(square):
            root = self._split(square)
            outside, square = root.outside, root.radicand
            if not square.free_symbols:
                return outside * sp.sqrt(square)
            if self._eliminate(sp.Symbol(f"sqrt({square})", positive=True), square):
                raise EliminatedError
        above, below = sp.fraction(sp.together(square))
        radicand = sp.expand(above * below)
        symbol = next((s for s, x in self._relations if x == radicand), None)
        if symbol is None:
            symbol = sp.Symbol(f"sqrt({radicand})", positive=True)
            self._adjoin(symbol, radicand)
        return outside * symbol / below


def _has_root(x: sp.Expr) -> bool:
    return any(not p.exp.is_Integer for p in x.atoms(sp.Pow))
