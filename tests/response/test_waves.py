"""The contract of trigonometric polynomials, for every representation."""

from __future__ import annotations

import cmath
import random
from fractions import Fraction as F

import pytest

from multiscale.response.orbits.waves.convolution import Convolution
from multiscale.response.orbits.waves.plain import PlainWaves

SQUARE = 3
REPRESENTATIONS = ["plain", "integers, step 1", "integers, step 2", "balls, step 2"]


def waves(name):
    if name == "plain":
        return PlainWaves(square=SQUARE)
    pytest.importorskip("flint")
    from multiscale.response.orbits.waves.packed import PackedWaves
    from multiscale.response.orbits.waves.parts import BallParts, ExactParts

    return PackedWaves(BallParts if "balls" in name else ExactParts, 2 if "2" in name else 1, SQUARE)


def random_wave(algebra, seed, top=5):
    """An odd wave, built with the operations themselves: powers of the unit wave and their derivatives."""
    pick = random.Random(seed)
    powers = [algebra.unit()]
    for _ in range(top // 2):
        square = algebra.products([(algebra.scalar(1), powers[-1], algebra.unit())], 99)
        powers.append(algebra.products([(algebra.scalar(1), square, algebra.unit())], 99))
    terms = []
    for power in powers:
        for x in (power, algebra.derivative(power)):
            terms.append((algebra.scalar(F(pick.randint(-9, 9), pick.randint(1, 7))), x))
    return algebra.combination(terms, 99)


def plain(algebra, x):
    """{k: (α_k, β_k)} over all k, as floats."""
    half = {k: (number(a), number(b)) for k, (a, b) in algebra.table(x).items()}
    return half | {-k: (a, -b) for k, (a, b) in half.items()}


def number(x):
    if hasattr(x, "mid"):
        x = x.mid().fmpq()
    return float(F(int(x.p), int(x.q))) if hasattr(x, "p") else float(x)


def value(algebra, x, angle):
    """The value at an angle, a complex number with J = i√d."""
    return sum((a + 1j * SQUARE**0.5 * b) * cmath.exp(1j * k * angle) for k, (a, b) in plain(algebra, x).items())


@pytest.mark.parametrize("name", REPRESENTATIONS)
@pytest.mark.parametrize("seed", range(3))
def test_products_and_derivatives(name, seed):
    algebra = waves(name)
    x, y = random_wave(algebra, seed), random_wave(algebra, seed + 10, 3)
    both = algebra.products([(algebra.scalar(F(2, 3)), x, y)], 99)
    third = algebra.products([(algebra.scalar(1), both, x)], 99)
    slope = algebra.derivative(both)
    for angle in (0.3, 1.7, 4.0):
        p, q = value(algebra, x, angle), value(algebra, y, angle)
        assert abs(p.imag) < 1e-9
        assert value(algebra, both, angle) == pytest.approx(2 / 3 * p * q, rel=1e-9)
        assert value(algebra, third, angle) == pytest.approx(2 / 3 * p * q * p, rel=1e-9)
        step = 1e-5
        rise = (value(algebra, both, angle + step) - value(algebra, both, angle - step)) / (2 * step)
        assert value(algebra, slope, angle) == pytest.approx(SQUARE**0.5 * rise, rel=1e-5, abs=1e-4)


@pytest.mark.parametrize("name", REPRESENTATIONS)
@pytest.mark.parametrize("limit", range(9))
def test_a_limit_cuts_and_changes_nothing_else(name, limit):
    algebra = waves(name)
    x, y = random_wave(algebra, 1), random_wave(algebra, 2, 3)
    one = algebra.scalar(1)
    square = algebra.products([(one, x, y), (one, y, y)], 99)
    for terms in ([(one, x, y), (one, y, y)], [(one, x, square), (one, square, y)]):
        whole = plain(algebra, algebra.products(terms, 99))
        cut = plain(algebra, algebra.products(terms, limit))
        for k, pair in whole.items():
            assert cut.get(k, (0, 0)) == pytest.approx(pair if abs(k) <= limit else (0, 0), rel=1e-9, abs=1e-12), k


@pytest.mark.parametrize("name", REPRESENTATIONS)
def test_solved_and_first(name):
    """Law: (1 − k²)·solved(x)_k = x_k for k ≠ ±1."""
    algebra = waves(name)
    x = random_wave(algebra, 4)
    found = plain(algebra, algebra.solved(x))
    for k, (a, b) in plain(algebra, x).items():
        if abs(k) == 1:
            assert found.get(k, (0, 0)) == (0, 0)
        else:
            assert ((1 - k * k) * found[k][0], (1 - k * k) * found[k][1]) == pytest.approx((a, b))
    assert tuple(map(number, algebra.first(x))) == pytest.approx(plain(algebra, x)[1])


@pytest.mark.parametrize("name", ["plain", "integers, step 1"])
def test_the_constant(name):
    algebra = waves(name)
    x = random_wave(algebra, 5)
    one = algebra.constant()
    assert plain(algebra, algebra.products([(algebra.scalar(1), one, x)], 99)) == plain(algebra, x)
    assert plain(algebra, algebra.products([(algebra.scalar(1), one, one)], 99))[0][0] == 1


def by_level(algebra, x, y, m):
    """Σ_{i+j=m} x_i y_j, product by product."""
    pairs = [(algebra.scalar(1), x[i], y[m - i]) for i in range(m + 1) if i < len(x) and m - i < len(y)]
    return plain(algebra, algebra.products(pairs, 99))


def close(found, wanted, limit=99):
    for k in found.keys() | wanted.keys():
        pair = wanted.get(k, (0, 0)) if abs(k) <= limit else (0, 0)
        assert found.get(k, (0, 0)) == pytest.approx(pair, rel=1e-9, abs=1e-9), k


def levels(algebra, kind, count, seed):
    """Levels of both parts; cosines and sines in turn; cosines alone; the even ones zero."""
    one = algebra.scalar(1)
    found = []
    for n in range(count):
        x = random_wave(algebra, seed + n, 1 + 2 * (n % 4))
        if kind != "both":
            # The part in cosines: powers of the unit wave.
            power = algebra.unit()
            for _ in range(n % 3):
                power = algebra.products(
                    [(one, algebra.products([(one, power, algebra.unit())], 99), algebra.unit())], 99
                )
            x = algebra.combination([(algebra.scalar(F(2 * n + seed + 1, n + 3)), power)], 99)
        if kind == "in turn" and n % 2:
            x = algebra.derivative(x)
        found.append(algebra.zero if kind == "gaps" and n % 2 == 0 else x)
    return found


KINDS = ["both", "in turn", "cosines", "gaps"]


@pytest.mark.parametrize("name", REPRESENTATIONS)
@pytest.mark.parametrize("kind", KINDS)
def test_runs(name, kind):
    """The product of two runs of levels, whole and cut, of waves and of their squares (which have a mean)."""
    algebra = waves(name)
    x, y = levels(algebra, kind, 5, 1), levels(algebra, kind, 3, 20)
    squares = [algebra.products([(algebra.scalar(1), w, w)], 99) for w in x]
    for a, b in ((x, y), (y, x), (x, x), (squares, y), (squares, squares), (x[:1], squares)):
        for limits in ([99] * (len(a) + len(b) - 1), [6, 0, 3, 1, 2], [0], [1, 9]):
            found = algebra.runs(a, b, limits)
            assert len(found) == len(limits)
            for m, (wave, limit) in enumerate(zip(found, limits, strict=True)):
                close(plain(algebra, wave), by_level(algebra, a, b, m), limit)


@pytest.mark.parametrize("name", REPRESENTATIONS)
@pytest.mark.parametrize("kind", KINDS)
@pytest.mark.parametrize("lag", [1, 2, 3])
def test_a_convolution_level_by_level(name, kind, lag):
    """Every pair of levels is counted once, however late the last `lag` levels are settled."""
    algebra = waves(name)
    count = 14
    x, y = levels(algebra, kind, count, 1), levels(algebra, kind, count, 40)
    wrong = random_wave(algebra, 90, 3)
    for first, second in ((x, y), (x, x)):
        a = []
        b = a if first is second else []
        growing = Convolution(algebra, a, b, lambda n: 5 if n % 3 else 99, count - 1, lag)
        for n in range(count):
            a.append(wrong)
            if b is not a:
                b.append(wrong)
            if n + 1 >= lag:
                # Settled only now.
                a[n + 1 - lag], b[n + 1 - lag] = first[n + 1 - lag], second[n + 1 - lag]
            growing.level(n)
            for i in range(max(0, n + 2 - lag), n + 1):
                a[i], b[i] = first[i], second[i]
            close(plain(algebra, growing.level(n)), by_level(algebra, first, second, n), 5 if n % 3 else 99)
            for i in range(max(0, n + 2 - lag), n + 1):
                a[i], b[i] = wrong, wrong
