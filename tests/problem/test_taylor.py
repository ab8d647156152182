"""Forces by their Taylor polynomials: equal to polynomials written by hand to the degree that counts, or refused."""

from __future__ import annotations

import pickle

import pytest
import sympy as sp

import multiscale as ms

t = sp.Symbol("t", real=True)
eps, k, g, m, V, T, mu, W, f = sp.symbols("epsilon k g m V T mu Omega f", positive=True)
sigma = sp.Symbol("sigma", real=True)
u_s, v_s, w = sp.symbols("u_s v_s w", positive=True)
u, v = sp.Function("u")(t), sp.Function("v")(t)


def one(force: sp.Expr, **options) -> ms.Problem:
    return ms.Problem(u.diff(t, 2) + force, u, **({"ordering": {u: 1}} | options))


def by_hand(x: sp.Expr, degree: int) -> sp.Expr:
    """The Taylor polynomial in the unknowns together, by differentiation."""
    scale = sp.Symbol("scale")
    scaled = x.subs(u.diff(t), scale * sp.Symbol("du")).subs({u: scale * u, v: scale * v})
    terms = [sp.diff(scaled, scale, n).subs(scale, 0) / sp.factorial(n) for n in range(degree + 1)]
    return sp.expand(sp.Add(*terms)).subs(sp.Symbol("du"), u.diff(t))


FORCES = {
    "sine": sp.sin(u),
    "electrode": k * u - V**2 * (1 / (g - u) ** 2 - 1 / g**2),
    "exponential": sp.exp(u) - 1,
    "logarithm": w**2 * sp.log(1 + k * u) / k,
    "hyperbolic": sp.sinh(w**2 * u),
    "rational": u / (1 + k * u + u**2),
    "root": sp.sqrt(1 + 2 * u) - 1,
    "rotating": sp.sin(u) * (1 - w * sp.cos(u)),
    "arcs": sp.asin(u) * sp.cos(u),
    "velocity": sp.sin(u) + u**2 * sp.tanh(u.diff(t)),
    "removable": u * sp.sin(u) / u + u**2 / sp.tan(u) - u,
}


@pytest.mark.parametrize("order", [1, 2, 4])
@pytest.mark.parametrize("name", FORCES)
@pytest.mark.filterwarnings("ignore::multiscale.OrderingWarning")
def test_equals_the_polynomial_written_by_hand(name, order):
    """U_n needs the degree n + 1; the next one has no effect."""
    force = FORCES[name] if name != "removable" else sp.sin(u) + u**2 * (1 / sp.tan(u)) - u
    polynomial = by_hand(FORCES[name], order + 1) if name != "removable" else _removable(order + 1)
    assert ms.expand(one(force), order).equals(ms.expand(one(polynomial), order))
    assert sp.expand(one(force).polynomials(order)[0] - u.diff(t, 2) - polynomial) == 0


def _removable(degree: int) -> sp.Expr:
    """sin u + u² cot u − u, from the known series of u cot u."""
    full = u - u**3 / 6 + u**5 / 120 + u * (1 - u**2 / 3 - u**4 / 45) - u
    return sp.Add(*(x for x in sp.expand(full).args if sp.degree(x, u) <= degree)) if degree > 2 else u


def test_several_unknowns_at_once():
    sine = k * sp.sin(u - v)
    poly = by_hand(sine, 4)
    order = {u: 1, v: 1, k: 2}

    def coupled(force: sp.Expr) -> ms.Problem:
        return ms.Problem([u.diff(t, 2) + u + force, v.diff(t, 2) + 2 * v - force], [u, v], ordering=order)

    assert ms.expand(coupled(sine), 3).equals(ms.expand(coupled(poly), 3))


def test_unequal_orders():
    """v of order 1 leads its equation at ε, u of order 2 at ε²."""
    force = sp.exp(v) - 1 - v

    def stated(x: sp.Expr) -> ms.Problem:
        equations = [u.diff(t, 2) + 2 * u + v * x, v.diff(t, 2) + 3 * sp.sin(v) + u * v]
        return ms.Problem(equations, [u, v], ordering={u: 2, v: 1})

    assert ms.expand(stated(force), 2).equals(ms.expand(stated(v**2 / 2 + v**3 / 6 + v**4 / 24), 2))


def test_a_drive_may_multiply_a_function():
    def driven(x: sp.Expr) -> ms.Problem:
        equation = u.diff(t, 2) + u + f * sp.cos(W * t) * x
        return ms.Problem(equation, u, ordering={u: 1, f: 1, sigma: 1}, resonances={W: 2 + sigma})

    assert ms.expand(driven(sp.sin(u)), 3).equals(ms.expand(driven(u - u**3 / 6), 3))


def test_a_drive_may_stand_in_the_angle():
    """sin(u − Ωt) = sin u cos Ωt − cos u sin Ωt."""

    def driven(x: sp.Expr) -> ms.Problem:
        equation = u.diff(t, 2) + 2 * u + f * x
        return ms.Problem(equation, u, ordering={u: 1, f: 2, sigma: 1}, resonances={W: sp.sqrt(2) + sigma})

    written = sp.cos(W * t) * (u - u**3 / 6) - sp.sin(W * t) * (1 - u**2 / 2)
    assert ms.expand(driven(sp.sin(u - W * t)), 3).equals(ms.expand(driven(written), 3))


def test_a_load_that_varies():
    """(V + f cos Ωt)², its square eliminated by the equilibrium: V itself becomes a root; the natural frequency by a
    relation."""

    def driven(load: sp.Expr, **options) -> ms.Expansion:
        force = k * u - load / (g - u) ** 2
        orders = {u: 1, f: 3, sigma: 2}
        problem = one(force, ordering=orders, about={u: u_s}, resonances={u: W + sigma}, **options)
        return ms.expand(problem, 2)

    result = driven((V + f * sp.cos(W * t)) ** 2)
    A = result.symbols.A[0]
    constant = result.slow_flow.by_scale[2][A].subs(A, 0)
    expected = -sp.I * f * sp.sqrt(k * u_s) * sp.Abs(g - u_s) / (2 * W * (g - u_s) ** 2)
    assert sp.simplify(constant - expected) == 0


def test_an_ordered_parameter_may_stand_inside():
    def stated(x: sp.Expr) -> ms.Problem:
        return ms.Problem(u.diff(t, 2) + u + x * u**3, u, ordering={u: 1, mu: 1})

    assert ms.expand(stated(sp.cos(mu)), 5).equals(ms.expand(stated(1 - mu**2 / 2), 5))


SMALL = {
    "sine": (sp.sin(eps * u) / eps, u - eps**2 * u**3 / 6 + eps**4 * u**5 / 120),
    "denominator": (u / (1 + eps * u**2), u - eps * u**3 + eps**2 * u**5 - eps**3 * u**7 + eps**4 * u**9),
    "coefficient": (u + eps * u**3 / sp.sqrt(1 - 2 * eps), u + u**3 * (eps + eps**2 + 3 * eps**3 / 2 + 5 * eps**4 / 2)),
}


@pytest.mark.parametrize("name", SMALL)
def test_explicitly_small_arguments(name):
    force, polynomial = SMALL[name]
    found, written = (ms.expand(ms.Problem(u.diff(t, 2) + x, u, small=eps), 4) for x in (force, polynomial))
    assert found.equals(written)


def test_extension_needs_no_level_again():
    problem = one(sp.sin(u) + k * (sp.exp(u) - 1))
    seen = []
    longer = ms.extend(ms.expand(problem, 2), 6, on_level=lambda level: seen.append(level.order))
    assert longer.equals(ms.expand(problem, 6))
    assert seen == [3, 4, 5, 6]


def test_decimals_are_exact():
    found = ms.expand(one(u + sp.Float("0.3") * (sp.cos(sp.Float("0.2") * u) - 1) * u), 2).frequency_corrections()[2]
    assert found == ms.expand(one(u - sp.Rational(3, 500) * u**3), 2).frequency_corrections()[2]


def test_sine_and_cosine_of_one_angle_reduce():
    """Equal results print equal: sin² + cos² = 1."""
    problem = one(sp.sin(u) - T, about={u: u_s})
    c = sp.cos(u_s)
    expected = (2 * c**2 - 5) / (48 * c ** sp.Rational(3, 2))
    result = ms.expand(problem, 2)
    assert sp.expand(result.frequency_corrections()[2] / result.symbols.a[0] ** 2 - expected) == 0


# States of rest


def plate(**options) -> ms.Problem:
    return one(k * u - V**2 / (g - u) ** 2, **options)


def test_equilibrium_eliminates_the_load():
    problem = plate(about={u: u_s})
    assert ms.expand(problem, 2).relations == {V**2: k * u_s * (g - u_s) ** 2}
    assert problem.parameters == (g, k, u_s)
    (found,) = problem.natural_frequencies
    assert sp.simplify(found**2 - k * (g - 3 * u_s) / (g - u_s)) == 0


def test_equilibrium_by_hand_is_the_same():
    shifted = k * (u + u_s) - k * u_s * (g - u_s) ** 2 / (g - u_s - u) ** 2
    assert ms.expand(plate(about={u: u_s}), 4).equals(ms.expand(one(shifted), 4))


def test_another_parameter_may_be_eliminated():
    stated = {k: V**2 / (u_s * (g - u_s) ** 2)}
    problem = plate(about={u: u_s}, resonances=stated)
    assert dict(problem.resonances) == stated
    assert problem.parameters == (V, g, u_s)


ABOUT = {
    "symbol, linear load": (lambda: one(k * u + mu * u**3 - T, about={u: u_s}), {T: u_s * (k + mu * u_s**2)}),
    "number": (lambda: one(sp.sin(u) - T, about={u: sp.pi / 6}), {T: sp.Rational(1, 2)}),
    "nested roots": (
        lambda: one(sp.sin(u) - T, about={u: sp.pi / 5}),
        {T: sp.sqrt(2) * sp.sqrt(5 - sp.sqrt(5)) / 4},
    ),
    "upside down": (lambda: one(-sp.sin(u), about={u: sp.pi}), {}),
    "expression": (lambda: one(k * u - T + mu * (u - T / k) ** 3, about={u: T / k}), {}),
    "identity beyond polynomials": (
        lambda: one(sp.sin(u) - sp.sin(2 * T) / 2, about={u: sp.asin(sp.sin(2 * T) / 2)}),
        {},
    ),
    "rotating pendulum": (lambda: one(sp.sin(u) * (1 - w * sp.cos(u)), about={u: u_s}), {w: 1 / sp.cos(u_s)}),
}


@pytest.mark.parametrize("name", ABOUT)
def test_relations_of_rest(name):
    build, expected = ABOUT[name]
    assert dict(build().resonances) == expected


def test_two_unknowns_at_rest():
    equations = [u.diff(t, 2) + u - V**2 / (1 - u) ** 2 + mu * (u - v), v.diff(t, 2) + 2 * v + mu * (v - u) - T]
    problem = ms.Problem(equations, [u, v], ordering={u: 1, v: 1, mu: 1}, about={u: u_s, v: v_s})
    found = {key: sp.expand(value) for key, value in problem.resonances}
    assert found == {V**2: sp.expand(u_s * (1 - u_s) ** 2), T: 2 * v_s}


def test_problem_at_rest_pickles_and_extends():
    problem = plate(about={u: u_s})
    again = pickle.loads(pickle.dumps(problem))
    assert again == problem
    assert ms.expand(again, 3).relations == ms.expand(problem, 3).relations


def test_the_load_is_checked_where_it_is_given_too():
    function = ms.expand(plate(about={u: u_s}), 2).frequency_to_numpy()
    values = {"g": 1.0, "k": 2.0, "u_s": 0.1}
    load = (2.0 * 0.1 * 0.81) ** 0.5
    assert function.bind(values, V=load)(0.0, [0.0, 0.0]) == function.bind(values)(0.0, [0.0, 0.0])
    with pytest.raises(ms.EvaluationError, match=r"V = 0.5 contradicts"):
        function.bind(values, V=0.5)


REFUSED = {
    "static force": (lambda: plate(), ms.UnsupportedTermError, r"-V\*\*2/g\*\*2: a constant force.*about=\{u: u_s\}"),
    "kink": (lambda: one(u + sp.Abs(u) * u), ms.UnsupportedTermError, r"Abs\(u\(t\)\).*kink.*small=epsilon"),
    "kink in a velocity": (
        lambda: one(u + sp.Abs(u.diff(t)) * u.diff(t)),
        ms.UnsupportedTermError,
        r"Abs\(Derivative.*kink",
    ),
    "sign": (lambda: one(u + mu * sp.sign(u.diff(t))), ms.UnsupportedTermError, "sign has no Taylor.*small=epsilon"),
    "step": (lambda: one(u + u * sp.Heaviside(u)), ms.UnsupportedTermError, "Heaviside.*jump"),
    "one-sided": (lambda: one(u + sp.Max(u, 0) * u), ms.UnsupportedTermError, r"Max\(0, u\(t\)\).*kink"),
    "piecewise": (
        lambda: one(u + sp.Piecewise((0, u < 1), (u - 1, True)) * u),
        ms.UnsupportedTermError,
        "Piecewise has no Taylor series",
    ),
    "root of a square": (lambda: one(u + sp.sqrt(u**2) * u), ms.UnsupportedTermError, "branch point.*small=epsilon"),
    "root of a sum of squares": (
        lambda: one(u + sp.sqrt(u**2 + u.diff(t) ** 2) * u),
        ms.UnsupportedTermError,
        "branch point.*small=epsilon",
    ),
    "floor": (lambda: one(u + u * sp.floor(u)), ms.UnsupportedTermError, "floor has no Taylor series"),
    "root": (lambda: one(u + sp.sqrt(u)), ms.UnsupportedTermError, r"sqrt\(u\(t\)\): the power 1/2 .*branch point"),
    "contact": (lambda: one(u + u ** sp.Rational(3, 2)), ms.UnsupportedTermError, "power 3/2 .*branch point"),
    "logarithm": (lambda: one(u + sp.log(u)), ms.UnsupportedTermError, r"log\(u\(t\)\).*branch point"),
    "negative root": (lambda: one(u + sp.sqrt(u - 1)), ms.UnsupportedTermError, "negative number -1 is complex"),
    "pole": (lambda: one(u + 1 / u), ms.UnsupportedTermError, r"1/u\(t\): its denominator vanishes.*about"),
    "pole of a function": (lambda: one(u + sp.cot(u)), ms.UnsupportedTermError, "singular"),
    "undefined": (lambda: one(u + sp.Function("q")(u)), ms.UnsupportedTermError, r"q is undefined.*Taylor terms"),
    "unstable": (lambda: one(-sp.sin(u)), ms.ProblemError, "squared frequency.*-1, not positive.*unstable"),
    "no stiffness": (lambda: one(sp.sin(u) - u), ms.ProblemError, "zero frequency.*pull-in"),
    "pull-in": (lambda: one(u - V**2 / (1 - u) ** 2, about={u: sp.Rational(1, 3)}), ms.ProblemError, "pull-in"),
    "past pull-in": (
        lambda: one(u - V**2 / (1 - u) ** 2, about={u: sp.Rational(2, 5)}),
        ms.ProblemError,
        "squared frequency.*-1/3, not positive",
    ),
    "no load balances": (
        lambda: one(u - V**2 / (1 - u) ** 2, about={u: -sp.Rational(2, 5)}),
        ms.ProblemError,
        r"needs V\*\*2 = -98/125",
    ),
    "not at rest": (lambda: plate(about={u: g / 2}), ms.ProblemError, "is no state of rest: the force"),
    "nothing to eliminate": (
        lambda: one(u - sp.Rational(1, 10) / (1 - u) ** 2, about={u: u_s}),
        ms.ProblemError,
        "none can be eliminated.*symbol in place of a number",
    ),
    "about a stranger": (lambda: one(sp.sin(u), about={v: u_s}), ms.ProblemError, "expected one of the unknowns"),
    "about a string": (lambda: one(sp.sin(u), about={u: "u_s"}), ms.ProblemError, "expected a SymPy expression"),
    "about a moving place": (lambda: one(sp.sin(u), about={u: t}), ms.ProblemError, "a state of rest is constant"),
    "about alone": (lambda: one(sp.sin(u), about=u_s), ms.ProblemError, "expected a mapping"),
}


@pytest.mark.parametrize("name", REFUSED)
def test_refused_with_a_remedy(name):
    build, kind, message = REFUSED[name]
    with pytest.raises(kind, match=f"(?s){message}"):
        build()


# Finding states of rest


def test_states_of_a_rational_force_are_exact():
    equation = u.diff(t, 2) + u - V**2 / (1 - u) ** 2
    states = ms.states_of_rest(equation, u, {V: sp.sqrt(2) / 4})
    assert [s.position[u] for s in states] == [(3 - sp.sqrt(5)) / 4, sp.Rational(1, 2), (3 + sp.sqrt(5)) / 4]
    assert [s.stable for s in states] == [True, False, True]
    assert all(s.exact for s in states)


def test_a_state_found_is_the_state_of_the_expansion():
    """V given: u_s by `states_of_rest`, the frequency by the expansion about u_s."""
    equation = u.diff(t, 2) + k * u - V**2 / (g - u) ** 2
    state = ms.states_of_rest(equation, u, {k: 2, g: 1, V: sp.Rational(3, 10)})[0]
    frequency = ms.expand(plate(about={u: u_s}), 2).frequency_to_numpy()
    square = frequency.bind(k=2, g=1, u_s=float(state.position[u]), V=0.3)(0.0, [0.0, 0.0]) ** 2
    assert square == pytest.approx(float(state.squared_frequencies[0]), rel=1e-12)


def test_states_with_symbols():
    (state,) = ms.states_of_rest(m * u.diff(t, 2) + k * u - m * g, u)
    assert (state.position[u], state.squared_frequencies, state.stable) == (g * m / k, (k / m,), True)


def test_states_by_search():
    states = ms.states_of_rest(u.diff(t, 2) + sp.sin(u) - T, u, {"T": sp.Rational(1, 2)}, start={u: 2.5})
    assert abs(states[0].position[u] - 5 * sp.pi / 6) < 1e-25
    assert states[0].stable is False


def test_several_unknowns_by_search():
    equations = [u.diff(t, 2) + 2 * u - sp.cos(v), 2 * v.diff(t, 2) + v + u**2]
    (state,) = ms.states_of_rest(equations, [u, v])
    x, y = state.position[u], state.position[v]
    assert abs(2 * x - sp.cos(y)) < 1e-25
    assert abs(y + x**2) < 1e-25
    assert len(state.squared_frequencies) == 2
    assert state.stable


NO_STATES = {
    "none": (u.diff(t, 2) + u**2 + 1, {}, "no real zero"),
    "constant": (u.diff(t, 2) + 1 + u - u, {}, "does not vanish anywhere"),
    "high degree": (u.diff(t, 2) + k * u - V**2 / (g - u) ** 2, {}, "of degree 3: give values"),
    "symbols in a search": (u.diff(t, 2) + sp.sin(u) - T, {}, "give values for T"),
    "unknown name": (u.diff(t, 2) + u, {"T": 1}, "expected numbers for some of"),
    "nowhere": (u.diff(t, 2) + sp.exp(u), {}, "another start"),
}


@pytest.mark.parametrize("name", NO_STATES)
def test_states_of_rest_refuse(name):
    equation, values, message = NO_STATES[name]
    with pytest.raises(ms.EvaluationError, match=message):
        ms.states_of_rest(equation, u, values)
