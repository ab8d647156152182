"""Finished coefficients are reduced fractions: equal values give equal objects."""

from __future__ import annotations

from fractions import Fraction
from importlib.util import find_spec

import pytest

from multiscale.algebra.choice import make_ring
from multiscale.algebra.polynomial import freeze
from multiscale.algebra.quotient import finish, reduced
from multiscale.algebra.ring import RingSpec

W1, W2 = (("w1", 1),), (("w2", 1),)
LOW = freeze({W1: Fraction(2), W2: Fraction(-1)})
HIGH = freeze({W1: Fraction(2), W2: Fraction(1)})
SPEC = RingSpec(
    pairs=(("z", "z~"),),
    reals=("w1", "w2"),
    reciprocals=(("1/w1", freeze({W1: Fraction(1)})), ("1/low", LOW), ("1/high", HIGH)),
)
REPRESENTATIONS = [
    "sympy",
    pytest.param("flint", marks=pytest.mark.skipif(not find_spec("flint"), reason="no python-flint")),
]


@pytest.fixture(params=REPRESENTATIONS)
def ring(request):
    return make_ring(SPEC, request.param)


def monomial(**powers):
    names = {"i": "@i", "z": "z", "zc": "z~", "w1": "w1", "w2": "w2", "v": "1/w1", "low": "1/low", "high": "1/high"}
    return tuple(sorted((names[k], e) for k, e in powers.items()))


def test_partial_fractions_meet(ring):
    """1/(w_1 l) + 1/(w_1 m) = 4/(l m) for l = 2w_1 − w_2, m = 2w_1 + w_2."""
    left = ring.read({monomial(v=1, low=1): Fraction(1), monomial(v=1, high=1): Fraction(1)})
    right = ring.read({monomial(low=1, high=1): Fraction(4)})
    assert left != right
    assert reduced(ring, left) == reduced(ring, right)


def test_a_hidden_zero_is_zero(ring):
    x = ring.read({monomial(low=1, w1=1): Fraction(2), monomial(low=1, w2=1): Fraction(-1), (): Fraction(-1)})
    assert x
    assert not reduced(ring, x)


def test_real_and_imaginary_parts_are_apart(ring):
    x = ring.read({monomial(i=1, z=2, zc=1, v=1): Fraction(3, 2), monomial(z=2, zc=1): Fraction(-1)})
    ((exponents, c),) = finish(ring, x).items()
    assert exponents == (2, 1)
    assert c.real.numerator == (((), Fraction(-1)),)
    assert c.imag.denominator == ((freeze({W1: Fraction(1)}), 1),)
