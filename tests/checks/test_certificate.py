"""Certificates of expansions of every kind, and what makes one fail."""

from __future__ import annotations

import math
import warnings
from dataclasses import replace

import pytest
import sympy as sp
from support.claims import examination_of, field_raised, flow_raised

import multiscale as ms
from multiscale.checks.certificate import certificate_of
from multiscale.checks.residual.claim import claim_of
from multiscale.checks.residual.examination import Examination
from multiscale.checks.residual.statement import stated

t = sp.Symbol("t", real=True)
names = "epsilon mu alpha beta f h sigma delta phi omega omega_1 omega_2 Omega Omega_1 Omega_2 m k"
eps, mu, alpha, beta, f, h, sigma, delta, phi, w, w1, w2, Om, Om1, Om2, m, k = sp.symbols(names, positive=True)
u, v, x = (sp.Function(name)(t) for name in "uvx")
F = sp.Function("F", positive=True)(eps * t)
plain = u.diff(t, 2) + w**2 * u
cubic = plain + eps * (2 * mu * u.diff(t) + alpha * u**3)
quadratic = (
    u.diff(t, 2) + w1**2 * u + eps * alpha * u * v,
    v.diff(t, 2) + w2**2 * v + eps * (beta * u**2 + mu * v.diff(t)),
)
in_numbers = (u.diff(t, 2) + u + eps * u * v, v.diff(t, 2) + sp.Rational(101, 25) * v + eps * u**2)


def small(equations, unknowns=u, resonances=()):
    return lambda: ms.Problem(equations, unknowns, small=eps, resonances=resonances)


def ordered(equations, ordering, unknowns=u, resonances=()):
    return lambda: ms.Problem(equations, unknowns, ordering=ordering, resonances=resonances)


SYSTEMS = {
    "self-excited": small(plain + eps * (u**2 - 1) * u.diff(t)),
    "quadratic and cubic": small(plain + eps * alpha * u**2 + eps**2 * beta * u**3),
    "cubic damping": small(plain + eps * mu * u.diff(t) ** 3),
    "nonlinear inertia": small((1 + eps * alpha * u**2) * u.diff(t, 2) + eps * alpha * u * u.diff(t) ** 2 + w**2 * u),
    "mass and stiffness": small(m * u.diff(t, 2) + k * u + eps * alpha * u**3),
    "irrational ratio": small(
        (u.diff(t, 2) + 2 * u + eps * v**2 * u, v.diff(t, 2) + (3 - 2 * sp.sqrt(2)) * v + eps * u**3), (u, v)
    ),
    "one to one": small(
        (plain + eps * alpha * v**3, v.diff(t, 2) + w**2 * v + eps * (beta * u**2 * v + mu * u)), (u, v)
    ),
    "parameters of any sign": small(
        u.diff(t, 2) + sp.Symbol("k", real=True) * u + eps * sp.Symbol("c", negative=True) * u**3
    ),
    "primary": small(cubic - eps * f * sp.cos(Om * t + phi), u, {Om: w + eps * sigma}),
    "primary, by the square": small(cubic - eps * f * sp.cos(Om * t), u, {Om**2: w**2 + eps * delta}),
    "superharmonic": small(cubic - f * sp.cos(Om * t), u, {3 * Om: w + eps * sigma}),
    "square of a drive": small(cubic - eps * f * sp.cos(Om * t) ** 2, u, {Om: w / 2 + eps * sigma}),
    "beats": small(
        cubic - eps * (f * sp.cos(Om1 * t) + h * sp.sin(Om2 * t)), u, {Om1: w + eps * sigma, Om2: w + eps * delta}
    ),
    "parametric": small(cubic + eps * h * u * sp.cos(Om * t), u, {Om: 2 * w + eps * sigma}),
    "constant force": small(cubic + eps * beta * u**2 - f),
    "one to two": small(quadratic, (u, v), {w2: 2 * w1 + eps * sigma}),
    "one to two, in the other order": small(quadratic[::-1], (u, v), {w2: 2 * w1 + eps * sigma}),
    "one to two, by the unknown": small(quadratic, (u, v), {v: 2 * w1 + eps * sigma}),
    "one to two in numbers, by the unknown": small(in_numbers, (u, v), {v: 2 + eps * sigma}),
    "three modes": small(
        (
            u.diff(t, 2) + w1**2 * u + eps * alpha * v * x,
            v.diff(t, 2) + w2**2 * v + eps * beta * u * x,
            x.diff(t, 2) + w**2 * x + eps * h * u * v,
        ),
        (u, v, x),
        {w: w1 + w2 + eps * sigma},
    ),
    "slow frequency": small(u.diff(t, 2) + (1 + eps * t) * u + eps * alpha * u**3),
    "slow function left undefined": small(plain + eps * (F * u**3 + mu * u.diff(t))),
    "slow frequency left undefined": small(u.diff(t, 2) + F**2 * u + eps * u**3),
    "chirp": small(cubic - eps * f * sp.cos(Om * t + eps**2 * h * t**2 / 2), u, {Om: w + eps * sigma}),
    "orders": ordered(plain + 2 * mu * u.diff(t) + alpha * u**3, {u: 1, mu: 2}),
    "orders with a drive": ordered(
        plain + 2 * mu * u.diff(t) + beta * u**2 + alpha * u**3 - f * sp.cos(Om * t),
        {u: 1, mu: 2, f: 3, sigma: 2},
        u,
        {Om: w + sigma},
    ),
    "unequal orders": ordered(
        (u.diff(t, 2) + w1**2 * u + alpha * u * v, v.diff(t, 2) + w2**2 * v + beta * u**3), {u: 1, v: 2}, (u, v)
    ),
}
# Those whose higher levels take long to write out.
HEAVY = {"superharmonic", "three modes", "irrational ratio", "one to one"}


def expanded(name, order):
    with warnings.catch_warnings():
        warnings.simplefilter("ignore", ms.OrderingWarning)
        warnings.simplefilter("ignore", ms.SmallDivisorWarning)
        return ms.expand(SYSTEMS[name](), order)


CASES = [
    pytest.param(name, order, marks=pytest.mark.slow if order == 4 else ())
    for name in SYSTEMS
    for order in ((1, 2) if name in HEAVY else (1, 2, 3, 4))
]


@pytest.mark.parametrize(("name", "order"), CASES)
def test_certificates_pass(name, order):
    certificate = ms.certify(expanded(name, order))
    certificate.require()
    assert certificate.passed
    assert min(certificate.exponents) >= order + 1 - 1e-6
    assert len(certificate.points) == 2
    assert certificate.digits > 20 * (order + 1)


@pytest.mark.parametrize("seed", range(4))
def test_any_seed_will_do(seed):
    assert ms.certify(expanded("primary", 2), seed=seed).passed


def test_one_seed_gives_one_certificate():
    result = expanded("one to two", 1)
    assert ms.certify(result, seed=3) == ms.certify(result, seed=3)
    assert ms.certify(result, seed=3).points != ms.certify(result, seed=4).points


def test_points_keep_assumptions_and_time_is_among_them():
    result = ms.expand(SYSTEMS["parameters of any sign"](), 1)
    for seed in range(3):
        for point in ms.certify(result, seed=seed).points:
            assert point[sp.Symbol("c", negative=True)] < 0
            # Of either sign by its assumption, but the oscillator needs it positive.
            assert point[sp.Symbol("k", real=True)] > 0
            assert point[t] > 0
            assert result.symbols.A[0] in point


@pytest.mark.parametrize("name", ["self-excited", "primary", "one to two", "superharmonic", "slow frequency"])
def test_the_claim_is_what_the_levels_show(name):
    result = expanded(name, 2)
    claim = claim_of(result)
    for n, level in enumerate(claim.fields):
        for unknown, value in zip(result.problem.unknowns, level, strict=True):
            assert value.subs(t, result.symbols.T[0]) == result.levels[n].corrections[unknown]
    for n, level in enumerate(claim.flow, start=1):
        assert list(level) == list(result.slow_flow.by_scale[n].values())


@pytest.mark.parametrize("seed", range(3))
def test_symbols_need_no_assumptions(seed):
    """Eight symbols, of which four must come out positive."""
    time, small = sp.symbols("t epsilon")
    a, b, c, d, *forces = sp.symbols("a b c d e f g h")
    unknowns = [sp.Function(name)(time) for name in "xyzw"]
    equations = [
        x.diff(time, 2) + s**2 * x + small * force * unknowns[k - 1] ** 2 * x
        for k, (x, s, force) in enumerate(zip(unknowns, (a, b, c, d), forces, strict=True))
    ]
    result = ms.expand(ms.Problem(equations, unknowns, small=small), 1)
    ms.certify(result, seed=seed).require()


def test_an_exact_result_is_called_exact():
    result = ms.expand(ms.Problem(plain - eps * f * sp.cos(Om * t), u, small=eps), 2)
    certificate = ms.certify(result)
    assert certificate.exponents == (math.inf,)
    assert certificate.passed
    assert "exact" in repr(certificate)


@pytest.mark.parametrize("level", [1, 2, 3])
@pytest.mark.parametrize("name", ["self-excited", "primary", "one to two", "slow frequency", "orders with a drive"])
def test_a_wrong_slow_flow_shows_its_level(name, level):
    result = expanded(name, 3)
    examination = examination_of(result)
    claim, A = examination.claim, examination.claim.amplitudes[0]
    wrong = flow_raised(claim, level, sp.I * A**2 * sp.conjugate(A) / 1000)
    certificate = certificate_of(examination, wrong, result.problem.equations)
    assert certificate.exponents[0] == pytest.approx(level, abs=0.01)
    assert not certificate.passed
    assert certificate.convention
    with pytest.raises(
        ms.EvaluationError, match=rf"power {level} of the small parameter, expected a whole power of at least 4"
    ):
        certificate.require()


def test_the_result_of_another_problem_fails():
    one, other = (ms.Problem(plain + eps * (mu * u.diff(t) + c * u**3), u, small=eps) for c in (1, 2))
    result = replace(ms.expand(one, 2), problem=other)
    certificate = ms.certify(result)
    assert certificate.exponents[0] == pytest.approx(1, abs=1e-6)
    with pytest.raises(ms.EvaluationError, match="power 1 of the small parameter"):
        certificate.require()


def test_the_error_names_the_equation_at_fault():
    result = expanded("one to two", 2)
    examination = examination_of(result)
    A = examination.claim.amplitudes
    wrong = flow_raised(examination.claim, 2, A[1] / 1000, mode=1)
    certificate = certificate_of(examination, wrong, result.problem.equations)
    assert certificate.exponents[0] > 2.99
    assert certificate.exponents[1] < 2.01
    with pytest.raises(ms.MultiscaleError) as caught:
        certificate.require()
    assert str(result.problem.equations[1]) in str(caught.value)


def test_an_unknown_symbol_in_a_result_is_named():
    examination = examination_of(expanded("self-excited", 1))
    with pytest.raises(ms.EvaluationError, match="stranger"):
        examination.exponents(field_raised(examination.claim, 1, sp.Symbol("stranger")))


def test_departures_from_the_convention_are_worded():
    result = expanded("self-excited", 2)
    examination = examination_of(result)
    A = examination.claim.amplitudes[0]
    half = A * sp.exp(sp.I * w * t)
    wrong = field_raised(examination.claim, 2, half + sp.conjugate(half))
    certificate = certificate_of(examination, wrong, result.problem.equations)
    assert certificate.exponents[0] > 2.99
    assert not certificate.convention
    assert not certificate.passed
    assert "not kept" in repr(certificate)
    with pytest.raises(ms.EvaluationError, match=r"level 2: the field of u\(t\)"):
        certificate.require()
    doubled = field_raised(examination.claim, 0, half + sp.conjugate(half))
    assert "level 0" in examination.departures(doubled)[0]


@pytest.mark.parametrize("order", [1, 2, 3, 5])
def test_floats_in_weak_terms(order):
    equation = u.diff(t, 2) + 1.69 * u + eps * (0.31 * u.diff(t) + 0.77 * u**3)
    result = ms.expand(ms.Problem(equation, u, small=eps), order)
    certificate = ms.certify(result)
    certificate.require()
    assert certificate.digits == 16
    assert math.isfinite(certificate.exponents[0])
    examination = examination_of(result)
    A = examination.claim.amplitudes[0]
    wrong = flow_raised(examination.claim, order, sp.I * A / 10)
    assert not certificate_of(examination, wrong, result.problem.equations).passed


def test_floats_in_the_oscillator_alone_are_exact():
    result = ms.expand(ms.Problem(u.diff(t, 2) + 1.69 * u + eps * u**3, u, small=eps), 2)
    assert ms.certify(result).digits > 50


ANALYTIC = {
    "pendulum": (u.diff(t, 2) + sp.sin(u), u.diff(t, 2) + u - u**3 / 6 + u**5 / 120),
    "exponential spring": (
        u.diff(t, 2) + sp.exp(u) - 1,
        u.diff(t, 2) + sum(u**n / math.factorial(n) for n in range(1, 6)),
    ),
    "electrostatic force": (
        u.diff(t, 2) + w**2 * u + alpha * (1 / (1 - u) ** 2 - 1 - 2 * u),
        u.diff(t, 2) + w**2 * u + alpha * sum((n + 1) * u**n for n in range(2, 6)),
    ),
    "root, tangent and logarithm": (
        u.diff(t, 2) + sp.sqrt(1 + 2 * u) - 1 + sp.tan(u) - u + sp.log(1 + u**2) * u.diff(t),
        u.diff(t, 2) + u - u**2 / 2 + u**3 / 2 - 5 * u**4 / 8 + 7 * u**5 / 8 + u**3 / 3 + 2 * u**5 / 15
        + (u**2 - u**4 / 2) * u.diff(t),
    ),
}  # fmt: skip


@pytest.mark.parametrize("order", [2, 4])
@pytest.mark.parametrize("name", ANALYTIC)
def test_equations_need_not_be_polynomial(name, order):
    """The expansion of a Taylor polynomial through u⁵ holds for the function itself through order 4."""
    function, polynomial = ANALYTIC[name]
    result = ms.expand(ms.Problem(polynomial, u, ordering={u: 1}), order)
    statement = replace(stated(result.problem), equations=(function,))
    examination = Examination(statement, claim_of(result))
    assert min(examination.exponents(examination.claim)) > order + 1 - 0.01
    A = examination.claim.amplitudes[0]
    assert examination.exponents(flow_raised(examination.claim, order, A / 1000))[0] < order + 0.01


def peak_claim(order=3):
    """The cubic oscillator by its peak, from U_0 + εU_1 + … at A with 2|A| the fundamental, a = peak as a series."""
    result = ms.expand(ms.Problem(u.diff(t, 2) + u + eps * u**3, u, small=eps), order)
    claim = claim_of(result)
    (A,), B = claim.amplitudes, sp.Symbol("B", complex=True)
    s = sp.Symbol("s", positive=True)
    at_crest = sum(
        eps**n * level[0].subs({A: s, sp.conjugate(A): s}).subs(t, 0) for n, level in enumerate(claim.fields)
    )
    # The fundamental half-amplitude s for the peak 2 r: s = r (1 + ε c_1 r² + …), by substitution.
    r, inverse = sp.Symbol("r", positive=True), sp.Symbol("r", positive=True)
    for _ in range(order):
        excess = sp.expand(at_crest.subs(s, inverse) - 2 * r)
        inverse = sp.series(sp.expand(inverse - excess / 2), eps, 0, order + 1).removeO()
    share = sp.expand(inverse / r)

    def rewritten(expression, first):
        """[εⁿ] with A = B · share(|B|²)."""
        scale = share.subs(r, sp.sqrt(B * sp.conjugate(B)))
        total = sp.expand(expression.subs({sp.conjugate(A): sp.conjugate(B) * scale, A: B * scale}, simultaneous=True))
        return [total.coeff(eps, n) for n in range(first, order + 1)]

    fields = rewritten(sum(eps**n * level[0] for n, level in enumerate(claim.fields)), 0)
    # |A| is constant here, so dB/dt = B (dA/dt)/A.
    turning = sum(eps**n * level[0] for n, level in enumerate(claim.flow, start=1)) / A
    flow = [sp.expand(B * c) for c in rewritten(sp.expand(turning), 1)]
    return result, replace(
        claim,
        amplitudes=(B,),
        fields=tuple((x,) for x in fields),
        flow=tuple((x,) for x in flow),
        amplitude="peak",
    )


def test_a_peak_amplitude_is_held_against_the_peak():
    result, claim = peak_claim()
    examination = Examination(stated(result.problem), claim)
    assert min(examination.exponents(claim)) > 3.99
    assert not examination.departures(claim)
    (B,) = claim.amplitudes
    half = B**2 * sp.conjugate(B) * sp.exp(sp.I * t) / 1000
    taller = field_raised(claim, 3, half + sp.conjugate(half))
    assert "at the power 3 of" in examination.departures(taller)[0]
    turned = field_raised(claim, 3, sp.I * half + sp.conjugate(sp.I * half))
    assert "turns the phase" in examination.departures(turned)[0]


def test_the_fundamental_is_not_the_peak():
    result = ms.expand(ms.Problem(u.diff(t, 2) + u + eps * u**3, u, small=eps), 2)
    examination = examination_of(result)
    assert "at the power 1 of" in examination.departures(replace(examination.claim, amplitude="peak"))[0]


def test_inadmissible_parameters_are_reported():
    """With √c and √(−c) both in the equation no real c is admissible."""
    c = sp.Symbol("c", real=True)
    result = ms.expand(ms.Problem(u.diff(t, 2) + c * u + eps * u**3, u, small=eps), 1)
    claim = replace(claim_of(result), frequencies=(sp.sqrt(c), sp.sqrt(-c)))
    with pytest.raises(ms.EvaluationError, match="positive=True"):
        Examination(stated(result.problem), claim)


def test_certify_wants_an_expansion():
    with pytest.raises(ms.EvaluationError, match="call expand first"):
        ms.certify(SYSTEMS["self-excited"]())
