"""Truncated Taylor series in time with numbers of any precision as coefficients.

    x(t + τ) = x_0 + x_1 τ + … + x_K τ^K,      product  (x y)_k = Σ_i x_i y_{k−i}

The result of an operation is known as far as all operands are.
"""

from __future__ import annotations

from collections.abc import Sequence
from typing import Any

__all__ = ["Jet"]

Number = Any


class Jet:
    """x_0 + x_1 τ + … + x_K τ^K; numbers mix with jets as constants."""

    __slots__ = ("coefficients",)

    def __init__(self, coefficients: Sequence[Number]) -> None:
        self.coefficients = tuple(coefficients)

    def __add__(self, other: Jet | Number) -> Jet:
        if isinstance(other, Jet):
            return Jet([x + y for x, y in zip(self.coefficients, other.coefficients, strict=False)])
        return Jet((self.coefficients[0] + other, *self.coefficients[1:]))

    __radd__ = __add__

    def __mul__(self, other: Jet | Number) -> Jet:
        x = self.coefficients
        if not isinstance(other, Jet):
            return Jet([c * other for c in x])
        y = other.coefficients
        product = []
        for k in range(min(len(x), len(y))):
            total = x[0] * y[k]
            for i in range(1, k + 1):
                total = total + x[i] * y[k - i]
            product.append(total)
        return Jet(product)

    __rmul__ = __mul__

    def __pow__(self, n: int) -> Jet | Number:
        """A whole power; others are compositions."""
        if n < 0:
            return self.reciprocal() ** -n
        result: Jet | Number = 1
        square = self
        while n:
            if n & 1:
                result = square * result
            n >>= 1
            if n:
                square = square * square
        return result

    def reciprocal(self) -> Jet:
        """1/x from x · (1/x) = 1, coefficient by coefficient."""
        x = self.coefficients
        inverse = [1 / x[0]]
        for k in range(1, len(x)):
            inverse.append(-inverse[0] * sum(x[i] * inverse[k - i] for i in range(1, k + 1)))
        return Jet(inverse)

    def conjugate(self) -> Jet:
        return Jet([c.conjugate() for c in self.coefficients])

    def integral(self, value: Number) -> Jet:
        """A jet with this one as its derivative and the given value at τ = 0, known one order further."""
        return Jet((value, *(c / (k + 1) for k, c in enumerate(self.coefficients))))

    def composed(self, outer: Sequence[Number]) -> Jet:
        """f(x) for f(x_0 + h) = Σ outer_k h^k, by Horner's rule."""
        h = Jet((self.coefficients[0] * 0, *self.coefficients[1:]))
        result: Jet = h * 0 + outer[-1]
        for c in reversed(outer[:-1]):
            result = result * h + c
        return result
