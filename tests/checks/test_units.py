"""The checks do not depend on the units: micro-machines in SI, slow clocks, floats everywhere."""

from __future__ import annotations

import numpy as np
import pytest
import sympy as sp
from support.claims import examination_of, field_raised, flow_raised

import multiscale as ms
from multiscale.checks.stated import stated as as_stated

t = sp.Symbol("t", real=True)
eps, V, u_s, f, Om = sp.symbols("epsilon V u_s f Omega", positive=True)
sigma = sp.Symbol("sigma", real=True)
u = sp.Function("u")(t)
du, ddu = u.diff(t), u.diff(t, 2)

FORCED = 1e-11 * ddu + 1.1e-9 * eps * du + 10.0 * u + 1.3e13 * eps * u**3 - 1e-7 * eps * sp.cos(Om * t)
STATED = {
    "resonator of 1e-11 kg": ms.Problem(1e-11 * ddu + 10.0 * u + eps * (1.3e13 * u**3 + 1e-8 * du), u, small=eps),
    "the same by orders": ms.Problem(1e-11 * ddu + 10.0 * u + 1.3e13 * u**3, u, ordering={u: 1}),
    "driven": ms.Problem(FORCED, u, small=eps, resonances={Om: 1000000 + eps * sigma}),
    "a period of a week": ms.Problem(ddu + 1e-10 * u + eps * 1.1e-10 * u**3, u, small=eps),
    "large displacements": ms.Problem(ddu + 2.5 * u + eps * (1.3e-13 * u**3 + 0.1 * du), u, small=eps),
}


@pytest.mark.parametrize("order", [1, 2, 4])
@pytest.mark.parametrize("name", STATED)
def test_certificates_pass_in_any_units(name, order):
    assert ms.certify(ms.expand(STATED[name], order)).passed


@pytest.mark.parametrize("name", ["resonator of 1e-11 kg", "a period of a week", "large displacements"])
def test_peaks_pass_in_any_units(name):
    assert ms.certify(ms.with_amplitude(ms.expand(STATED[name], 2), "peak")).passed


@pytest.mark.parametrize("level", [1, 2])
@pytest.mark.parametrize("name", STATED)
def test_one_per_cent_shows_in_any_units(name, level):
    """Of a coefficient that counts at the amplitudes drawn, whatever they are."""
    result = ms.expand(STATED[name], 2)
    examination = examination_of(result)
    claim = examination.claim
    assert examination.stands(claim)
    flow, field = claim.flow[level - 1][0], claim.fields[level][0]
    if name == "the same by orders" and level == 1:
        assert flow == field == 0
        return
    changed = [flow_raised(claim, level, flow / 100)] if flow != 0 else []
    changed += [field_raised(claim, level, field / 100)] if field != 0 else []
    assert changed
    assert not any(examination.stands(x) for x in changed)


def chain(order: int) -> ms.Expansion:
    """Three degrees of freedom whose frequencies are roots of a cubic: coefficients are floats at every level."""
    M = sp.Matrix([[3, 1, sp.Rational(1, 2)], [1, 2, sp.Rational(1, 3)], [sp.Rational(1, 2), sp.Rational(1, 3), 1]])
    return ms.expand(
        ms.Problem.from_matrices(M, K=sp.diag(1, 2, 5), cubic={(0, 0, 0, 0): 1, (1, 1, 1, 1): 2}, orders={"cubic": 1}),
        order,
    )


@pytest.mark.filterwarnings("ignore::multiscale.SmallDivisorWarning")
@pytest.mark.parametrize(("order", "share"), [(1, 0.01), (2, 1.0)])
def test_modes_without_a_closed_form(order, share):
    """Sixteen digits shared by three powers of ε leave the second level less sharply seen."""
    result = chain(order)
    assert result.computation.representation == "complex"
    examination = examination_of(result)
    assert examination.stands(examination.claim)
    wrong = flow_raised(examination.claim, order, share * examination.claim.flow[order - 1][0])
    assert not examination.stands(wrong)


@pytest.mark.parametrize("square", [1e-10, 1.0, 1e10])
def test_integration_errors_do_not_depend_on_the_unit_of_time(square):
    pytest.importorskip("scipy.integrate")
    result = ms.expand(ms.Problem(ddu + square * u + eps * square * u**3, u, small=eps), 2)
    found = ms.compare(result, {}, {u: 1.0, du: 0.0}, [0.04, 0.02], square**-0.5)
    assert found.floors.max() < 4e-10
    np.testing.assert_allclose(found.errors, [2.15023e-5, 5.68652e-6], rtol=1e-4)


def test_a_plate_in_si_units():
    """Measured from rest at u_s: frequency against the second derivative of the energy, by floats alone."""
    load = 8.854e-12 * 1e-8 / 2
    equation = 1e-11 * ddu + 1.0 * u - load * V**2 / (2e-6 - u) ** 2
    problem = ms.Problem(equation, u, ordering={u: 1}, about={u: u_s})
    (pair,) = problem.resonances
    assert pair[0] == V**2
    rest, square = 2e-7, 2e-7 * (2e-6 - 2e-7) ** 2 / load
    assert float(pair[1].subs(u_s, rest)) == pytest.approx(square, rel=1e-12)
    stiffness = 1.0 - 2 * load * square / (2e-6 - rest) ** 3
    assert float(problem.natural_frequencies[0].subs(u_s, rest)) == pytest.approx((stiffness / 1e-11) ** 0.5, rel=1e-12)
    assert ms.certify(ms.expand(problem, 2)).passed


def test_whole_numbers_beyond_64_bits():
    """ω = sqrt of a large whole number, and such numbers as coefficients."""
    large = sp.Integer(10) ** 25 + 13
    result = ms.expand(ms.Problem(ddu + large * u + eps * large * u**3, u, small=eps), 1)
    start = ms.initial_state(result, {u: 1.0, du: 0.0}, {eps: 0.01})
    assert start == pytest.approx([1 - 0.01 / 32, 0.0], abs=1e-5)
    unit = ms.expand(ms.Problem(ddu + u + eps * u**3, u, small=eps), 1)
    wanted = ms.validity(unit, {eps: 0.1}, 0.01).amplitude
    assert ms.validity(result, {eps: 0.1}, 0.01).amplitude == pytest.approx(wanted, rel=1e-6)


SCALES = [(1e-3, 1e3), (1e-6, 1e3), (1e-5, 1e-9)]


def mixed(a: float, b: float) -> ms.Problem:
    """The chain with its second and third unknown, and their equations, in other units."""
    units = np.outer([1, a, b], [1, a, b])
    M = np.array([[3, 1, 0.5], [1, 2, 0.3], [0.5, 0.3, 1]]) * units
    cubic = {(0, 0, 0, 0): 1, (1, 1, 1, 1): 2 * a**4}
    return ms.Problem.from_matrices(M, K=np.diag([1, 2, 5]) * units, cubic=cubic, orders={"cubic": 1})


@pytest.mark.filterwarnings("ignore::multiscale.SmallDivisorWarning")
@pytest.mark.parametrize("units", SCALES)
def test_unknowns_in_different_units(units):
    """Frequencies, and the slow flow of the first mode, whose amplitude is in the unit of the first unknown."""
    plain, changed = (ms.expand(mixed(*x), 1) for x in ((1.0, 1.0), units))
    find = [[float(w) for w in x.problem.natural_frequencies] for x in (plain, changed)]
    assert find[1] == pytest.approx(find[0], rel=1e-12)
    state = np.array([0.7, 0.0, 0.0, 0.0, 0.0, 0.0])
    rates = [x.slow_flow.to_numpy()(0.0, state, 0.1)[1] for x in (plain, changed)]
    assert rates[0] != 0
    assert rates[1] == pytest.approx(rates[0], rel=1e-10)
    assert ms.certify(changed).passed


@pytest.mark.parametrize("units", SCALES)
def test_accelerations_in_different_units(units):
    """Coupled inertia, solved for by numbers."""
    scale = np.array([1.0, *units])
    start, found = np.array([0.3, 0.1, 0.3]), []
    for x in (np.ones(3), scale):
        rhs = as_stated(mixed(*x[1:])).rhs({"epsilon": 0.1})
        found.append(np.array(rhs(0.0, np.concatenate([start / x, np.zeros(3)]))[3:]) * x)
    np.testing.assert_allclose(found[1], found[0], rtol=1e-12)


def test_inertia_that_is_nearly_singular():
    """Newton's method for accelerations ends where rounding does: M with a condition number of 1e8."""
    w = sp.Function("w")(t)
    v = sp.Function("v")(t)
    near = 1 - sp.Rational(1, 10**8)
    rows = (
        ddu + near * v.diff(t, 2) + u,
        near * ddu + v.diff(t, 2) + v,
        w.diff(t, 2) + 2 * w + eps * w.diff(t, 2) ** 3,
    )
    problem = ms.Problem(rows, (u, v, w), small=eps)
    found = as_stated(problem).rhs({"epsilon": 0.01})(0.0, np.array([1e-8, -1e-8, 0.3, 0.0, 0.0, 0.0]))
    assert np.isfinite(found).all()
    values = dict(zip((u, v, w), (1e-8, -1e-8, 0.3), strict=True))
    place = {x.diff(t, 2): a for x, a in zip((u, v, w), found[3:], strict=True)}
    assert [abs(float(x.subs(place).subs(values).subs(eps, 0.01))) < 1e-9 for x in rows] == [True] * 3
