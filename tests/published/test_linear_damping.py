"""u'' + 2εu' + u = 0: linear terms at every order, against the root of the characteristic polynomial."""

from __future__ import annotations

from fractions import Fraction as F

import numpy as np
import pytest
import sympy as sp

import multiscale as ms

from .integration import slope
from .rational_series import fractions, product
from .rows import Row, over

t = sp.Symbol("t", real=True)
eps = sp.Symbol("epsilon", positive=True)
u = sp.Function("u")(t)
PROBLEM = ms.Problem(u.diff(t, 2) + 2 * eps * u.diff(t) + u, u, small=eps)

ORDER = 12
ELEMENTARY = "elementary: λ² + 2ελ + 1 = 0, λ = −ε ± i√(1 − ε²)"


def root_series(order: int) -> list[F]:
    """√(1 − ε²) by the binomial series: the ratio of neighbouring coefficients is (n − 3/2)/n in ε²."""
    result, c = [F(0)] * (order + 1), F(1)
    for n in range(order // 2 + 1):
        result[2 * n] = c
        c *= (n - F(1, 2)) / (n + 1)
    return result


ROWS = [
    Row(
        name="decay and frequency",
        problem=PROBLEM,
        order=ORDER,
        quantity=lambda e: tuple(e.slow_flow.polar.values()),
        value=lambda s: (
            -eps * s.a[0],
            sum(sp.Rational(c) * eps**n for n, c in enumerate(root_series(ORDER))) - 1,
        ),
        source=ELEMENTARY,
        confirmed="characteristic polynomial in exact rationals; eigenvalues in floating point",
    ),
    Row(
        name="frequency coefficients",
        problem=PROBLEM,
        order=8,
        quantity=lambda e: e.frequency_corrections(),
        value=lambda _: (1, 0, F(-1, 2), 0, F(-1, 8), 0, F(-1, 16), 0, F(-5, 128)),
        source=ELEMENTARY,
        confirmed="characteristic polynomial in exact rationals; eigenvalues in floating point",
    ),
    Row(
        name="slow derivatives",
        problem=PROBLEM,
        order=4,
        quantity=lambda e: [next(iter(e.slow_flow.by_scale[n].values())) for n in (1, 2, 3, 4)],
        value=lambda s: [-s.A[0], -sp.I * s.A[0] / 2, 0, -sp.I * s.A[0] / 8],
        source=ELEMENTARY,
        confirmed="characteristic polynomial in exact rationals; eigenvalues in floating point",
    ),
]


@over(ROWS)
def test_published_value(row: Row):
    assert row.difference() == []


@pytest.fixture(scope="module")
def high() -> ms.Expansion:
    return ms.expand(PROBLEM, ORDER)


@pytest.mark.parametrize("n", range(1, ORDER + 1))
def test_a_linear_motion_has_one_harmonic(high: ms.Expansion, n: int):
    assert high.levels[n].corrections[u] == 0


def exponent(expansion: ms.Expansion) -> tuple[list[F], list[F]]:
    """Real and imaginary part of λ, as series in ε."""
    (a,) = expansion.symbols.a
    decay, turn = (sp.expand(x) for x in expansion.slow_flow.polar.values())
    real, imag = ([x.coeff(eps, n) for n in range(expansion.order + 1)] for x in (sp.expand(decay / a), 1 + turn))
    return fractions(real), fractions(imag)


def test_exponent_is_a_root_of_the_characteristic_polynomial(high: ms.Expansion):
    """(x + iy)² + 2ε(x + iy) + 1 = 0 through ε^order, each part by itself."""
    x, y = exponent(high)
    zero = [F(0)] * (ORDER + 1)
    twice = [F(0), F(2)] + [F(0)] * (ORDER - 1)
    square = [p - q for p, q in zip(product(x, x), product(y, y), strict=True)]
    real = [p + q for p, q in zip(square, product(twice, x), strict=True)]
    real[0] += 1
    imag = [2 * p + q for p, q in zip(product(x, y), product(twice, y), strict=True)]
    assert (real, imag) == (zero, zero)


@pytest.mark.parametrize("order", [2, 4, 6])
def test_error_of_the_exponent_against_eigenvalues(order: int):
    x, y = exponent(ms.expand(PROBLEM, order))
    small = np.array([0.2, 0.3, 0.4])
    errors = []
    for s in small:
        exact = max(np.linalg.eigvals(np.array([[0.0, 1.0], [-1.0, -2 * s]])), key=lambda z: z.imag)
        errors.append(abs(sum(complex(p, q) * s**n for n, (p, q) in enumerate(zip(x, y, strict=True))) - exact))
    # The series is even, so the first term left out is of order + 2.
    assert order + 2 - 0.1 < slope(small, errors) < order + 2 + 0.8
    assert errors[0] < 0.2 ** (order + 2)
