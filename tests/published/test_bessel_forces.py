"""Forces with Bessel coefficients, ε sin u and ε(e^u − 1 − u), against 50-digit quadrature.

Projection: NIST DLMF 10.9.2 and 10.32.3 give (1/2π)∫ sin(a cos θ) cos θ dθ = J_1(a) and the same with exp as I_1(a).
"""

from __future__ import annotations

import mpmath
import pytest
import sympy as sp

import multiscale as ms

t = sp.Symbol("t", real=True)
eps, w = sp.symbols("epsilon omega_0", positive=True)
u = sp.Function("u")(t)
FORCES = {
    "pendulum-like": (sp.sin(u), mpmath.sin, lambda a: eps * sp.besselj(1, a) / (a * w)),
    "exponential spring": (
        sp.exp(u) - 1 - u,
        lambda x: mpmath.exp(x) - 1 - x,
        lambda a: eps * (sp.besseli(1, a) / (a * w) - 1 / (2 * w)),
    ),
}


@pytest.fixture(params=FORCES)
def case(request):
    force, function, value = FORCES[request.param]
    return ms.expand(ms.Problem(u.diff(t, 2) + w**2 * u + eps * force, u, small=eps), 1), function, value


def test_value(case):
    expansion, _, value = case
    (a,) = expansion.symbols.a
    assert expansion.slow_flow.polar[a] == 0
    assert sp.expand(expansion.frequency_corrections()[1] * eps - value(a)) == 0


@pytest.mark.parametrize("amplitude", ["0.3", "1.7", "4.1"])
def test_fifty_digits(case, amplitude: str):
    expansion, function, _ = case
    with mpmath.workdps(60):
        a = mpmath.mpf(amplitude)
        mean = mpmath.quad(lambda x: function(a * mpmath.cos(x)) * mpmath.cos(x), mpmath.linspace(0, mpmath.pi, 9))
        expected = mean / mpmath.pi / a
        got = expansion.frequency_corrections()[1].subs({expansion.symbols.a[0]: sp.Rational(amplitude), w: 1})
        assert abs(mpmath.mpf(str(sp.N(got, 55))) - expected) < mpmath.mpf(10) ** -50


def test_generated_code(case):
    expansion, _, _ = case
    function = expansion.frequency_to_numpy().bind(epsilon=0.3, omega_0=1.4)
    symbolic = expansion.frequency().subs({eps: sp.Rational(3, 10), w: sp.Rational(7, 5)})
    for a in (1e-9, 1e-3, 0.3, 1.7, 4.1):
        exact = float(sp.N(symbolic.subs(expansion.symbols.a[0], sp.Rational(str(a))), 40))
        assert function(0.0, [0.0, a]) == pytest.approx(exact, rel=1e-14)
