"""The comparisons that the published values rest on can say no."""

from __future__ import annotations

from fractions import Fraction as F

import mpmath
import pytest
import sympy as sp

from .lindstedt import periodic_orbit
from .rational_series import compose, in_terms_of, reverse, root, taylor
from .rows import difference

x = sp.Symbol("x")


@pytest.mark.parametrize(
    ("got", "wanted", "left"),
    [
        (x**2 - 1, (x - 1) * (x + 1), 0),
        ((x, F(3, 8)), (x, sp.Rational(3, 8)), 0),
        (x, x + sp.Rational(1, 10**30), 1),
        ((x, 2 * x), (x, 3 * x), 1),
    ],
)
def test_difference(got, wanted, left: int):
    assert len(difference(got, wanted)) == left


@pytest.mark.parametrize(("got", "wanted"), [((x,), (x, x)), ((x, x), (x,))])
def test_difference_refuses_unequal_lengths(got, wanted):
    with pytest.raises(ValueError, match="zip"):
        difference(got, wanted)


def test_difference_refuses_floats():
    with pytest.raises(AssertionError):
        difference(x + 0.375, x + sp.Rational(1, 4))


def test_taylor_recognises_rationals():
    assert taylor(lambda s: 1 / mpmath.sqrt(1 - s / 3), 4) == [F(1), F(1, 6), F(1, 24), F(5, 432)]


def test_taylor_refuses_what_is_not_rational():
    with pytest.raises(AssertionError, match="not recognised"):
        taylor(lambda s: mpmath.exp(mpmath.pi * s), 3)


def test_reversion():
    series = [F(0), F(2), F(-1, 3), F(5), F(1, 7)]
    assert compose(series, reverse(series)) == [0, 1, 0, 0, 0]
    assert in_terms_of(series, series) == [0, 1, 0, 0, 0]


def test_root_of_a_quadratic():
    """x² − 4 − ε = 0 near 2: 2√(1 + ε/4)."""
    assert root({(2, 0): F(1), (0, 0): F(-4), (0, 1): F(-1)}, 2, 4) == [F(2), F(1, 4), F(-1, 64), F(1, 512)]


def test_lindstedt_refuses_damping_at_a_prescribed_amplitude():
    with pytest.raises(AssertionError, match="no periodic orbit"):
        periodic_orbit({(1, 0, 1, 0): F(1)}, 1)
