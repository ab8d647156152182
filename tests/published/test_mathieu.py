"""Mathieu's equation y'' + (a − 2q cos 2z)y = 0: the boundaries a_n(q), b_n(q) of its tongues as power series in q.

Source: NIST Digital Library of Mathematical Functions, §28.6(i), equations 28.6.1–28.6.15. Second routes that share no
code with the library: eigenvalues of the truncated three-term recurrence at 60 digits (DLMF 28.4.5–28.4.8 give the
recurrence), and SciPy's mathieu_a and mathieu_b.
"""

from __future__ import annotations

from fractions import Fraction as F
from math import factorial
from time import perf_counter

import mpmath
import numpy as np
import pytest
import sympy as sp
from support.parametric import ddu, du, eps, parametric, t, u

from multiscale.response.tongues.transition_curves import threshold, transition_curves

from .integration import slope
from .rows import difference

a, h, mu = sp.symbols("a h mu", positive=True)
MATHIEU = parametric(ddu + (a - 2 * eps * sp.cos(2 * t)) * u)
ORDER = 12
FAMILIES = [(kind, n) for n in range(5) for kind in "ab" if (kind, n) != ("b", 0)]

# (equation of DLMF, family, {power of q: coefficient}, highest power that the source settles)
DLMF = [
    ("28.6.1", ("a", 0), {2: F(-1, 2), 4: F(7, 128), 6: F(-29, 2304), 8: F(68687, 18874368)}, 9),
    (
        "28.6.2",
        ("a", 1),
        {
            0: F(1),
            1: F(1),
            2: F(-1, 8),
            3: F(-1, 64),
            4: F(-1, 1536),
            5: F(11, 36864),
            6: F(49, 589824),
            7: F(55, 9437184),
            8: F(-83, 35389440),
        },
        8,
    ),
    (
        "28.6.3",
        ("b", 1),
        {
            0: F(1),
            1: F(-1),
            2: F(-1, 8),
            3: F(1, 64),
            4: F(-1, 1536),
            5: F(-11, 36864),
            6: F(49, 589824),
            7: F(-55, 9437184),
            8: F(-83, 35389440),
        },
        8,
    ),
    (
        "28.6.4",
        ("a", 2),
        {0: F(4), 2: F(5, 12), 4: F(-763, 13824), 6: F(1002401, 79626240), 8: F(-1669068401, 458647142400)},
        9,
    ),
    (
        "28.6.5",
        ("b", 2),
        {0: F(4), 2: F(-1, 12), 4: F(5, 13824), 6: F(-289, 79626240), 8: F(21391, 458647142400)},
        9,
    ),
    (
        "28.6.6",
        ("a", 3),
        {
            0: F(9),
            2: F(1, 16),
            3: F(1, 64),
            4: F(13, 20480),
            5: F(-5, 16384),
            6: F(-1961, 23592960),
            7: F(-609, 104857600),
        },
        7,
    ),
    (
        "28.6.7",
        ("b", 3),
        {
            0: F(9),
            2: F(1, 16),
            3: F(-1, 64),
            4: F(13, 20480),
            5: F(5, 16384),
            6: F(-1961, 23592960),
            7: F(609, 104857600),
        },
        7,
    ),
    ("28.6.8", ("a", 4), {0: F(16), 2: F(1, 30), 4: F(433, 864000), 6: F(-5701, 2721600000)}, 7),
    ("28.6.9", ("b", 4), {0: F(16), 2: F(1, 30), 4: F(-317, 864000), 6: F(10049, 2721600000)}, 7),
    (
        "28.6.10",
        ("a", 5),
        {0: F(25), 2: F(1, 48), 4: F(11, 774144), 5: F(1, 147456), 6: F(37, 891813888)},
        6,
    ),
    (
        "28.6.11",
        ("b", 5),
        {0: F(25), 2: F(1, 48), 4: F(11, 774144), 5: F(-1, 147456), 6: F(37, 891813888)},
        6,
    ),
    ("28.6.12", ("a", 6), {0: F(36), 2: F(1, 70), 4: F(187, 43904000), 6: F(6743617, 92935987200000)}, 7),
    ("28.6.13", ("b", 6), {0: F(36), 2: F(1, 70), 4: F(187, 43904000), 6: F(-5861633, 92935987200000)}, 7),
]


def curve(kind: str, n: int, order: int) -> sp.Expr:
    """a_n or b_n: for q > 0 b_n lies below a_n."""
    return transition_curves(MATHIEU, a, order=order, tongue=n)[-1 if kind == "a" else 0]


def coefficients(x: sp.Expr, order: int) -> list[F]:
    found = sp.Poly(x, eps)
    return [F(int(c.p), int(c.q)) for c in (found.coeff_monomial(eps**k) for k in range(order + 1))]


@pytest.fixture(scope="module")
def series() -> dict[tuple[str, int], list[F]]:
    return {family: coefficients(curve(*family, ORDER), ORDER) for family in FAMILIES}


@pytest.mark.parametrize(("equation", "family", "published", "order"), DLMF, ids=[row[0] for row in DLMF])
def test_published_coefficients(equation: str, family: tuple[str, int], published: dict[int, F], order: int):
    wanted = sum(sp.Rational(c) * eps**k for k, c in published.items())
    assert difference(curve(*family, order), wanted) == []


@pytest.mark.parametrize("n", [7, 8])
def test_general_formula(n: int):
    """DLMF 28.6.14, to q⁶ the same for a_n and b_n from n = 7 on."""
    wanted = n**2 + sum(
        sp.Rational(top, below) * eps**k
        for k, top, below in (
            (2, 1, 2 * (n**2 - 1)),
            (4, 5 * n**2 + 7, 32 * (n**2 - 1) ** 3 * (n**2 - 4)),
            (6, 9 * n**4 + 58 * n**2 + 29, 64 * (n**2 - 1) ** 5 * (n**2 - 4) * (n**2 - 9)),
        )
    )
    assert difference(transition_curves(MATHIEU, a, order=6, tongue=n), (wanted, wanted)) == []


@pytest.mark.parametrize("n", range(1, 9))
def test_width_of_the_tongues(n: int):
    """DLMF 28.6.15: a_n − b_n = 2qⁿ/(2^{n−1}(n−1)!)² + …"""
    lower, upper = transition_curves(MATHIEU, a, order=n, tongue=n)
    assert difference(upper - lower, 2 * eps**n / sp.Integer(2 ** (n - 1) * factorial(n - 1)) ** 2) == []


def tridiagonal(kind: str, n: int, q: mpmath.mpf, size: int = 18) -> mpmath.mpf:
    """The eigenvalue nearest n², of the recurrence of the Fourier coefficients of ce_n or se_n."""
    first = {"a": (0, 1), "b": (2, 1)}[kind][n % 2]
    matrix = mpmath.matrix(size)
    for k in range(size):
        matrix[k, k] = mpmath.mpf(first + 2 * k) ** 2
        if k:
            matrix[k, k - 1] = matrix[k - 1, k] = q
    if first == 0:
        matrix[0, 1] = matrix[1, 0] = q * mpmath.sqrt(2)
    if first == 1:
        matrix[0, 0] += q if kind == "a" else -q
    return min(mpmath.eigsy(matrix, eigvals_only=True), key=lambda x: abs(x - n**2))


def value(found: list[F], q: mpmath.mpf) -> mpmath.mpf:
    return mpmath.fsum(mpmath.mpf(c.numerator) / c.denominator * q**k for k, c in enumerate(found))


@pytest.mark.parametrize("family", FAMILIES, ids=lambda f: f"{f[0]}{f[1]}")
def test_order_against_the_recurrence(series, family: tuple[str, int]):
    """Error of the truncated series ~ q^13 (q^14 for even n) and of the size of the last terms; a wrong digit shows."""
    kind, n = family
    with mpmath.workdps(60):
        points = [mpmath.mpf(q) / 1000 for q in (20, 14, 10)]
        exact = [tridiagonal(kind, n, q) for q in points]
        found = series[family]
        errors = [abs(value(found, q) - x) for q, x in zip(points, exact, strict=True)]
        assert slope([float(q) for q in points], [float(e) for e in errors]) > ORDER + 0.9 + (n % 2 == 0) * 0.9
        largest = max(abs(c) for c in found[ORDER - 1 :])
        assert errors[0] < mpmath.mpf(largest.numerator) / largest.denominator * points[0] ** (ORDER + 1)
        wrong = [*found[:ORDER], found[ORDER] * F(11, 10)]
        wrong_errors = [abs(value(wrong, q) - x) for q, x in zip(points, exact, strict=True)]
        assert slope([float(q) for q in points], [float(e) for e in wrong_errors]) < ORDER + 0.3


@pytest.mark.parametrize("family", FAMILIES, ids=lambda f: f"{f[0]}{f[1]}")
def test_against_scipy(series, family: tuple[str, int]):
    """Within twice the first term left out (its ratio to the last one taken from the radius of convergence)."""
    special = pytest.importorskip("scipy.special")
    kind, n = family
    exact = {"a": special.mathieu_a, "b": special.mathieu_b}[kind]
    points = np.array([0.1, 0.2, 0.4, 0.6])
    found = sum(float(c) * points**k for k, c in enumerate(series[family]))
    last = max(abs(float(c)) * 1.5 ** (k - ORDER) for k, c in enumerate(series[family]) if k >= ORDER - 1)
    bound = last * points ** (ORDER + 1) + 2e-13 * (1 + n**2)
    assert np.all(abs(found - exact(n, points)) < bound)
    without = found - float(series[family][2]) * 1e-6 * points**2
    assert not np.all(abs(without - exact(n, points)) < bound)


@pytest.mark.parametrize("family", [("a", 0), ("a", 2)], ids=["a0", "a2"])
def test_slope_against_scipy(series, family: tuple[str, int]):
    """Where the error stands above rounding: the series with the smallest radius of convergence, 1.4688 (DLMF 28.7)."""
    special = pytest.importorskip("scipy.special")
    points = np.array([0.3, 0.4, 0.5])
    found = sum(float(c) * points**k for k, c in enumerate(series[family]))
    errors = abs(found - special.mathieu_a(family[1], points))
    assert slope(points, errors) > ORDER + 1


def test_all_tongues_in_a_few_seconds():
    begin = perf_counter()
    for n in range(5):
        transition_curves(MATHIEU, a, order=ORDER, tongue=n)
    assert perf_counter() - begin < 5


# Damped: x'' + 2μx' + (δ + 2ε cos 2t)x = 0; in powers of ε the damping is εμ and the drive εh.
DAMPED = parametric(ddu + 2 * eps * mu * du + (a + 2 * eps * h * sp.cos(2 * t)) * u)


def test_damped_principal_tongue():
    """δ = 1 ∓ √(ε² − 4μ²) + …: Nayfeh and Mook, Nonlinear Oscillations, 1979, ch. 5, from memory; confirmed by Floquet
    multipliers in tests/response."""
    root = sp.sqrt(h**2 - 4 * mu**2)
    assert transition_curves(DAMPED, a, order=1, tongue=1) == (1 - eps * root, 1 + eps * root)


def test_threshold_of_the_principal_tongue():
    """ε = 2μ + …, same source."""
    assert threshold(DAMPED, a, h, order=1, tongue=1) == 2 * mu


def test_damped_boundaries_without_damping_are_those_of_mathieu():
    damped = [x.subs(mu, 0).subs(h, 1) for x in transition_curves(DAMPED, a, order=8, tongue=1)]
    assert difference(damped, transition_curves(MATHIEU, a, order=8, tongue=1)) == []
