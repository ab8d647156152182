"""Generated code for forces that are not polynomial: shapes, derivatives, rest, special functions, U_1."""

from __future__ import annotations

import math

import numpy as np
import pytest
import sympy as sp

import multiscale as ms
from multiscale.codegen import runtime

t = sp.Symbol("t", real=True)
eps, w, g, k, p, Omega = sp.symbols("epsilon omega_0 g k p Omega", positive=True)
s = sp.Symbol("sigma", real=True)
u = sp.Function("u")(t)
v = u.diff(t)
VALUES = {"epsilon": 0.1, "omega_0": 1.7, "g": 0.6, "k": 0.8, "p": 1.3}

FORCES = {
    "drag": sp.Abs(v) * v,
    "Coulomb": sp.sign(v),
    "power": sp.Abs(v) ** p * sp.sign(v),
    "sine": sp.sin(k * u),
    "clearance": sp.Max(u - g, 0),
    "belt": sp.sign(v - g),
    "tanh": sp.tanh(v / g),
    "rational": u / (1 + k * u**2),
    "arc tangent": sp.atan(k * u) + sp.atan(v),
    "mixed kink": sp.Max(u - g * v, 0),
    "moving jump": sp.Heaviside(u - g) * sp.tanh(u),
    "Stribeck": sp.sign(v) / (1 + sp.Abs(v) / g),
}


def function(name, form="cartesian", **options):
    problem = ms.Problem(u.diff(t, 2) + w**2 * u + eps * FORCES[name], u, small=eps)
    return ms.expand(problem, 1).slow_flow.to_numpy(form, **options)


def values(f):
    return tuple(VALUES[name] for name in f.parameters)


@pytest.mark.parametrize("name", FORCES)
def test_arrays_are_the_states_one_by_one(name):
    f = function(name)
    states = np.random.default_rng(1).normal(size=(2, 3, 4))
    together = f(0.0, states, *values(f))
    assert together.shape == (2, 3, 4)
    single = [[f(0.0, states[:, i, j], *values(f)) for j in range(4)] for i in range(3)]
    assert np.allclose(together, np.moveaxis(single, -1, 0), rtol=1e-12, atol=1e-16)
    several = [np.array([[x], [1.1 * x]]) for x in values(f)]
    assert f(0.0, [0.3, 0.4], *several).shape == (2, 2, 1)


@pytest.mark.parametrize("name", FORCES)
@pytest.mark.parametrize("wrt", ["state", "parameters"])
def test_derivatives_by_differences(name, wrt):
    f, derivative = function(name), function(name, wrt=wrt)
    y, x, h = np.array([1.2, -0.3]), np.array(values(f)), 1e-6
    if wrt == "state":
        expected = [(f(0.0, y + h * e, *x) - f(0.0, y - h * e, *x)) / (2 * h) for e in np.eye(2)]
    else:
        expected = [(f(0.0, y, *(x + h * e)) - f(0.0, y, *(x - h * e))) / (2 * h) for e in np.eye(len(x))]
    assert np.abs(derivative(0.0, y, *x) - np.array(expected).T).max() < 1e-9


@pytest.mark.parametrize("name", FORCES)
def test_rest_is_regular(name):
    f, derivative = function(name), function(name, wrt="state")
    assert f(0.0, [0.0, 0.0], *values(f)).tolist() == [0.0, 0.0]
    assert np.isfinite(derivative(0.0, [0.0, 0.0], *values(f))).all()
    continuous = name in ("drag", "sine", "clearance", "belt", "tanh", "rational", "arc tangent")
    if continuous:
        at_rest, near = (derivative(0.0, [a, 0.0], *values(f)) for a in (0.0, 1e-7))
        assert np.allclose(at_rest, near, atol=1e-3 * VALUES["epsilon"])


@pytest.mark.parametrize("name", FORCES)
def test_forms_agree(name):
    y = np.array([0.9, -0.5])
    cartesian, polar, amplitude = (function(name, form) for form in ("cartesian", "polar", "complex"))
    rate = cartesian(0.0, y, *values(cartesian))
    a, beta = np.hypot(*y), np.arctan2(-y[1], y[0])
    growth, turn = polar(0.0, [a, beta], *values(polar))
    (change,) = amplitude(0.0, [(y[0] - 1j * y[1]) / 2], *values(amplitude))
    assert np.allclose([2 * change.real, -2 * change.imag], rate, rtol=1e-12, atol=1e-16)
    assert np.allclose([growth, turn], [y @ rate / a, (y[1] * rate[0] - y[0] * rate[1]) / a**2], atol=1e-15)


@pytest.mark.parametrize("name", ["rational", "clearance", "sine"])
def test_symbolic_result_has_the_same_value(name):
    problem = ms.Problem(u.diff(t, 2) + w**2 * u + eps * FORCES[name], u, small=eps)
    expansion = ms.expand(problem, 1)
    numbers = {x: sp.Rational(str(VALUES[x.name])) for x in (eps, w, g, k)}
    numbers[expansion.symbols.a[0]] = sp.Rational(6, 5)
    found = [float(x.subs(numbers).evalf(15)) for x in expansion.slow_flow.polar.values()]
    f = expansion.slow_flow.to_numpy("polar")
    assert np.allclose(found, f(0.0, [1.2, 0.0], *values(f)), rtol=1e-12, atol=1e-14)


def test_corrections_with_harmonics_solve_the_equation_better():
    """|u'|u' with harmonics to K: the part of the level-1 equation left over falls as K^{−2}."""
    left = []
    for highest in (3, 7, 15):
        problem = ms.Problem(u.diff(t, 2) + u + eps * sp.Abs(v) * v, u, small=eps, harmonics=highest)
        expansion = ms.expand(problem, 1)
        assert any(f"0 … {highest}" in x for x in expansion.warnings)
        (A,) = expansion.symbols.A
        T0 = expansion.symbols.T[0]
        U1 = sp.lambdify(T0, expansion.levels[1].corrections[u].subs(A, sp.Rational(1, 2)), "numpy")
        x = np.linspace(0, 2 * np.pi, 400)
        h = 1e-4
        second = (U1(x + h) - 2 * U1(x) + U1(x - h)).real / h**2
        speed = -np.sin(x)
        # U_1'' + U_1 = −|v|v + its fundamental part, 8/(3π) v at unit amplitude.
        residual = second + U1(x).real + np.abs(speed) * speed - 8 / (3 * np.pi) * speed
        left.append(np.abs(residual).max())
    assert left[0] > 3 * left[1] > 9 * left[2]


def test_without_harmonics_the_remark_says_what_is_missing():
    expansion = ms.expand(ms.Problem(u.diff(t, 2) + u + eps * sp.Abs(v) * v, u, small=eps), 1)
    assert expansion.levels[1].corrections[u] == 0
    assert any("harmonics=K" in x for x in expansion.warnings)


def test_a_parametric_drive_times_a_force_meets_the_second_harmonic():
    """ε cos(Ωt)|u|, Ω near 2ω: the second harmonic of |u| (4/(3π)·½·a) acts through the drive, and so does its mean."""
    problem = ms.Problem(
        u.diff(t, 2) + w**2 * u + eps * sp.cos(Omega * t) * sp.Abs(u), u, small=eps, resonances={Omega: w + eps * s}
    )
    polar = ms.expand(problem, 1).slow_flow
    f = polar.to_numpy().bind(epsilon=0.1, omega_0=1.7, sigma=0.0)
    y = np.array([0.8, 0.5])
    theta = 2 * np.pi * np.arange(100_000) / 100_000
    force = np.cos(theta) * np.abs(y[0] * np.cos(theta) + y[1] * np.sin(theta))
    change = 0.1 * 1j / (2 * 1.7) * np.mean(force * np.exp(-1j * theta))
    assert np.allclose(f(0.0, y), [2 * change.real, -2 * change.imag], rtol=0, atol=1e-9)


@pytest.mark.parametrize("order", [0, 1, 2, 7])
def test_bessel_functions(order):
    special = pytest.importorskip("scipy.special")
    x = np.concatenate([np.linspace(-40, 40, 301), [1e-12, 1e-300]])
    assert np.abs(runtime.besselj(x, order) - special.jv(order, x)).max() < 1e-14
    assert np.abs((runtime.besseli(x, order) - special.iv(order, x)) / special.iv(0, x)).max() < 1e-14


def test_digamma():
    special = pytest.importorskip("scipy.special")
    x = np.linspace(0.02, 40, 500)
    assert np.abs(runtime.digamma(x) - special.digamma(x)).max() < 1e-12


def test_averages_are_right_to_rounding():
    a = np.array([0.2, 1.0, 3.0])
    found = runtime.arcs(lambda x, b: np.abs(b * np.sin(x)) ** 0.5, "", (0.0, math.pi), a)
    expected = 2 * math.sqrt(math.pi) * math.gamma(0.75) / math.gamma(1.25) * np.sqrt(a)
    assert np.abs(found / expected - 1).max() < 1e-13
    # Kinks may come in any order and any turn.
    same = runtime.arcs(lambda x, b: np.abs(b * np.sin(x)) ** 0.5, "", (7 * math.pi, -2 * math.pi), a)
    assert np.abs(same / expected - 1).max() < 1e-12


def test_a_jump_that_is_not_declared_is_found():
    with pytest.raises(runtime.IntegralError, match=r"F\(u\).*does not converge"):
        runtime.circle(lambda x, b: np.sign(np.cos(x) - b), "F(u)", 0.3)


@pytest.mark.parametrize(
    "waves",
    [
        [0.3, 1.0, 0.2, -0.7, 0.4],
        [0.3, 1.0, 0.2, 0.0, 0.0],
        [0.0, 0.0, 0.0, 0.5, 0.1],
        [-0.2, 0.1, 0.3, 0.2, 0.1, -1.0, 0.6],
    ],
)
def test_zeros_of_a_sum_of_waves(waves):
    """Every change of sign on a fine grid is next to one of the angles, where the sum vanishes to rounding."""

    def h(x):
        rows = zip(waves[1::2], waves[2::2], strict=True)
        return waves[0] + sum(a * np.cos(n * x) + b * np.sin(n * x) for n, (a, b) in enumerate(rows, start=1))

    angles = np.array([runtime.wave_zero(j, *waves) for j in range(len(waves) - 1)]) % (2 * np.pi)
    grid = np.linspace(0, 2 * np.pi, 2001)
    changes = grid[np.flatnonzero(np.diff(np.sign(h(grid))))]
    assert len(changes) >= 2
    for x in changes:
        nearest = angles[np.argmin(abs(angles - x - 0.0015))]
        assert abs(nearest - x) < 0.004
        assert abs(h(nearest)) < 1e-13
