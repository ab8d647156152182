"""Properties on seeded random systems: the residual is of the order promised, and every perturbation is seen."""

from __future__ import annotations

import warnings
from fractions import Fraction

import pytest
import sympy as sp
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st
from support.claims import examination_of, field_raised, flow_raised

import multiscale as ms
from multiscale.algebra.quotient import finish

t = sp.Symbol("t", real=True)
eps = sp.Symbol("epsilon", positive=True)
OMEGA = sp.symbols("omega_1:4", positive=True)
UNKNOWNS = [sp.Function(f"u{k}")(t) for k in (1, 2, 3)]
FREQUENCIES = {
    "distinct symbols": OMEGA,
    "one to one": (OMEGA[0], OMEGA[0], OMEGA[1]),
    "one to two to three": (sp.Integer(1), sp.Integer(2), sp.Integer(3)),
    "irrational": (sp.sqrt(2), 2 * sp.sqrt(2), sp.sqrt(3)),
}
FIXED = settings(derandomize=True, deadline=None, max_examples=6, suppress_health_check=[HealthCheck.too_slow])

coefficients = st.builds(lambda n, d: sp.Rational(n, d), st.integers(-5, 5).filter(bool), st.integers(1, 4))


@st.composite
def systems(draw, size, degrees, terms):
    """(equations, unknowns): oscillators with random polynomial forces of order ε and ε²."""
    kind = draw(st.sampled_from(sorted(FREQUENCIES)))
    unknowns = UNKNOWNS[:size]
    equations = []
    for u, w in zip(unknowns, FREQUENCIES[kind], strict=False):
        force = sp.Integer(0)
        for _ in range(draw(st.integers(1, terms))):
            factors = []
            for _ in range(draw(st.integers(*degrees))):
                v = draw(st.sampled_from(unknowns))
                factors.append(v.diff(t, d) if (d := draw(st.sampled_from((0, 0, 0, 1, 2)))) else v)
            force += eps ** draw(st.integers(1, 2)) * draw(coefficients) * sp.Mul(*factors)
        equations.append(u.diff(t, 2) + w**2 * u + force)
    return equations, unknowns


def expanded(system, order, **options):
    """The expansion; forces may cancel, in which case ε is put back into the equations by a term of order ε²."""
    equations, unknowns = system
    if not any(eps in x.free_symbols for x in equations):
        equations = [equations[0] + eps**2 * unknowns[0] ** 3, *equations[1:]]
    with warnings.catch_warnings():
        warnings.simplefilter("ignore", ms.OrderingWarning)
        return ms.expand(ms.Problem(equations, unknowns, small=eps), order, **options)


CASES = [(1, (1, 5), 3, 4), (2, (1, 3), 2, 3), (2, (2, 2), 2, 4), (3, (2, 3), 1, 3)]


@pytest.mark.parametrize(("size", "degrees", "terms", "order"), CASES)
def test_residual_has_the_order_promised(size, degrees, terms, order):
    @FIXED
    @given(systems(size, degrees, terms))
    def check(system):
        certificate = ms.certify(expanded(system, order))
        certificate.require()
        assert min(certificate.exponents) > order + 1 - 0.01

    check()


@pytest.mark.parametrize("level", [1, 2, 3])
def test_a_perturbed_slow_flow_is_seen(level):
    @FIXED
    @given(systems(1, (1, 4), 3))
    def check(system):
        examination = examination_of(expanded(system, 3))
        change = examination.claim.amplitudes[0] * sp.Rational(1, 1000)
        assert examination.exponents(flow_raised(examination.claim, level, change))[0] < level + 0.01

    check()


@pytest.mark.parametrize("level", [1, 2, 3])
def test_a_perturbed_field_is_seen(level):
    @FIXED
    @given(systems(2, (1, 3), 2))
    def check(system):
        examination = examination_of(expanded(system, 3))
        A = examination.claim.amplitudes[1]
        change = A * sp.conjugate(A) * sp.Rational(1, 1000)
        assert min(examination.exponents(field_raised(examination.claim, level, change))) < level + 0.01

    check()


@pytest.mark.parametrize(("size", "degrees", "terms", "order"), CASES)
def test_representations_agree(size, degrees, terms, order):
    pytest.importorskip("flint")

    @FIXED
    @given(systems(size, degrees, terms))
    def check(system):
        one, other = (expanded(system, order - (size > 2), representation=r) for r in ("sympy", "flint"))
        assert one == other
        assert str(one.slow_flow.polar) == str(other.slow_flow.polar)
        assert one.slow_flow.to_numpy().source == other.slow_flow.to_numpy().source

    check()


@pytest.mark.parametrize(("size", "degrees", "terms", "order"), CASES[:2])
def test_fields_are_real_and_derivations_obey_their_laws(size, degrees, terms, order):
    @FIXED
    @given(systems(size, degrees, terms))
    def check(system):
        tower = expanded(system, order).computation.hierarchy.tower
        ring = tower.ring
        x, y = tower.jets[0][1][0], tower.jets[1][0][-1]
        fast = tower.time[0]
        for levels in tower.jets:
            for field in levels:
                assert not any(ring.normal(u - ring.conjugate(u)) for u in field)
        for slow in tower.time[1:]:
            assert not ring.normal(slow(ring, x * y) - slow(ring, x) * y - x * slow(ring, y))
            assert not ring.normal(slow(ring, ring.conjugate(x)) - ring.conjugate(slow(ring, x)))
            assert not ring.normal(fast(ring, slow(ring, x)) - slow(ring, fast(ring, x)))

    check()


@st.composite
def potentials(draw, size):
    unknowns = UNKNOWNS[:size]
    potential = sp.Integer(0)
    for _ in range(draw(st.integers(1, 3))):
        factors = [draw(st.sampled_from(unknowns)) for _ in range(draw(st.integers(3, 4)))]
        potential += draw(coefficients) * sp.Mul(*factors)
    return draw(st.sampled_from(sorted(FREQUENCIES))), potential


@pytest.mark.parametrize(("size", "order"), [(1, 4), (2, 3), (3, 2)])
def test_energy_is_conserved_to_the_retained_order(size, order):
    """Σ_k D_k H_{n-k} = 0 for n ≤ N, exactly, for H = Σ ½(u'² + ω²u²) + εV (method: the energy of a reconstruction)."""

    @FIXED
    @given(potentials(size))
    def check(case):
        kind, potential = case
        unknowns = UNKNOWNS[:size]
        frequencies = FREQUENCIES[kind][:size]
        equations = [
            u.diff(t, 2) + w**2 * u + eps * potential.diff(u) for u, w in zip(unknowns, frequencies, strict=True)
        ]
        if not any(potential.diff(u) for u in unknowns):
            return
        result = expanded((equations, unknowns), order)
        assert all(not x for x in energy_rates(result, potential))

    check()


def energy_rates(result, potential):
    """[εⁿ] dH/dt for n ≤ N, from the tower: products of jets and the table of derivations."""
    computation = result.computation
    tower, linear = computation.hierarchy.tower, computation.hierarchy.linear_part
    ring, order = tower.ring, result.order
    half = ring.constant(Fraction(1, 2))

    def energy(n):
        total = ring.zero
        for k, mode in enumerate(linear.modes):
            square = linear.value(mode.rate) * linear.value(mode.rate)
            total = total + half * (tower.product(((k, 1),) * 2, n) + square * tower.product(((k, 0),) * 2, n))
        for monomial, c in sp.Poly(potential, *result.problem.unknowns).terms() if n else ():
            factors = tuple((k, 0) for k, e in enumerate(monomial) for _ in range(e))
            total = total + ring.constant(Fraction(int(c.p), int(c.q))) * tower.product(factors, n - 1)
        return ring.normal(total)

    H = [energy(n) for n in range(order + 1)]
    for n in range(order + 1):
        change = ring.zero
        for k in range(n + 1):
            change = change + tower.time[k](ring, H[n - k])
        # A reciprocal of several terms is no normal form, so zero is decided after reduction.
        yield finish(ring, change)


def test_energy_check_sees_a_wrong_potential():
    u = UNKNOWNS[0]
    result = expanded(([u.diff(t, 2) + u + eps * u**3], [u]), 2)
    assert any(energy_rates(result, u**4 / 5))
