"""Real trigonometric polynomials with the few operations that the recursion for a periodic orbit asks of them.

    w(θ) = Σ_k (α_k + Jβ_k) e^{ikθ},      α_{−k} = α_k,   β_{−k} = −β_k,   J² = −d

α is the part in cosines, β that in sines; J = i√d, d a square-free positive integer, keeps every coefficient rational
when the natural frequency is a rational multiple of √d. The derivative is δ = √d d/dθ, that is multiplication by Jk.

The contract (`Waves`), with scalars of one field and |k| ≤ K kept, K the last argument:

    unit()                 e^{iθ} + e^{−iθ}
    products(terms, K)     Σ c x y             for terms (c, x, y)
    runs(X, Y, [K_0, …])   Σ_{i+j=m} x_i y_j   for m = 0, 1, …, each to its K_m; `gathers` says whether it is faster so
    combination(terms, K)  Σ c x               for terms (c, x)
    derivative(x)          Jk x_k
    solved(x)              x_k/(1 − k²) for k ≠ ±1, and nothing at k = ±1
    first(x)               (α_1, β_1)
    table(x)               {k: (α_k, β_k)}, k ≥ 0
    constant()             1

and of scalars

    scalar(v)      a rational, or an element of the field as it is
    tidy(x)        the same in reduced form
    quotient(x, y) x/y
    is_null(x)     x = 0 identically, so that it may be left out
    vanishes(x)    x = 0 as far as the field can tell: a ball that contains zero does
"""

from __future__ import annotations

from collections.abc import Sequence
from typing import Any, Protocol

__all__ = ["Waves"]


class Waves(Protocol):
    """See the head of this module."""

    zero: Any
    gathers: bool

    def scalar(self, value: Any) -> Any: ...
    def tidy(self, x: Any) -> Any: ...
    def quotient(self, x: Any, y: Any) -> Any: ...
    def is_null(self, x: Any) -> bool: ...
    def vanishes(self, x: Any) -> bool: ...
    def unit(self) -> Any: ...
    def constant(self) -> Any: ...
    def products(self, terms: Sequence[tuple[Any, Any, Any]], limit: int) -> Any: ...
    def runs(self, x: Sequence[Any], y: Sequence[Any], limits: Sequence[int]) -> list[Any]: ...
    def combination(self, terms: Sequence[tuple[Any, Any]], limit: int) -> Any: ...
    def derivative(self, x: Any) -> Any: ...
    def solved(self, x: Any) -> Any: ...
    def first(self, x: Any) -> tuple[Any, Any]: ...
    def table(self, x: Any) -> dict[int, tuple[Any, Any]]: ...
