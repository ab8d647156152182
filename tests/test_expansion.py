"""The finished result: levels that an analyst can follow, views that agree, extension, copies, warnings."""

from __future__ import annotations

import pickle

import pytest
import sympy as sp

import multiscale as ms

t = sp.Symbol("t", real=True)
eps, mu, alpha, w, w1, w2, a2, a3 = sp.symbols("epsilon mu alpha omega omega_1 omega_2 alpha_2 alpha_3", positive=True)
u, v = sp.Function("u")(t), sp.Function("v")(t)

PROBLEMS = {
    "damped cubic": ms.Problem(u.diff(t, 2) + w**2 * u + 2 * eps * mu * u.diff(t) + eps * alpha * u**3, u, small=eps),
    "quadratic and cubic": ms.Problem(u.diff(t, 2) + w**2 * u + eps * a2 * u**2 + eps**2 * a3 * u**3, u, small=eps),
    "two modes": ms.Problem(
        [u.diff(t, 2) + w1**2 * u + eps * alpha * u * v, v.diff(t, 2) + w2**2 * v + eps * mu * u**2], [u, v], small=eps
    ),
    "one to two": ms.Problem(
        [u.diff(t, 2) + u + 2 * eps * u * v, v.diff(t, 2) + 4 * v + eps * u**2], [u, v], small=eps
    ),
}


@pytest.fixture(params=PROBLEMS, scope="module")
def result(request):
    return ms.expand(PROBLEMS[request.param], 3)


@pytest.mark.parametrize("n", [0, 1, 2, 3])
def test_levels_can_be_followed(result, n):
    """operator(U_n) = forcing − secular, and the secular terms are what the solvability condition cancels."""
    level = result.levels[n]
    T0 = result.symbols.T[0]
    for x, omega in zip(result.problem.unknowns, result.problem.natural_frequencies, strict=True):
        field = level.corrections[x]
        left = level.operator[x].subs(sp.Function(f"{x.func.__name__}_{n}")(T0), field).doit()
        assert vanishes(left - (level.forcing[x] - level.secular[x]))
        if n:
            A = result.symbols.A[result.problem.unknowns.index(x)]
            condition = (
                2
                * sp.I
                * omega
                * level.solvability[sp.Symbol(f"D_{n}{A.name}", complex=True)]
                * sp.exp(sp.I * omega * T0)
            )
            assert vanishes(level.secular[x] - condition - condition.conjugate())


NUMBERS = {mu: "0.3", alpha: "1.1", w: "1.7", w1: "1.3", w2: "3.1", a2: "0.9", a3: "0.4"}
STATE = {"A": "0.4", "A_1": "0.6", "A_2": "0.3"}


def vanishes(x):
    """Whether an expression is zero at one generic point, to 30 digits."""
    values = {s: sp.Rational(n) for s, n in NUMBERS.items()} | {sp.Symbol("T_0", real=True): sp.Rational(7, 9)}
    values |= {sp.Symbol(n, complex=True): sp.Rational(r) + sp.I / 5 for n, r in STATE.items()}
    return abs(sp.N(x.subs(values), 40)) < sp.Float("1e-30")


def test_level_zero_is_the_linear_motion():
    level = ms.expand(PROBLEMS["damped cubic"], 1).levels[0]
    A, T0 = sp.Symbol("A", complex=True), sp.Symbol("T_0", real=True)
    assert level.corrections[u] == A * sp.exp(sp.I * w * T0) + sp.conjugate(A) * sp.exp(-sp.I * w * T0)
    assert level.forcing[u] == 0
    assert level.solvability == {}


def test_first_level_of_the_damped_cubic_oscillator():
    level = ms.expand(PROBLEMS["damped cubic"], 1).levels[1]
    A = sp.Symbol("A", complex=True)
    (condition,) = level.solvability.values()
    assert sp.expand(condition - (-mu * A + 3 * sp.I * alpha * A**2 * sp.conjugate(A) / (2 * w))) == 0
    assert level.divisors == (w,)


def test_levels_are_a_lazy_mapping(result):
    assert list(result.levels) == [0, 1, 2, 3]
    assert len(result.levels) == 4
    assert result.levels[2] is result.levels[2]
    with pytest.raises(KeyError, match="levels 0 … 3"):
        result.levels[4]


def test_scales_add_up(result):
    for A, total in result.slow_flow.complex.items():
        assert sp.expand(total - sum(eps**n * part[A] for n, part in result.slow_flow.by_scale.items())) == 0


def test_polar_and_cartesian_forms_describe_one_flow(result):
    """With p = a cos β, q = −a sin β:  ṗ = ȧ cos β − a β̇ sin β and so on, at random numbers."""
    s, flow = result.symbols, result.slow_flow
    beta = {b: sp.Rational(3, 10) * (k + 1) for k, b in enumerate(s.beta)}
    gammas = {g: x.subs(beta) for g, x in flow.phases.items()}
    size = {a: sp.Rational(4 + k, 5) for k, a in enumerate(s.a)}
    others = {x: sp.Rational(7 + k, 6) for k, x in enumerate((eps, mu, alpha, w, w1, w2, a2, a3))}
    for k in range(len(s.a)):
        p, q = size[s.a[k]] * sp.cos(beta[s.beta[k]]), -size[s.a[k]] * sp.sin(beta[s.beta[k]])
        position = {
            x: y
            for j in range(len(s.a))
            for x, y in (
                (s.p[j], size[s.a[j]] * sp.cos(beta[s.beta[j]])),
                (s.q[j], -size[s.a[j]] * sp.sin(beta[s.beta[j]])),
            )
        }
        rate = [flow.cartesian[x].subs(position).subs(others) for x in (s.p[k], s.q[k])]
        growth = (rate[0] * p + rate[1] * q) / size[s.a[k]]
        assert float(growth - flow.polar[s.a[k]].subs(size | gammas | others)) == pytest.approx(0, abs=1e-12)


def test_cyclic_phases_complete_the_polar_form(result):
    flow = result.slow_flow
    assert list(flow.polar) == [*result.symbols.a, *flow.phases, *flow.cyclic]
    assert len(flow.polar) == 2 * len(result.problem.unknowns)
    assert not set().union(*(x.free_symbols for x in flow.polar.values())) & set(result.symbols.beta)


@pytest.mark.parametrize("name", PROBLEMS)
def test_extension_equals_a_fresh_expansion(name):
    problem = PROBLEMS[name]
    assert ms.extend(ms.expand(problem, 2), 4) == ms.expand(problem, 4)


def test_extension_computes_no_level_again(monkeypatch):
    import multiscale.computed as computed

    result = ms.expand(PROBLEMS["two modes"], 2)
    seen = []
    plain = computed.next_level
    monkeypatch.setattr(computed, "next_level", lambda h: seen.append(h.tower.height) or plain(h))
    ms.extend(result, 3)
    assert seen == [3]
    assert ms.extend(result, 2) == result


def test_an_expansion_is_not_shortened():
    with pytest.raises(ms.ProblemError, match="integer ≥ 3"):
        ms.extend(ms.expand(PROBLEMS["damped cubic"], 3), 2)


def test_on_level_sees_every_level_and_may_stop():
    seen = []
    result = ms.expand(PROBLEMS["damped cubic"], 4, on_level=lambda level: seen.append(level.order))
    assert (seen, result.order) == ([1, 2, 3, 4], 4)
    short = ms.expand(PROBLEMS["damped cubic"], 4, on_level=lambda level: level.order < 2)
    assert short == ms.expand(PROBLEMS["damped cubic"], 2)
    assert ms.extend(short, 4) == result


def test_shift_of_a_quadratic_cubic_oscillator_is_one_fraction():
    correction = ms.expand(PROBLEMS["quadratic and cubic"], 2).frequency_corrections()[2]
    a = sp.Symbol("a", positive=True)
    assert correction == a**2 * (9 * a3 * w**2 - 10 * a2**2) / (24 * w**3)
    assert not isinstance(correction, sp.Add)


def test_nonresonance_conditions_are_read_after_reduction():
    conditions = ms.expand(PROBLEMS["two modes"], 2).nonresonance
    assert 2 * w1 - w2 in conditions
    assert all(not c.is_positive for c in conditions)
    assert ms.expand(PROBLEMS["damped cubic"], 3).nonresonance == ()


def test_frequency_is_refused_in_internal_resonance():
    result = ms.expand(PROBLEMS["one to two"], 2)
    with pytest.raises(ms.ResonanceError, match=r"use slow_flow\.polar"):
        result.frequency()
    with pytest.raises(ms.ResonanceError):
        result.frequency_to_numpy()
    assert result.relations == {sp.Symbol("omega_v"): 2 * sp.Symbol("omega_u")}


def test_a_parameter_without_effect_is_reported():
    result = ms.expand(ms.Problem(u.diff(t, 2) + u + eps * alpha * u**3 + eps**3 * mu * u**5, u, small=eps), 2)
    assert [x for x in result.warnings if x.startswith("mu has no effect up to order 2")]
    assert not ms.extend(result, 3).warnings


def test_first_order_with_quadratic_terms_warns():
    with pytest.warns(ms.OrderingWarning, match="effective cubic coefficient is incomplete"):
        result = ms.expand(PROBLEMS["quadratic and cubic"], 1)
    assert any("order 1 with even" in x for x in result.warnings)


REFUSED = {
    "form of solution": (lambda r: r.solution("spherical"), "expected one of 'polar', 'complex', 'cartesian'"),
    "order of solution": (lambda r: r.solution(order=7), "levels 0 … 3"),
    "derivative": (lambda r: r.to_numpy(3), "expected 0, 1 or 2"),
    "mode": (lambda r: r.frequency(5), "modes 0 … 0"),
    "form of flow": (lambda r: r.slow_flow.to_numpy("spherical"), "expected one of 'complex'"),
    "derivative by what": (lambda r: r.slow_flow.to_numpy(wrt="time"), "expected None, 'state' or 'parameters'"),
    "complex jacobian": (lambda r: r.slow_flow.jacobian("complex"), "no Jacobian"),
    "complex generated jacobian": (lambda r: r.slow_flow.to_numpy("complex", wrt="state"), "no Jacobian"),
}


@pytest.mark.parametrize("name", REFUSED)
def test_refused(name):
    call, message = REFUSED[name]
    with pytest.raises(ms.MultiscaleError, match=message):
        call(ms.expand(PROBLEMS["damped cubic"], 3))


def test_lower_orders_of_the_solution_are_truncations(result):
    full, short = result.solution("complex"), result.solution("complex", order=1)
    for x in result.problem.unknowns:
        assert short[x] == full[x].coeff(eps, 0) + eps * full[x].coeff(eps, 1)


def test_copies_equal_the_original(result):
    other = pickle.loads(pickle.dumps(result))
    assert other == result
    assert hash(other) == hash(result)
    assert ms.extend(other, 4) == ms.extend(result, 4)


def test_equality_needs_the_same_result():
    one = ms.expand(PROBLEMS["damped cubic"], 2)
    assert one != ms.expand(PROBLEMS["damped cubic"], 3)
    assert one != ms.expand(PROBLEMS["quadratic and cubic"], 2)
    assert not one.equals(ms.expand(PROBLEMS["quadratic and cubic"], 2))
    assert one != "damped cubic"


def test_representations_on_paper(result):
    assert len(repr(result)) < 200
    assert "aligned" in result.slow_flow._repr_latex_()
    assert result._repr_latex_() == result.latex()
    assert "aligned" in result.levels[1]._repr_latex_()


def test_long_latex_is_cut_and_says_how_long_it_is():
    result = ms.expand(PROBLEMS["two modes"], 6)
    assert "terms; use latex(full=True)" in result.latex()
    assert len(result.latex(full=True)) > 4000


def test_finished_expansions_are_frozen(result):
    with pytest.raises(AttributeError):
        result.order = 7
