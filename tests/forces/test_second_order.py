"""Homogeneous forces to second order: exact frequencies, direct integration, the stated tail, refusals."""

from __future__ import annotations

import mpmath
import numpy as np
import pytest
import sympy as sp

import multiscale as ms
from tests.published.integration import integrate, slope

t = sp.Symbol("t", real=True)
eps, w, q = sp.symbols("epsilon omega_0 q", positive=True)
u = sp.Function("u")(t)
v = u.diff(t)
THREE_HALVES = sp.Rational(3, 2)


def expanded(force: sp.Expr, order: int = 2, omega: sp.Expr | int = w, **options) -> ms.Expansion:
    return ms.expand(ms.Problem(u.diff(t, 2) + omega**2 * u + eps * force, u, small=eps, **options), order)


def shift(expansion: ms.Expansion) -> sp.Expr:
    """The coefficient of ε² in the frequency at unit amplitude."""
    return expansion.frequency_corrections()[2].subs(expansion.symbols.a[0], 1)


def test_both_representations_agree():
    pytest.importorskip("flint")
    problem = ms.Problem(u.diff(t, 2) + w**2 * u + eps * sp.Abs(v) * v, u, small=eps, harmonics=9)
    assert ms.expand(problem, 2, representation="sympy").equals(ms.expand(problem, 2, representation="flint"))


@pytest.mark.parametrize("power", [2, THREE_HALVES], ids=str)
def test_conservative_frequency_against_the_energy_integral(power):
    """u'' + u + ε|u|^p sgn u = 0, peak from the solution: the frequency is right to O(ε³)."""
    force = sp.Abs(u) ** power * sp.sign(u)
    expansion = expanded(force, omega=1)
    a, beta = expansion.symbols.a[0], expansion.symbols.beta[0]
    peak = expansion.solution(order=1)[u].subs({t: 0, beta: 0, a: 1})
    frequency = expansion.frequency().subs(a, 1)
    p = mpmath.mpf(str(float(power)))

    def exact(height: float, small: float) -> float:
        def speed(s):
            x = height * mpmath.sin(s)
            rest = (height ** (p + 1) - x ** (p + 1)) / (height**2 - x**2) if x < height else (p + 1) / 2
            return 1 / mpmath.sqrt(1 + 2 * small * rest / (p + 1))

        return float(mpmath.pi / 2 / mpmath.quad(speed, [0, mpmath.pi / 4, mpmath.pi / 2]))

    smalls = [0.2, 0.1, 0.05]
    errors, controls = [], []
    for small in smalls:
        reference = exact(float(peak.subs(eps, small)), small)
        errors.append(abs(float(frequency.subs(eps, small)) - reference))
        controls.append(abs(float(frequency.subs(eps, small)) + 0.02 * small**2 - reference))
    assert slope(smalls, errors) > 2.7
    assert errors[-1] < 0.3 * smalls[-1] ** 3
    assert slope(smalls, controls) < 2.3


def test_quadratic_damping_against_direct_integration():
    """u'' + u + ε|u'|u' = 0 on t ~ 1/ε: the motion with U_0 + εU_1 and D_1, D_2 is right to O(ε²).

    Without D_2, the frequency shift of a force that dissipates only, the error is O(ε).
    """
    expansion = expanded(sp.Abs(v) * v, omega=1)
    rhs, motion = expansion.slow_flow.to_numpy(), expansion.to_numpy()
    first = expanded(sp.Abs(v) * v, 1, omega=1).slow_flow.to_numpy()
    velocity = expansion.to_numpy(derivative=1)
    smalls, errors, controls = [0.2, 0.1, 0.05], [], []
    for small in smalls:
        times = np.linspace(0, 3 / small, 400)
        start = np.array([1.5, 0.0])
        initial = [motion(0.0, start, small)[0], velocity(0.0, start, small)[0]]
        exact = integrate(lambda _, y, e=small: [y[1], -y[0] - e * abs(y[1]) * y[1]], initial, times)[0]
        found = []
        for flow in (rhs, first):
            state = integrate(flow.bind(epsilon=small), start, times)
            found.append(np.abs(motion(times, state, small)[0] - exact).max())
        errors.append(found[0])
        controls.append(found[1])
    assert slope(smalls, errors) > 1.8
    assert slope(smalls, controls) < 1.4
    assert errors[-1] < controls[-1] / 3


@pytest.mark.slow
@pytest.mark.parametrize(
    "force", [sp.Abs(v) * v, sp.Abs(u) * u, sp.Abs(v) ** THREE_HALVES * sp.sign(v), sp.Abs(v) * v * u**2], ids=str
)
def test_what_is_left_out_is_below_the_stated_bound(force):
    """The bound is on D_2A; the frequency at a = 1 changes by twice as much at most."""
    longest = float(shift(expanded(force, omega=1, harmonics=41)))
    for highest in (3, 5, 9):
        expansion = expanded(force, omega=1, harmonics=highest)
        (remark,) = [x for x in expansion.warnings if "left-out harmonics" in x]
        bound = float(remark.split("below ")[1].split()[0].rstrip("."))
        left_out = abs(float(shift(expansion)) - longest)
        assert left_out < 2 * bound * 1.05
        # The bound is not idle: where all terms have one sign it is nearly met.
        assert left_out > 0.01 * bound


def test_symbolic_exponent_contains_the_numeric_one():
    symbolic = shift(expanded(sp.Abs(v) ** (1 + q) * sp.sign(v), harmonics=7))
    for value in (sp.Integer(1), sp.Rational(1, 2)):
        numeric = shift(expanded(sp.Abs(v) ** (1 + value) * sp.sign(v), harmonics=7))
        # At whole exponents the Gamma functions of the symbolic form have poles in denominators.
        got = sp.N(symbolic.subs({q: value + sp.Rational(1, 10**12), w: 2}), 30)
        assert abs(got / sp.N(numeric.subs(w, 2), 30) - 1) < 1e-10


def test_driven_and_with_a_polynomial_force():
    """Cross terms of drag, cubic stiffness and a resonant drive, against direct integration at one small value."""
    alpha, f, s, Omega = sp.symbols("alpha f sigma Omega", positive=True)
    equation = u.diff(t, 2) + u + eps * (sp.Abs(v) * v + alpha * u**3 - f * sp.cos(Omega * t))
    problem = ms.Problem(equation, u, small=eps, resonances={Omega: 1 + eps * s}, harmonics=11)
    smalls, errors = [0.1, 0.05, 0.025], []
    for small in smalls:
        values = {eps: small, alpha: 0.3, f: 0.5, s: 0.4}
        expansion = ms.expand(problem, 2)
        flow = expansion.slow_flow.to_numpy().bind(values)
        motion, velocity = expansion.to_numpy().bind(values), expansion.to_numpy(derivative=1).bind(values)
        times, start = np.linspace(0, 2 / small, 300), np.array([0.8, -0.3])
        drive = 1 + small * 0.4

        def rhs(x, y, e=small, drive=drive):
            return [y[1], -y[0] - e * (abs(y[1]) * y[1] + 0.3 * y[0] ** 3 - 0.5 * np.cos(drive * x))]

        initial = [motion(0.0, start)[0], velocity(0.0, start)[0]]
        exact = integrate(rhs, initial, times)[0]
        errors.append(np.abs(motion(times, integrate(flow, start, times))[0] - exact).max())
    assert slope(smalls, errors) > 1.8


REFUSED = {
    "Coulomb": (sp.sign(v), 2, {}, "jumps.*1/K"),
    "not homogeneous": (sp.sin(u), 2, {}, "homogeneous forces"),
    "clearance": (sp.Max(u - q, 0), 2, {}, "homogeneous forces"),
    "kink": (sp.Abs(u), 2, {}, "formal.*formal=True"),
    "unknown exponent": (sp.Abs(u) ** q * sp.sign(u), 2, {}, "once differentiable.*1 . q"),
    "third order": (sp.Abs(v) * v, 3, {}, "Use order=1 or 2"),
    "acceleration": (sp.Abs(u.diff(t, 2)) * u, 2, {}, "displacement and velocity"),
    "jump, even if formal": (sp.sign(v), 2, {"formal": True}, "jumps"),
}


@pytest.mark.parametrize("name", REFUSED)
def test_refused(name):
    force, order, options, message = REFUSED[name]
    with pytest.raises(ms.UnsupportedTermError, match=f"(?s){message}"):
        expanded(force, order, **options)


def test_a_kink_is_formal_and_says_so():
    expansion = expanded(sp.Abs(u), formal=True)
    assert any("Formal" in x for x in expansion.warnings)
    # The stiffness is 1 ± ε on the two sides, half a period on each: ω = 2/(1/√(1 + ε) + 1/√(1 − ε)).
    exact = sp.series(2 / (1 / sp.sqrt(1 + eps) + 1 / sp.sqrt(1 - eps)), eps, 0, 3).removeO().coeff(eps, 2)
    assert float(shift(expanded(sp.Abs(u), omega=1, formal=True, harmonics=41))) == pytest.approx(
        float(exact), abs=1e-6
    )


def test_extending_an_expansion():
    first = expanded(sp.Abs(v) * v, 1)
    assert ms.extend(first, 2).equals(expanded(sp.Abs(v) * v, 2))
