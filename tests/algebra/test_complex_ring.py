"""The floating-point ring obeys the laws of rings to rounding."""

from __future__ import annotations

import random
from fractions import Fraction

import pytest
import sympy as sp

from multiscale.algebra.complex_ring import ComplexRing, MpmathRing
from multiscale.algebra.polynomial import freeze
from multiscale.algebra.quotient import finish
from multiscale.algebra.ring import RingSpec
from multiscale.errors import MultiscaleError

SPEC = RingSpec(
    pairs=(("z", "z~"), ("e", "e~")),
    units=frozenset({"e"}),
    reals=("a", "w"),
    roots=(("sqrt(2)", freeze({(): Fraction(2)})),),
    reciprocals=(("1/a", freeze({(("a", 1),): Fraction(1)})),),
)
VALUES = {"sqrt(2)": sp.sqrt(2), "w": sp.Rational(7, 10)}
RING = ComplexRing(SPEC, VALUES)
MANY = MpmathRing(SPEC, VALUES)


def element(seed: int):
    numbers = random.Random(seed)
    names = [n for n in SPEC.names if n != "@i"]
    polynomial = {}
    for _ in range(4):
        powers = {n: numbers.randint(1, 2) for n in numbers.sample(names, 2)}
        polynomial[tuple(sorted(powers.items()))] = Fraction(numbers.randint(-9, 9), 4) or Fraction(1)
    return RING.normal(RING.read(polynomial) * (RING.one + RING.generators[0] * RING.constant(Fraction(1, 3))))


def close(x, y) -> bool:
    return all(abs(c) < 1e-12 for _, c in RING.terms(x - y))


@pytest.mark.parametrize("seed", range(5))
def test_laws(seed):
    x, y, u = element(seed), element(seed + 100), element(seed + 200)
    assert close(RING.normal(x * (y + u)), RING.normal(x * y + x * u))
    assert close(RING.conjugate(RING.conjugate(x)), x)
    assert close(RING.conjugate(RING.normal(x * y)), RING.normal(RING.conjugate(x) * RING.conjugate(y)))
    g = SPEC.index["z"]
    assert close(RING.diff(x * y, g), RING.diff(x, g) * y + x * RING.diff(y, g))


def test_numbers_are_read_as_numbers():
    root, w, i = RING.generators[1], RING.read({(("w", 2),): Fraction(1)}), RING.generators[0]
    assert RING.rational(RING.normal(root * root)) == pytest.approx(2)
    assert RING.rational(w) == pytest.approx(0.49)
    assert RING.rational(RING.normal(i * i)) == -1
    assert RING.rational(RING.generators[SPEC.index["a"]]) is None
    e, e_bar, a, h = (RING.generators[SPEC.index[n]] for n in ("e", "e~", "a", "1/a"))
    assert close(RING.normal(e * e_bar), RING.one)
    assert close(RING.normal(a * h), RING.one)


def test_rounding_is_no_term():
    x = RING.generators[SPEC.index["z"]]
    third = RING.constant(Fraction(1, 3))
    left = x * third + x * third + x * third - x + RING.generators[SPEC.index["a"]]
    assert len(RING.normal(left + x * RING.constant(Fraction(1, 10**17)))) == 1
    assert finish(RING, RING.normal(RING.generators[0] * x))[1, 0, 0, 0].real.numerator == ()


def test_division_by_symbols_is_refused():
    assert RING.quotient(RING.one, RING.one) is None
    with pytest.raises(MultiscaleError, match="give numbers"):
        RING.factor(RING.one)


def test_many_digits():
    root = MANY.generators[1]
    assert abs(MANY.rational(root * root) - 2) < 1e-50
    third = MANY.rational(MANY.constant(Fraction(1, 3)))
    assert abs(3 * third - 1) < 1e-50
    (_, c), *_ = MANY.terms(MANY.constant(Fraction(1, 3)))
    assert abs(c - sp.Rational(1, 3)) < sp.Float(10, 20) ** -49
    inverse = MANY.inverted([[third, third], [third * 0, 2 * third]])
    assert abs(inverse[0][0] * third - 1) < 1e-50
