"""The law of linear parts: L_0(ir) solve + Σ L_0'(ir) φ_a project + part = 0, for every implementation."""

from __future__ import annotations

from fractions import Fraction

import pytest
import sympy as sp

import multiscale as ms
from multiscale.algebra.choice import make_ring
from multiscale.algebra.quotient import finish
from multiscale.algebra.reciprocals import missing
from multiscale.algebra.ring import RingSpec
from multiscale.computed import begin
from multiscale.linear_part.dense import Dense
from multiscale.linear_part.general import General
from multiscale.linear_part.oscillators import Oscillators

BASES = [{(("w1", 1),): Fraction(1)}, {(("w2", 1),): Fraction(1)}]
OSCILLATORS = {
    "distinct": [(1, 0), (0, 1)],
    "one to one": [(1, 0), (1, 0)],
    "one to three": [(1, 0), (3, 0)],
    "sum": [(1, 0), (1, 1)],
}

t = sp.Symbol("t", real=True)
eps, k, c, g = sp.symbols("epsilon k c g", positive=True)
x, y, z = (sp.Function(name)(t) for name in "xyz")
WEAK = eps * x**2
COUPLED = {
    "two masses": ([2 * x.diff(t, 2) + 3 * x - y + WEAK, y.diff(t, 2) + 2 * y - x], [x, y]),
    "symbolic masses": ([x.diff(t, 2) + k * x - c * y + WEAK, y.diff(t, 2) + g * y - c * x], [x, y]),
    "coupled inertia": ([x.diff(t, 2) + y.diff(t, 2) / 3 + x + WEAK, y.diff(t, 2) + x.diff(t, 2) / 3 + 2 * y], [x, y]),
    "rotor": ([x.diff(t, 2) - g * y.diff(t) + k * x + WEAK, y.diff(t, 2) + g * x.diff(t) + k * y], [x, y]),
    "thermal state": ([x.diff(t, 2) + x + y + WEAK, y.diff(t) + 2 * y], [x, y]),
    "first order": ([x.diff(t) - x - y + WEAK, y.diff(t) + 2 * x + y], [x, y]),
    "degenerate pair": ([x.diff(t, 2) + k * x + y + WEAK, y.diff(t, 2) + 3 * y, z.diff(t, 2) + k * z], [x, y, z]),
    "decaying mode": (
        [x.diff(t, 2) + x + g * y + WEAK, y.diff(t, 2) + c * y.diff(t) + 3 * y, z.diff(t) + z - x],
        [x, y, z],
    ),
    "no closed form": (
        [x.diff(t, 2) + 3 * x - y + WEAK, y.diff(t, 2) + 2 * y - x - z / 3, z.diff(t, 2) + 4 * z - y],
        [x, y, z],
    ),
}
SIZES = [(1, 0), (2, 0), (3, 0), (1, 1), (0, 0), (2, -1), (1, 2)]


def oscillators(case, rate):
    spec = RingSpec(pairs=(("z", "z~"), ("y", "y~")), reals=("c", "w1", "w2"))
    return Oscillators(OSCILLATORS[case], BASES, 1, make_ring(spec, "sympy")), make_ring(spec, "sympy"), rate


def coupled(case, counts):
    """The linear part of a problem, and the rate that `counts` gives in multiples of its first and last mode."""
    computation = begin(ms.Problem(*COUPLED[case], small=eps).canonical(1), "auto")
    linear = computation.hierarchy.linear_part
    first, last = linear.modes[0].rate, linear.modes[-1].rate
    rate = tuple(counts[0] * a + counts[1] * b for a, b in zip(first, last, strict=True))
    return linear, computation.hierarchy.tower.ring, rate


CASES = [(oscillators, name) for name in OSCILLATORS] + [(coupled, name) for name in COUPLED]


def prepared(build, case, counts):
    linear, ring, rate = build(case, counts)
    ring = ring.extended(missing(ring, linear.divisors([(n, rate) for n in range(linear.size)])))
    return linear.in_ring(ring), ring, rate


def forcing(linear, ring):
    first = ring.spec.first_pair
    z, zbar, i = ring.generators[first], ring.generators[first + 1], ring.generators[0]
    return {
        n: z * z * ring.constant(n + 2) + z * zbar * i + ring.constant(Fraction(1, n + 1)) for n in range(linear.size)
    }


def nothing(ring, element):
    left = finish(ring, element)
    if ring.representation != "complex":
        return not left
    parts = [c for pair in left.values() for q in (pair.real, pair.imag) for _, c in q.numerator]
    return all(abs(c) < 1e-12 for c in parts)


@pytest.mark.parametrize(("build", "case"), CASES, ids=[name for _, name in CASES])
@pytest.mark.parametrize("counts", SIZES, ids=str)
def test_solve_and_project_leave_nothing(build, case, counts):
    linear, ring, rate = prepared(build, case, counts)
    part = forcing(linear, ring)
    changes = linear.project(part, rate)
    assert set(changes) == set(linear.modes_at(rate))
    acted, bracket = linear.act(linear.solve(part, rate), rate), linear.bracket(changes)
    for n, x in part.items():
        assert nothing(ring, x + acted.get(n, ring.zero) + bracket.get(n, ring.zero))


@pytest.mark.parametrize(("build", "case"), CASES, ids=[name for _, name in CASES])
def test_shapes_span_the_kernel(build, case):
    linear, ring, _ = prepared(build, case, (1, 0))
    for mode in linear.modes:
        shape = {n: ring.read(dict(p)) for n, p in enumerate(mode.shape)}
        assert all(nothing(ring, x) for x in linear.act(shape, mode.rate).values())


@pytest.mark.parametrize("case", COUPLED)
def test_the_convention_leaves_nothing_in_the_references(case):
    linear, ring, rate = prepared(coupled, case, (1, 0))
    solved = linear.solve(forcing(linear, ring), rate)
    references = [root.references[n] for root, n in linear.operator.carried if root.rate == rate]
    assert references
    assert not any(solved.get(u) for u in references)
    for a, u in zip(linear.modes_at(rate), references, strict=True):
        own = {b: ring.read(dict(linear.modes[b].shape[u])) for b in linear.modes_at(rate)}
        assert nothing(ring, own.pop(a) - ring.one)
        assert not any(own.values())


def test_every_implementation_is_met():
    parts = {type(coupled(case, (1, 0))[0]) for case in COUPLED} | {type(oscillators("distinct", (1, 0))[0])}
    assert parts == {Oscillators, General, Dense}


def test_oscillators_keep_their_own_displacement():
    ring = make_ring(RingSpec(pairs=(("z", "z~"),), reals=("w1",)), "sympy")
    linear = Oscillators([(1,)], BASES[:1], 1, ring)
    assert linear.solve({0: ring.one}, (1,)) == {}
