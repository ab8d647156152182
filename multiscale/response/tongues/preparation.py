"""Series in ε whose coefficients are polynomials in σ, and the factor of them that vanishes at small ε.

    F(σ, ε) = U(σ, ε)·Q(σ, ε),      Q monic of degree m in σ,  Q(σ, 0) = F(σ, 0),  U(σ, 0) = 1

(Weierstrass's preparation, order by order in ε.) So the roots of F that stay bounded as ε → 0 are those of Q, exactly.
"""

from __future__ import annotations

from typing import Any

from multiscale.algebra.ring import Ring

__all__ = ["prepared", "product", "square_root"]

Polynomial = list[Any]


def _add(ring: Ring, x: Polynomial, y: Polynomial) -> Polynomial:
    if len(x) < len(y):
        x, y = y, x
    return [a + y[k] if k < len(y) else a for k, a in enumerate(x)]


def _times(ring: Ring, x: Polynomial, y: Polynomial) -> Polynomial:
    result = [ring.zero] * (len(x) + len(y) - 1)
    for i, a in enumerate(x):
        if a:
            for j, b in enumerate(y):
                if b:
                    result[i + j] = result[i + j] + a * b
    return result


def _normal(ring: Ring, x: Polynomial) -> Polynomial:
    return [ring.normal(a) for a in x]


def product(ring: Ring, x: list[Polynomial], y: list[Polynomial]) -> list[Polynomial]:
    """The product of two series known to the same order."""
    result = []
    for j in range(len(x)):
        total: Polynomial = [ring.zero]
        for i in range(j + 1):
            total = _add(ring, total, _times(ring, x[i], y[j - i]))
        result.append(_normal(ring, total))
    return result


def prepared(ring: Ring, series: list[Polynomial], degree: int) -> list[Polynomial]:
    """Q, as a series of polynomials of degree below `degree`, its leading σ^degree left out.

    ``series[0]`` is monic of that degree.
    """
    monic = series[0][: degree + 1]
    unit: list[Polynomial] = [[ring.one]]
    factor: list[Polynomial] = [monic[:degree]]
    for j in range(1, len(series)):
        rest = series[j]
        for i in range(1, j):
            rest = _add(ring, rest, [-a for a in _times(ring, unit[i], factor[j - i])])
        quotient, remainder = _divided(ring, _normal(ring, rest), monic)
        unit.append(quotient)
        factor.append(remainder)
    return factor


def _divided(ring: Ring, x: Polynomial, monic: Polynomial) -> tuple[Polynomial, Polynomial]:
    degree = len(monic) - 1
    rest = [*x, *[ring.zero] * (degree - len(x))]
    quotient = [ring.zero] * max(len(rest) - degree, 1)
    for k in range(len(rest) - degree - 1, -1, -1):
        quotient[k] = rest[k + degree]
        if quotient[k]:
            for i in range(degree):
                rest[k + i] = ring.normal(rest[k + i] - quotient[k] * monic[i])
    return quotient, rest[:degree]


def square_root(ring: Ring, series: list[Any], half: Any) -> list[Any]:
    """√(1 + x_1ε + x_2ε² + …) for the list [1, x_1, x_2, …]; `half` is the ring's ½."""
    result = [ring.one]
    for j in range(1, len(series)):
        rest = series[j]
        for i in range(1, j):
            rest = rest - result[i] * result[j - i]
        result.append(ring.normal(rest * half))
    return result
