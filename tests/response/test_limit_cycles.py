"""Limit cycles from an expansion: exact statements, stability, several cycles, and what is refused."""

from __future__ import annotations

import numpy as np
import pytest
import sympy as sp
from published.integration import slope

import multiscale as ms

t = sp.Symbol("t", real=True)
eps, beta, gamma, w0 = sp.symbols("epsilon beta gamma omega_0", positive=True)
alpha = sp.Symbol("alpha", real=True)
u = sp.Function("u")(t)
v = sp.Function("v")(t)
du, ddu = u.diff(t), u.diff(t, 2)


VALUES = {alpha: sp.Rational(2, 3), beta: 2, gamma: 3, w0: sp.Rational(5, 4)}


def expanded(equation, order, **options):
    return ms.expand(ms.Problem(equation, u, small=eps, **options), order)


def residue(expansion, cycle, powers):
    """Coefficients of da/dt on the cycle, which must vanish."""
    (a,) = expansion.symbols.a
    rate = sp.expand(expansion.slow_flow.polar[a].subs(VALUES).subs(a, cycle.amplitude.subs(VALUES)))
    return [sp.radsimp(rate.coeff(eps, n)) for n in powers]


EQUATIONS = {
    "van der Pol": ddu + u + eps * (u**2 - 1) * du,
    "Rayleigh": ddu + u + eps * (du**2 / 3 - 1) * du,
    "irrational amplitude": ddu + u + eps * (u**2 - 2) * du,
    "symbolic": ddu + w0**2 * u + eps * (beta * u**2 - gamma) * du + eps * alpha * u**3,
    "quadratic": ddu + u + eps * u**2 + eps * (u**2 - 1) * du,
    "damping at the second order": ddu + u + eps * u**2 + eps**2 * (u**2 - 1) * du,
    "inertia": ddu + u + eps * (u**2 - 1) * du + eps * u**2 * ddu / 3,
}


@pytest.mark.parametrize("name", EQUATIONS)
def test_the_slow_flow_vanishes_on_the_cycle(name):
    expansion = expanded(EQUATIONS[name], 4)
    (cycle,) = ms.limit_cycles(expansion)
    assert residue(expansion, cycle, range(5)) == [0] * 5
    assert cycle.stable


@pytest.mark.parametrize("name", [n for n in EQUATIONS if n != "symbolic"])
def test_a_wrong_amplitude_is_seen(name):
    """Negative control of the residue."""
    expansion = expanded(EQUATIONS[name], 4)
    (cycle,) = ms.limit_cycles(expansion)
    wrong = ms.LimitCycle(cycle.amplitude + eps**2 / 7, cycle.frequency, True, cycle.exponent)
    assert any(residue(expansion, wrong, range(5)))


@pytest.mark.parametrize("name", EQUATIONS)
def test_the_frequency_is_that_on_the_cycle(name):
    expansion = expanded(EQUATIONS[name], 4)
    (cycle,) = ms.limit_cycles(expansion)
    (a,) = expansion.symbols.a
    wanted = expansion.frequency().subs(VALUES).subs(a, cycle.amplitude.subs(VALUES))
    difference = sp.expand(wanted - cycle.frequency.subs(VALUES))
    assert [sp.radsimp(difference.coeff(eps, n)) for n in range(5)] == [0] * 5


def test_two_cycles():
    """u'(1 − u² + u⁴/10): the inner cycle repels, the outer attracts; leading amplitudes a² = 2(5 ∓ √5)."""
    inner, outer = ms.limit_cycles(expanded(ddu + u + eps * (1 - u**2 + u**4 / 10) * du, 3))
    assert inner.amplitude.subs(eps, 0) ** 2 == 10 - 2 * sp.sqrt(5)
    assert outer.amplitude.subs(eps, 0) ** 2 == 10 + 2 * sp.sqrt(5)
    assert (inner.stable, outer.stable) == (False, True)


def test_three_cycles_without_closed_form():
    """Cubic leading condition with roots ρ = 1/2, 1, 2 in another scale, and decimal coefficients."""
    rho = sp.Symbol("rho")
    # ⟨u^{2m} u'⟩ of the fundamental: coefficients of ρ^m in a'/a are −c_m binomial(2m, m)/(2(m + 1)).
    wanted = sp.Poly((rho - sp.Rational(1, 2)) * (rho - 1) * (rho - 2) - sp.Rational(1, 50), rho)
    shares = [c * 2 * (m + 1) / sp.binomial(2 * m, m) for (m,), c in wanted.terms()]
    force = sum(-c * u ** (2 * m) for c, ((m,), _) in zip(shares, wanted.terms(), strict=True))
    cycles = ms.limit_cycles(expanded(ddu + u + eps * force * du, 2))
    found = [float(c.amplitude.subs(eps, 0)) ** 2 / 4 for c in cycles]
    assert found == pytest.approx(sorted(map(float, np.roots([float(c) for c in wanted.all_coeffs()]))), rel=1e-10)
    assert [c.stable for c in cycles] == [False, True, False]


def test_symbolic_sign_is_left_open():
    (cycle,) = ms.limit_cycles(expanded(ddu + u + eps * (alpha * u**2 - alpha) * du, 1))
    assert cycle.stable is None
    assert cycle.exponent == -alpha * eps
    (cycle,) = ms.limit_cycles(expanded(ddu + u + eps * (alpha * u**2 - alpha) * du, 1), {alpha: -2})
    assert cycle.stable is False


def test_values_by_name_and_by_symbol():
    expansion = expanded(EQUATIONS["symbolic"], 3)
    values = {alpha: sp.Rational(1, 3), beta: 2, gamma: 5, w0: sp.Rational(3, 2)}
    (symbolic,) = ms.limit_cycles(expansion)
    (by_symbol,) = ms.limit_cycles(expansion, values)
    (by_name,) = ms.limit_cycles(expansion, {s.name: value for s, value in values.items()})
    assert by_symbol == by_name
    for x, y in ((symbolic.amplitude, by_symbol.amplitude), (symbolic.frequency, by_symbol.frequency)):
        assert sp.simplify(sp.expand(x.subs(values) - y)) == 0


def test_decimals():
    (cycle,) = ms.limit_cycles(expanded(ddu + u + eps * (beta * u**2 - 1) * du, 2), {beta: 0.25})
    assert float(cycle.amplitude.subs(eps, 0)) == pytest.approx(4)


def test_only_growth_has_no_cycle():
    assert ms.limit_cycles(expanded(ddu + u - eps * du + eps * u**3, 2)) == ()
    assert ms.limit_cycles(expanded(ddu + u + eps * (u**2 + 1) * du, 2)) == ()


def test_against_integration():
    """Period of the integrated cycle: the frequency of order N is right to O(ε^{N+1}), and a changed term is seen."""
    integrate = pytest.importorskip("scipy.integrate")
    (cycle,) = ms.limit_cycles(expanded(ddu + u + eps * (u**2 - 1) * du + eps * u**3 / 2, 3))
    small = (0.16, 0.12, 0.09, 0.0675)
    errors, controls = [], []
    for e in small:

        def rhs(_, y, e=e):
            return [y[1], -y[0] - e * (y[0] ** 2 - 1) * y[1] - e * y[0] ** 3 / 2]

        def rising(_, y):
            return y[0]

        rising.direction = 1
        found = integrate.solve_ivp(
            rhs, (0, 28 / e), [2.0, 0.0], events=rising, method="DOP853", rtol=1e-12, atol=1e-13, max_step=0.1
        )
        times = found.t_events[0][-9:]
        frequency = 2 * np.pi * 8 / (times[-1] - times[0])
        errors.append(abs(frequency - float(cycle.frequency.subs(eps, e))))
        controls.append(abs(frequency - float((cycle.frequency + eps**3 / 10).subs(eps, e))))
    assert slope(small, errors) > 3.6
    assert slope(small, controls) < 3.4
    assert max(errors) < 5 * max(small) ** 4


@pytest.mark.parametrize(
    ("equation", "parameters", "error", "message"),
    [
        (ddu + u + eps * u**3, None, ms.ProblemError, "every motion is periodic"),
        (ddu + u + eps * (1 - u**2 + u**4 / 8) * du, None, ms.ProblemError, "repeated root.*Change a parameter"),
        (ddu + u + eps * u**3 + eps * sp.cos(t), None, ms.UnsupportedTermError, "depends on time"),
        (ddu + u + eps * (u**2 - beta) * du, {"delta": 1}, ms.EvaluationError, "'delta' is no parameter.*beta"),
        (ddu + u + eps * (u**2 - beta) * du, {eps: 1}, ms.EvaluationError, "series in epsilon"),
        (
            ddu + u + eps * (beta - u**2 + u**4 - gamma * u**6) * du,
            None,
            ms.UnsupportedTermError,
            "no closed form: give `parameters` values for beta, gamma",
        ),
    ],
)
def test_refusals(equation, parameters, error, message):
    expansion = expanded(equation, 1)
    with pytest.raises(error, match=message):
        ms.limit_cycles(expansion, parameters)


def test_several_unknowns_are_refused():
    equations = [ddu + u + eps * (u**2 - 1) * du + eps * v, v.diff(t, 2) + 2 * v]
    expansion = ms.expand(ms.Problem(equations, [u, v], small=eps), 1)
    with pytest.raises(ms.UnsupportedTermError, match=r"2 modes.*limit cycles are given for one mode"):
        ms.limit_cycles(expansion)


def test_a_problem_is_not_an_expansion():
    with pytest.raises(ms.ProblemError, match=r"multiscale\.expand"):
        ms.limit_cycles(ms.Problem(EQUATIONS["van der Pol"], u, small=eps))


def test_text_is_never_read_as_a_value():
    """A string would be evaluated by SymPy if it were let through."""
    u = sp.Function("u")(t)
    nu = sp.Symbol("nu", positive=True)
    result = ms.expand(ms.Problem(u.diff(t, 2) + u + eps * nu * (u**2 - 1) * u.diff(t), u, small=eps), 2)
    with pytest.raises(ms.EvaluationError, match="expected a number or a SymPy expression"):
        ms.limit_cycles(result, {nu: "__import__('os').getcwd()"})
    conservative = ms.Problem(u.diff(t, 2) + u + eps * u**3, u, small=eps)
    with pytest.raises(ms.ProblemError, match="expected a positive number or a symbol"):
        ms.periodic_series(conservative, 2, amplitude="__import__('os').getcwd()")
