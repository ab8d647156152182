"""LaTeX for notebooks: aligned equations, each cut after its first terms where it would fill the page."""

from __future__ import annotations

from collections.abc import Iterable
from itertools import islice

import sympy as sp

__all__ = ["aligned", "note", "shortened"]

LONGEST = 250
"""Nodes of an expression that are still shown in full."""


def _length(x: sp.Expr, limit: int) -> int:
    """The number of nodes, counted no further than just beyond the limit."""
    return sum(1 for _ in islice(sp.preorder_traversal(x), limit + 1))


def shortened(x: sp.Expr, limit: int = LONGEST) -> str:
    """LaTeX of an expression; of a long sum only the first terms and how many there are in all."""
    if _length(x, limit) <= limit:
        return str(sp.latex(x))
    if isinstance(x, sp.Mul):
        longest = max(x.args, key=lambda factor: _length(factor, limit))
        if isinstance(longest, sp.Add):
            rest = sp.Mul(*(factor for factor in x.args if factor is not longest))
            return rf"{sp.latex(rest)} \left({shortened(longest, limit)}\right)"
    if not isinstance(x, sp.Add):
        return r"\cdots"
    lengths = {term: _length(term, limit) for term in x.args}
    ordered = sorted(x.as_ordered_terms() if len(x.args) <= limit else x.args, key=lengths.__getitem__)
    shown: list[str] = []
    left = limit
    for term in ordered:
        if lengths[term] > left:
            # Short terms come first, so the one that does not fit is shown in part.
            part = shortened(term, left // 2)
            shown += [part] if part != r"\cdots" else []
            break
        shown.append(sp.latex(term))
        left -= lengths[term]
    if len(shown) < len(ordered):
        shown.append(rf"\cdots\ \text{{({len(ordered)} terms)}}")
    return " + ".join(shown).replace("+ -", "-")


def aligned(rows: Iterable[tuple[str, sp.Expr]], limit: int | None = LONGEST) -> str:
    """Displayed equations left = value; `limit` None shows all of every value."""
    lines = [f"{left} &= {sp.latex(value) if limit is None else shortened(value, limit)}" for left, value in rows]
    return r"$\displaystyle \begin{aligned}" + r" \\ ".join(lines) + r"\end{aligned}$"


def note(text: str) -> str:
    """Words in place of what is too long to show."""
    return rf"$\text{{{text}}}$"
