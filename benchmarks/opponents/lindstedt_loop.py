"""The Van der Pol limit cycle as a Lindstedt loop on FLINT polynomials, written for this one equation only.

    ω² u'' + u = ε ω (u − u³/3)',    ' = d/dθ,    ω = Σ εⁿ ω_n,    the first harmonic a pure cosine

With ε = iδ every level is real: u_n(θ) = z^{−(2n+1)} p_n(z²), z = e^{iθ}, p_n a rational polynomial, and

    level n, harmonic k:   (1 − k²) u_{n,k} = k² Σ_{m≥1} W_m u_{n−m,k} + k Σ_m ω_m g_{n−1−m,k},   g = u − u³/3,  W = ω²

The first harmonic gives ω_n at even n; at odd n it gives the correction of the first harmonic one level below.
The coefficients are rationals, or balls of a given number of bits.
"""

from __future__ import annotations

from typing import Any

from flint import arb, arb_poly, ctx, fmpq, fmpq_poly

__all__ = ["frequency"]


def _raised(p: Any, count: int) -> Any:
    return p.left_shift(count) if hasattr(p, "left_shift") else type(p)([0] * count + p.coeffs())


def _weighted(p: Any, top: int, weight: Any) -> Any:
    """Each coefficient times an integer function of its harmonic."""
    return type(p)([weight(2 * j - top) * c for j, c in enumerate(p.coeffs())])


def _solved(p: Any, top: int) -> Any:
    """Each coefficient by 1 − k², none for the first harmonic."""
    ks = range(-top, top + 1, 2)
    return type(p)([0 if abs(k) == 1 else c / (1 - k * k) for k, c in zip(ks, p.coeffs(), strict=False)])


class _Loop:
    def __init__(self, scalar: Any, polynomial: Any) -> None:
        self.null, self.third, self.polynomial = scalar(0), scalar(1) / 3, polynomial
        self.u = [polynomial([1, 1])]
        self.squares = [self.u[0] * self.u[0]]
        self.cubes = [self.squares[0] * self.u[0]]
        self.g = [self._g(0)]
        self.w, self.w2 = [scalar(1)], [scalar(1)]

    def _g(self, n: int) -> Any:
        return _raised(self.u[n], 1) - self.cubes[n] * self.third

    def _source(self, n: int) -> Any:
        """Right-hand side at level n without W_n, from harmonic −(2n+1) up."""
        bent, turned = self.polynomial([0]), self.polynomial([0])
        for m in range(2, n, 2):
            bent += self.w2[m] * _raised(self.u[n - m], m)
        for m in range(0, n, 2):
            turned += self.w[m] * _raised(self.g[n - 1 - m], m)
        top = 2 * n + 1
        return _weighted(bent, top, lambda k: k * k) + _weighted(turned, top, lambda k: k)

    def level(self, n: int) -> None:
        source = self._source(n)
        first = source[n + 1]
        if n % 2:
            # g_{n−1} changes by (1 − 3) e^{iθ} for a unit change of the first harmonic of u_{n−1}.
            if n > 1:
                self._correct(n - 1, first / 2)
                source = self._source(n)
            self.w.append(self.null)
            self.w2.append(self.null)
        else:
            self.w2.append(-first)
            self.w.append((-first - sum((self.w[m] * self.w[n - m] for m in range(2, n, 2)), self.null)) / 2)
        self.u.append(_solved(source, 2 * n + 1))

    def _correct(self, m: int, change: Any) -> None:
        h = _raised(self.polynomial([change, change]), m)
        self.u[m] += h
        self.squares[m] += 2 * h * self.u[0]
        self.cubes[m] += 3 * h * self.squares[0]
        self.g[m] = self._g(m)

    def powers(self, n: int) -> None:
        total = self.polynomial([0])
        for i in range((n + 1) // 2):
            total += self.u[i] * self.u[n - i]
        total *= 2
        self.squares.append(total if n % 2 else total + self.u[n // 2] * self.u[n // 2])
        total = self.polynomial([0])
        for i in range(n + 1):
            total += self.squares[i] * self.u[n - i]
        self.cubes.append(total)
        self.g.append(self._g(n))


def frequency(order: int, bits: int | None = None) -> list[Any]:
    """[ω_0, …, ω_order] in powers of ε, exact or as balls of so many bits."""
    if bits is not None:
        with ctx.workprec(bits):
            return _frequency(order, _Loop(arb, arb_poly))
    return _frequency(order, _Loop(fmpq, fmpq_poly))


def _frequency(order: int, loop: _Loop) -> list[Any]:
    for n in range(1, order + 1):
        loop.level(n)
        if n < order:
            loop.powers(n)
    return [(-1) ** (n // 2) * w for n, w in enumerate(loop.w)]
