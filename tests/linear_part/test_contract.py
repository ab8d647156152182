"""The law of linear parts: L_0(ir) solve + Σ L_0'(ir) φ_a project + part = 0, for every implementation."""

from __future__ import annotations

from fractions import Fraction

import pytest

from multiscale.algebra.choice import make_ring
from multiscale.algebra.quotient import finish
from multiscale.algebra.reciprocals import missing
from multiscale.algebra.ring import RingSpec
from multiscale.linear_part.oscillators import Oscillators

BASES = [{(("w1", 1),): Fraction(1)}, {(("w2", 1),): Fraction(1)}]
CASES = {
    "distinct": [(1, 0), (0, 1)],
    "one to one": [(1, 0), (1, 0)],
    "one to three": [(1, 0), (3, 0)],
    "sum": [(1, 0), (1, 1)],
}
RATES = [(1, 0), (0, 1), (3, 0), (1, 1), (0, 0), (2, -1), (1, 2)]


@pytest.mark.parametrize("case", CASES)
@pytest.mark.parametrize("rate", RATES, ids=str)
def test_solve_and_project_leave_nothing(case, rate):
    spec = RingSpec(pairs=(("z", "z~"), ("y", "y~")), reals=("c", "w1", "w2"))
    ring = make_ring(spec, "sympy")
    linear = Oscillators(CASES[case], BASES, 1, ring)
    ring = ring.extended(missing(ring, linear.divisors([(0, rate), (1, rate)])))
    linear = linear.in_ring(ring)
    z, y, c = (ring.generators[spec.index[name]] for name in ("z", "y", "c"))
    part = {0: z * z * c, 1: y * ring.generators[0] + z}
    changes = linear.project(part, rate)
    assert set(changes) == set(linear.modes_at(rate))
    acted, bracket = linear.act(linear.solve(part, rate), rate), linear.bracket(changes)
    for k, forcing in part.items():
        assert not finish(ring, forcing + acted.get(k, ring.zero) + bracket.get(k, ring.zero))


def test_the_convention_leaves_no_kernel_part():
    ring = make_ring(RingSpec(pairs=(("z", "z~"),), reals=("w1",)), "sympy")
    linear = Oscillators([(1,)], BASES[:1], 1, ring)
    assert linear.solve({0: ring.one}, (1,)) == {}
