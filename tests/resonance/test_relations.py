"""Declared resonances, the frame they lead to, what is said about drives, and what is refused."""

from __future__ import annotations

import pickle

import numpy as np
import pytest
import sympy as sp

import multiscale as ms

t = sp.Symbol("t", real=True)
eps, mu, alpha, f, h, sigma, delta, phi, w, w1, w2 = sp.symbols(
    "epsilon mu alpha f h sigma delta phi omega omega_1 omega_2", positive=True
)
Om, Om1, Om2, lam, k2 = sp.symbols("Omega Omega_1 Omega_2 lambda k_2", positive=True)
u, v = sp.Function("u")(t), sp.Function("v")(t)
plain = u.diff(t, 2) + w**2 * u
cubic = plain + 2 * eps * mu * u.diff(t) + eps * alpha * u**3
pair = [u.diff(t, 2) + w1**2 * u + eps * alpha * u * v, v.diff(t, 2) + w2**2 * v + eps * u**2]


def problem(equations, unknowns=u, resonances=()):
    return ms.Problem(equations, unknowns, small=eps, resonances=resonances)


HARMONIC = eps * f * sp.cos(Om * t)


def driven(resonance, force=HARMONIC):
    return problem(cubic - force, resonances=resonance)


FRAMES = {
    "primary": (driven({Om: w + eps * sigma}), Om * t, 1),
    "subharmonic": (driven({Om: 3 * w + eps * sigma}, f * sp.cos(Om * t)), Om * t / 3, 3),
    "superharmonic": (driven({3 * Om: w + eps * sigma}, f * sp.cos(Om * t)), 3 * Om * t, 1),
    "parametric": (driven({Om: 2 * w + eps * sigma}, -eps * h * u * sp.cos(Om * t)), Om * t / 2, 2),
    "phase": (driven({Om: w + eps * sigma}, eps * f * sp.cos(Om * t + phi)), Om * t + phi, 1),
    "drive off resonance": (driven((), f * sp.cos(Om * t)), w * t, 0),
}


@pytest.mark.parametrize("name", FRAMES)
def test_frame_and_the_fold_of_the_lag(name):
    """The flow depends on cos and sin of n γ for a resonance of order n."""
    stated, angle, fold = FRAMES[name]
    flow = ms.expand(stated, 2).slow_flow
    assert sp.expand(next(iter(flow.frame.values())) - angle) == 0
    angles = {x.args[0] for rate in flow.polar.values() for x in rate.atoms(sp.cos, sp.sin)}
    assert flow.autonomous
    if fold:
        assert fold * sp.Symbol("gamma", real=True) in {
            abs(x) if x.is_number else (x if not x.could_extract_minus_sign() else -x) for x in angles
        }
    else:
        assert not angles


def test_primary_resonance_in_polar_form():
    flow = ms.expand(driven({Om: w + eps * sigma}), 1).slow_flow
    a, gamma = sp.Symbol("a", positive=True), sp.Symbol("gamma", real=True)
    assert sp.expand(flow.polar[a] - eps * (-mu * a + f * sp.sin(gamma) / (2 * w))) == 0
    assert (
        sp.expand(flow.polar[gamma] - eps * (sigma - 3 * alpha * a**2 / (8 * w) + f * sp.cos(gamma) / (2 * w * a))) == 0
    )
    assert flow.phases == {gamma: Om * t - w * t - sp.Symbol("beta", real=True)}


RELATIONS = {
    "symbol": {Om: w + eps * sigma},
    "equation": [sp.Eq(Om, w + eps * sigma)],
    "square": {Om**2: (w + eps * sigma) ** 2},
    "multiple": {2 * Om: 2 * w + 2 * eps * sigma},
}


@pytest.mark.parametrize("name", RELATIONS)
def test_equivalent_relations_give_one_flow(name):
    wanted = ms.expand(driven({Om: w + eps * sigma}), 3)
    found = ms.expand(driven(RELATIONS[name]), 3)
    assert found.equals(wanted)
    assert found.relations == dict(found.problem.resonances)


def test_an_unknown_as_key_means_its_natural_frequency():
    symbol = ms.expand(problem(pair, [u, v], {w2: 2 * w1 + eps * sigma}), 3)
    unknown = ms.expand(problem([pair[0], v.diff(t, 2) + k2 * v + eps * u**2], [u, v], {v: 2 * w1 + eps * sigma}), 3)
    assert unknown.equals(symbol)
    rhs = unknown.slow_flow.to_numpy()
    from_stiffness = rhs.values(k_2=4.41, alpha=0.3, epsilon=0.1, omega_1=1.0)
    np.testing.assert_allclose(from_stiffness[rhs.parameters.index("sigma")], 1.0)


def test_a_frequency_may_be_given_for_its_detuning():
    rhs = ms.expand(driven({Om: w + eps * sigma}), 2).slow_flow.to_numpy()
    values = {alpha: 0.4, eps: 0.1, f: 0.3, mu: 0.05, w: 2.0}
    assert "Omega" not in rhs.parameters
    np.testing.assert_allclose(rhs.values(values, Omega=2.05), rhs.values(values, sigma=0.5))
    np.testing.assert_allclose(rhs.values(values, Omega=2.05, sigma=0.5), rhs.values(values, sigma=0.5))
    with pytest.raises(ms.EvaluationError, match=r"sigma = 0\.7 contradicts Omega = 2\.05"):
        rhs.values(values, Omega=2.05, sigma=0.7)
    with pytest.raises(ms.EvaluationError, match="Omega is given, but not omega"):
        rhs.values({alpha: 0.4, eps: 0.1, f: 0.3, mu: 0.05}, Omega=2.05)
    with pytest.raises(ms.EvaluationError, match="missing parameter sigma"):
        rhs.values(values)
    sweep = rhs.values(values, Omega=np.linspace(1.9, 2.1, 7))
    assert rhs(0.0, [0.2, 0.1], *sweep).shape == (2, 7)
    assert pickle.loads(pickle.dumps(rhs)).values(values, Omega=2.05) == rhs.values(values, Omega=2.05)


def test_orders_of_detunings():
    ordered = ms.Problem(
        plain + mu * u.diff(t) + lam * u**2 + alpha * u**3 - f * sp.cos(Om * t),
        u,
        ordering={u: 1, mu: 2, f: 3, sigma: 2},
        resonances={Om: w + sigma},
    )
    powers = problem(
        plain + eps * lam * u**2 + eps**2 * (mu * u.diff(t) + alpha * u**3 - f * sp.cos(Om * t)),
        resonances={Om: w + eps**2 * sigma},
    )
    assert ms.expand(ordered, 3).equals(ms.expand(powers, 3))
    rhs = ms.expand(ordered, 2).slow_flow.to_numpy()
    values = {alpha: 0.4, f: 0.3, mu: 0.05, w: 2.0, lam: 0.1}
    np.testing.assert_allclose(rhs.values(values, Omega=2.05), rhs.values(values, sigma=0.05))


@pytest.mark.parametrize("name", ["primary", "subharmonic", "phase"])
@pytest.mark.parametrize("form", ["cartesian", "polar", "complex"])
def test_driven_flow_as_numpy(name, form):
    result = ms.expand(FRAMES[name][0], 2)
    flow = getattr(result.slow_flow, form)
    values = {alpha: 0.4, eps: 0.1, f: 0.3, mu: 0.05, w: 2.0, sigma: 0.6, phi: 0.3}
    values = {s: x for s, x in values.items() if s in (*result.problem.parameters, eps)}
    y = np.array([0.4, 0.7]) if form != "complex" else np.array([0.4 - 0.2j])
    numbers = dict(zip(flow, y, strict=True)) | values
    found = result.slow_flow.to_numpy(form).bind(values)(0.3, y)
    np.testing.assert_allclose(found, [complex(x.subs(numbers)) for x in flow.values()], rtol=1e-12)


@pytest.mark.parametrize("name", ["primary", "subharmonic", "superharmonic", "phase"])
def test_driven_solution_forms_and_displacement_agree(name):
    result = ms.expand(FRAMES[name][0], 2)
    values = {alpha: 0.4, eps: 0.1, f: 0.3, mu: 0.05, w: 2.0, sigma: 0.6, phi: 0.3}
    ratio = {"subharmonic": 3, "superharmonic": sp.Rational(1, 3)}.get(name, 1)
    shift = {"superharmonic": sp.Rational(1, 3)}.get(name, 1)
    frequency = {Om: ratio * 2.0 + 0.06 * shift}
    p, q, a, gamma, A = (
        result.symbols.p[0],
        result.symbols.q[0],
        result.symbols.a[0],
        result.symbols.gamma[0],
        result.symbols.A[0],
    )
    points = [{p: 0.3, q: 0.4}, {a: 0.5, gamma: np.arctan2(0.4, 0.3)}, {A: 0.15 - 0.2j}]
    found = [
        complex(result.solution(form)[u].subs(values | frequency | {t: 1.3} | point))
        for form, point in zip(("cartesian", "polar", "complex"), points, strict=True)
    ]
    known = {s: x for s, x in values.items() if s in (*result.problem.parameters, eps)}
    np.testing.assert_allclose(found, found[0], rtol=1e-12)
    np.testing.assert_allclose(result.to_numpy().bind(known)(1.3, [0.3, 0.4]), found[0].real, rtol=1e-12)


def test_representations_agree_on_driven_problems():
    pytest.importorskip("flint")
    for stated, *_ in FRAMES.values():
        assert ms.expand(stated, 3, representation="sympy") == ms.expand(stated, 3, representation="flint")


TRUNCATED = {
    "square": driven({Om**2: w**2 + eps * delta}),
    "in a denominator": driven({Om: w + eps * sigma}, eps * f * sp.cos(Om * t) / Om),
    "slow": problem(u.diff(t, 2) + (1 + eps * t) * u + eps * alpha * u**3),
}


@pytest.mark.parametrize("name", TRUNCATED)
def test_extension_goes_on_where_a_statement_was_expanded(name):
    stated = TRUNCATED[name]
    assert ms.extend(ms.expand(stated, 2), 4) == ms.expand(stated, 4)
    assert pickle.loads(pickle.dumps(ms.expand(stated, 3))) == ms.expand(stated, 3)


def test_constant_force_at_leading_order_moves_the_centre():
    result = ms.expand(problem(cubic - f), 1)
    assert result.levels[0].corrections[u].coeff(f) == 1 / w**2
    a = result.symbols.a[0]
    assert (
        sp.expand(result.frequency_corrections()[1] - (3 * alpha * a**2 / (8 * w) + 3 * alpha * f**2 / (2 * w**5))) == 0
    )


def test_an_unbalanced_drive_is_reported():
    result = ms.expand(driven(()), 2)
    assert any("the drive of frequency Omega is balanced by no relation up to order 2" in x for x in result.warnings)
    assert not any("balanced" in x for x in ms.expand(driven({Om: w + eps * sigma}), 2).warnings)


def test_beats_are_said_to_leave_time_in_the_flow():
    stated = driven({Om1: w + eps * sigma, Om2: w + eps * delta}, eps * f * sp.cos(Om1 * t) + eps * h * sp.cos(Om2 * t))
    result = ms.expand(stated, 1)
    assert not result.slow_flow.autonomous
    assert any("depends on t explicitly" in x for x in result.warnings)
    assert any(t in x.free_symbols for x in result.slow_flow.polar.values())


def test_drives_and_parameters_of_a_problem():
    stated = driven({Om: w + eps * sigma}, eps * f * sp.cos(Om * t) + eps * h * sp.cos(2 * Om * t) * u)
    assert stated.drives == (Om,)
    assert stated.parameters == (alpha, f, h, mu, w, sigma)


def test_near_resonance_of_numbers_is_a_warning_with_the_line_to_add():
    stated = [u.diff(t, 2) + u + eps * u * v, v.diff(t, 2) + sp.Rational(204, 100) ** 2 * v + eps * u**2]
    with pytest.warns(
        ms.SmallDivisorWarning, match=r"2\*omega_u.*close to omega_v.*resonances=\{v\(t\): 2 \+ epsilon\*sigma\}"
    ):
        result = ms.expand(problem(stated, [u, v]), 2)
    assert any("small divisor" in x for x in result.warnings)
    assert not any("small divisor" in x for x in ms.expand(problem(stated, [u, v]), 2, tolerance=1e-3).warnings)
    declared = ms.expand(problem(stated, [u, v], {v: 2 + eps * sigma}), 2)
    assert declared.slow_flow.phases
    rhs = declared.slow_flow.to_numpy()
    np.testing.assert_allclose(rhs.values(epsilon=0.1)[rhs.parameters.index("sigma")], 0.4)


def test_symbolic_divisors_are_listed():
    assert 3 * Om - w in ms.expand(driven((), f * sp.cos(Om * t)), 1).nonresonance or 3 * Om - w in [
        -x for x in ms.expand(driven((), f * sp.cos(Om * t)), 1).nonresonance
    ]


REFUSED = {
    "on resonance at leading order": (
        lambda: driven((), f * sp.cos(w * t)),
        r"frequency omega, the natural frequency omega.*Omega, a symbol of its own",
    ),
    "declared, yet at leading order": (
        lambda: driven({Om: w + eps * sigma}, f * sp.cos(Om * t)),
        "response is unbounded",
    ),
    "contradiction": (
        lambda: driven([sp.Eq(Om, w + eps * sigma), sp.Eq(Om, 2 * w + eps * delta)]),
        "contradicts",
    ),
    "twice the same": (
        lambda: driven([sp.Eq(Om, w + eps * sigma), sp.Eq(Om, w + eps * sigma)]),
        "holds already|contradicts",
    ),
    "negative frequency": (lambda: driven({Om: eps * sigma - w}), "contradicts the others"),
    "unused": (lambda: driven({Om: w + eps * sigma, Om2: w + eps * delta}), "do not contain"),
    "string": (lambda: driven({"Omega": w + eps * sigma}), "holds a string"),
    "not an equation": (lambda: driven([Om - w]), r"expected a mapping"),
    "parametric at leading order": (
        lambda: problem(cubic + h * u * sp.cos(Om * t)),
        "parametric drive stands at leading order",
    ),
    "fast function": (lambda: problem(cubic + eps * u * sp.tan(Om * t)), "depends on t explicitly"),
}


@pytest.mark.parametrize("name", REFUSED)
def test_refused(name):
    build, message = REFUSED[name]
    with pytest.raises(ms.MultiscaleError, match=f"(?s){message}"):
        build()
