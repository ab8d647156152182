"""Steady states with forces that are not polynomial: closed forms, an exact solution, and the equation itself."""

from __future__ import annotations

from functools import cache

import numpy as np
import pytest
import sympy as sp

import multiscale as ms

t = sp.Symbol("t", real=True)
eps, mu, alpha, c, k, g, f, h, Om = sp.symbols("epsilon mu alpha c k g f h Omega", positive=True)
sigma = sp.Symbol("sigma", real=True)
u = sp.Function("u")(t)
v = u.diff(t)
DRAG = c * sp.Abs(v) * v + 2 * mu * v + alpha * u**3
DRY = c * sp.sign(v)
DRY_AND_VISCOUS = DRY + 2 * mu * v
CLEARANCE = k * sp.Max(u - g, 0) + 2 * mu * v


@cache
def driven(force: sp.Expr, order: int = 1) -> ms.Expansion:
    equation = u.diff(t, 2) + u + eps * (force - f * sp.cos(Om * t))
    return ms.expand(ms.Problem(equation, u, small=eps, resonances={Om: 1 + eps * sigma}), order)


def amplitudes(states) -> list[float]:
    return [s.amplitudes[0] for s in states]


@pytest.mark.parametrize("detuning", [-0.5, 0.3, 1.0, 1.7, 2.5])
@pytest.mark.parametrize("drag", [0.01, 0.2, 1.0])
def test_drag_has_the_roots_of_its_polynomial(drag, detuning):
    """a²[(μ + 4ca/(3π))² + (σ − 3αa²/8)²] = f²/4."""
    values = {"mu": 0.05, "alpha": 1.0, "f": 1.0}
    damping = np.polynomial.Polynomial([0.05, 4 * drag / (3 * np.pi)])
    stiffness = np.polynomial.Polynomial([detuning, 0, -3 / 8])
    a = np.polynomial.Polynomial([0, 1])
    roots = (a**2 * (damping**2 + stiffness**2) - 0.25).roots()
    expected = sorted(roots.real[(abs(roots.imag) < 1e-9) & (roots.real > 0)])
    states = ms.equilibria(driven(DRAG), values | {"epsilon": 0.1, "c": drag, "sigma": detuning})
    assert amplitudes(states) == pytest.approx(expected, rel=1e-11)
    assert not any(s.complete for s in states)
    assert [s.kind for s in states] == (["stable", "saddle", "stable"] if len(states) == 3 else ["stable"])


def test_the_phase_of_drag_alone_at_resonance():
    """σ = 0: a = √(3πf/(8c)), the motion a quarter of a period behind the drive."""
    (state,) = ms.equilibria(driven(c * sp.Abs(v) * v), {"epsilon": 0.1, "c": 0.3, "f": 0.4, "sigma": 0.0})
    assert state.amplitudes[0] == pytest.approx(np.sqrt(3 * np.pi * 0.4 / (8 * 0.3)), rel=1e-12)
    assert state.phases[0] == pytest.approx(np.pi / 2, rel=1e-12)


def test_folds_of_drag_bound_the_range_of_three_states():
    values = {"epsilon": 0.1, "mu": 0.05, "alpha": 1.0, "c": 0.05, "f": 0.6}
    response = ms.frequency_response(driven(DRAG), values, sweep={sigma: np.linspace(-1, 4, 51)})
    assert len(response.branches) == 1
    assert len(response.folds) == 2
    low, high = (x.parameter for x in response.folds)
    for at, count in ((low - 1e-6, 1), (low + 1e-6, 3), (high - 1e-6, 3), (high + 1e-6, 1)):
        assert len(ms.equilibria(driven(DRAG), values | {"sigma": at})) == count
    assert not response.complete


def periodic(equation, start, period):
    """(start of the periodic motion near a guess, its multipliers), by shooting with differences."""
    solve_ivp = pytest.importorskip("scipy.integrate").solve_ivp

    def end(y):
        done = solve_ivp(equation, (0, period), y, method="DOP853", rtol=1e-11, atol=1e-12, max_step=period / 60)
        return done.y[:, -1]

    y = np.array(start, dtype=float)
    for _ in range(12):
        matrix = np.array([(end(y + 1e-5 * e) - end(y - 1e-5 * e)) / 2e-5 for e in np.eye(2)]).T
        step = np.linalg.solve(matrix - np.eye(2), end(y) - y)
        y = y - step
        if np.max(abs(step)) < 1e-6:
            return y, np.linalg.eigvals(matrix)
    raise RuntimeError("no periodic motion found")


@pytest.mark.parametrize(("force", "law", "values"), [
    (DRAG, lambda x, y, p: p["c"] * abs(y) * y + 2 * p["mu"] * y + p["alpha"] * x**3,
     {"c": 0.1, "mu": 0.05, "alpha": 1.0, "f": 0.8, "sigma": 1.2}),
    (CLEARANCE, lambda x, y, p: p["k"] * max(x - p["g"], 0.0) + 2 * p["mu"] * y,
     {"k": 1.0, "g": 1.0, "mu": 0.02, "f": 0.2, "sigma": 0.13}),
])  # fmt: skip
def test_every_branch_is_a_motion_of_the_equation(force, law, values):
    """The distance of U_0 falls like ε on all three branches, and stability is that of the Floquet multipliers."""
    distances = []
    for small in (0.04, 0.02):
        states = ms.equilibria(driven(force), values | {"epsilon": small})
        assert [s.kind for s in states] == ["stable", "saddle", "stable"]
        frequency, row = 1 + small * values["sigma"], []
        for state in states:
            p, q = state.state

            def equation(time, y, small=small, frequency=frequency):
                push = values["f"] * np.cos(frequency * time)
                return [y[1], -y[0] - small * (law(y[0], y[1], values) - push)]

            found, multipliers = periodic(equation, [p, frequency * q], 2 * np.pi / frequency)
            row.append(np.hypot(*(found - [p, q])))
            assert (max(abs(multipliers)) < 1) == state.stable
        distances.append(row)
    before, after = np.array(distances)
    assert (after < 0.15).all()
    assert (np.log2(before / after) > 0.6).all(), (before, after)


def den_hartog(friction: float, force: float, frequency: float) -> float:
    """The peak of u'' + u + F sgn u' = P cos Ωt in motion without stops.

    x_0² = P²V² − F²U², V = 1/(1 − Ω²), U = sin(π/Ω)/(Ω(1 + cos(π/Ω))): J. P. Den Hartog, *Forced vibrations with
    combined Coulomb and viscous friction*, 1931 (from memory; confirmed by integration below).
    """
    inverse = 1 / frequency
    response = 1 / (1 - frequency**2)
    loss = inverse * np.sin(np.pi * inverse) / (1 + np.cos(np.pi * inverse))
    return float(np.sqrt((force * response) ** 2 - (friction * loss) ** 2))


@pytest.mark.parametrize("detuning", [-0.6, 0.5])
def test_dry_friction_tends_to_den_hartogs_solution(detuning):
    """a = √((f/2)² − (2c/π)²)/|σ| at first order; the exact peak differs by O(ε) relative."""
    misses = []
    for small in (0.04, 0.02, 0.01):
        (state,) = ms.equilibria(driven(DRY), {"epsilon": small, "c": 0.5, "f": 1.0, "sigma": detuning})
        closed = np.sqrt(0.25 - (1 / np.pi) ** 2) / abs(detuning)
        assert state.amplitudes[0] == pytest.approx(closed, rel=1e-12)
        misses.append(abs(den_hartog(0.5 * small, small, 1 + small * detuning) / closed - 1))
    assert misses[-1] < 0.02
    assert np.log2(misses[0] / misses[1]) == pytest.approx(1, abs=0.2)
    assert np.log2(misses[1] / misses[2]) == pytest.approx(1, abs=0.2)


def test_den_hartogs_solution_is_a_motion_of_the_equation():
    """Between two turning points the velocity is of one sign: half a period is smooth and ends at −x_0."""
    solve_ivp = pytest.importorskip("scipy.integrate").solve_ivp
    friction, force, frequency = 0.01, 0.02, 1.012
    peak = den_hartog(friction, force, frequency)

    def miss(phase):
        """From +x_0 downwards with sgn u' = −1."""
        done = solve_ivp(
            lambda time, y: [y[1], -y[0] + friction + force * np.cos(frequency * time + phase)],
            (0, np.pi / frequency), [peak, 0.0], rtol=1e-11, atol=1e-13,
        )  # fmt: skip
        return done.y[:, -1] + [peak, 0.0]

    phases = np.linspace(-np.pi, np.pi, 73)
    start = min(phases, key=lambda x: np.linalg.norm(miss(x)))
    least_squares = pytest.importorskip("scipy.optimize").least_squares
    assert np.linalg.norm(least_squares(lambda x: miss(x[0]), [start], xtol=1e-14, ftol=1e-14).fun) < 1e-8 * peak


@pytest.mark.parametrize(("level", "moves"), [(1.26, False), (1.28, True)])
def test_dry_friction_holds_the_mass_below_its_threshold(level, moves):
    """Averaging moves the mass for f > 4c/π = 1.2732c."""
    states = ms.equilibria(driven(DRY_AND_VISCOUS), {"epsilon": 0.1, "c": 1.0, "mu": 0.1, "f": level, "sigma": 0.3})
    assert [s.amplitudes[0] > 0 for s in states] == [moves]
    assert states[0].stable
    assert np.isinf(states[0].eigenvalues).all() != moves


def test_the_response_to_the_level_of_a_drive_starts_at_the_threshold():
    values = {"epsilon": 0.1, "c": 1.0, "mu": 0.1, "sigma": 0.3}
    response = ms.frequency_response(driven(DRY_AND_VISCOUS), values, sweep={f: np.linspace(0.0, 3.0, 31)})
    (branch,) = response.branches
    resting = branch.parameter[branch.amplitude == 0]
    assert resting.max() < 4 / np.pi < branch.parameter[branch.amplitude > 0].min()
    assert branch.stable.all()


def test_parametric_excitation_against_dry_friction_has_an_isolated_threshold():
    """The rest stays stable; u'' + u + ε(c sgn u' + u³ + hu cos Ωt) = 0 has two pairs of opposite states beside it."""
    equation = u.diff(t, 2) + u + eps * (DRY + u**3 + h * u * sp.cos(Om * t))
    expansion = ms.expand(ms.Problem(equation, u, small=eps, resonances={Om: 2 + eps * sigma}), 1)
    values = {"epsilon": 0.1, "c": 0.05, "h": 1.0, "sigma": 1.0}
    states = ms.equilibria(expansion, values)
    # a' = 0, γ' = 0:  sin = 8c/(πha),  (σ/2 − 3a²/8)² + (2c/(πa))² = (h/4)²
    s = np.array([0.5, -0.375])
    square = np.polynomial.Polynomial(s) ** 2 - 1 / 16
    roots = (np.polynomial.Polynomial([0, 1]) * square + (0.1 / np.pi) ** 2).roots()
    expected = np.sqrt(sorted(x.real for x in roots if abs(x.imag) < 1e-9 and x.real > 0))
    assert amplitudes(states) == pytest.approx([0.0, *np.repeat(expected, 2)], rel=1e-10)
    assert states[0].kind == "stable"


def test_self_excitation_against_dry_friction_and_the_fold_where_it_ends():
    """da/dt = ε(a/2 − a³/8 − 2c/π): two cycles for c < π/(3√3), which meet at a = 2/√3."""
    expansion = ms.expand(ms.Problem(u.diff(t, 2) + u + eps * (DRY - v + v**3 / 3), u, small=eps), 1)
    rest, inner, outer = ms.equilibria(expansion, {"epsilon": 0.1, "c": 0.1})
    roots = np.sort(np.roots([-1 / 8, 0, 1 / 2, -0.2 / np.pi]))[1:]
    assert amplitudes([inner, outer]) == pytest.approx(roots, rel=1e-11)
    assert [s.kind for s in (rest, inner, outer)] == ["stable", "saddle", "stable"]
    response = ms.frequency_response(expansion, {"epsilon": 0.1}, sweep={c: np.linspace(0.1, 0.7, 31)})
    (fold,) = response.folds
    assert fold.parameter == pytest.approx(np.pi / np.sqrt(27), rel=1e-9)
    assert fold.amplitudes[0] == pytest.approx(2 / np.sqrt(3), rel=1e-5)


def test_a_measured_law_beyond_whose_range_nothing_is_found():
    F = sp.Function("F")
    law = ([-2.0, -0.5, 0.5, 2.0], [-1.0, -0.1, 0.1, 1.0])
    equation = u.diff(t, 2) + u + eps * (F(v) + u**3 - f * sp.cos(Om * t))
    problem = ms.Problem(equation, u, small=eps, resonances={Om: 1 + eps * sigma}, laws={F: law})
    (state,) = ms.equilibria(ms.expand(problem, 1), {"epsilon": 0.1, "f": 0.8, "sigma": 0.2})
    rate = ms.expand(problem, 1).slow_flow.to_numpy().bind({"epsilon": 0.1, "f": 0.8, "sigma": 0.2})
    assert np.max(abs(rate(0, state.state))) < 1e-13
    assert ms.equilibria(ms.expand(problem, 1), {"epsilon": 0.1, "f": 8.0, "sigma": 0.2}) == ()


def test_a_flow_that_conserves_its_amplitude_is_refused():
    expansion = ms.expand(ms.Problem(u.diff(t, 2) + u + eps * k * sp.Max(u - g, 0), u, small=eps), 1)
    with pytest.raises(ms.EvaluationError, match="conserved"):
        ms.equilibria(expansion, {"epsilon": 0.1, "k": 1.0, "g": 0.5})


def test_second_order_with_drag():
    """Order two moves the peak of the response by the backbone −5392 ε²a²/(33075π²)."""
    second = driven(c * sp.Abs(v) * v, 2)
    values = {"epsilon": 0.1, "c": 0.3, "f": 0.2}
    response = ms.frequency_response(second, values, sweep={sigma: np.linspace(-1, 1, 41)})
    assert len(response.branches) == 1
    assert not response.branches[0].spurious.any()
    first = ms.frequency_response(driven(c * sp.Abs(v) * v), values, sweep={sigma: np.linspace(-1, 1, 41)})
    assert response.peak().amplitude == pytest.approx(first.peak().amplitude, rel=1e-2)


def test_stability_of_rest_is_that_of_small_motion():
    """A table is linear between its points: the rest has the damping of its first stretch, −F'(0)/2."""
    F = sp.Function("F")
    problem = ms.Problem(u.diff(t, 2) + u + eps * F(v), u, small=eps, laws={F: ([-2, 0, 2], [-0.6, 0.0, 0.6])})
    (rest,) = ms.equilibria(ms.expand(problem, 1), {"epsilon": 0.1})
    assert rest.kind == "stable"
    assert rest.eigenvalues.real == pytest.approx(-0.015, rel=1e-9)


def test_a_bessel_function_at_an_absurd_amplitude():
    expansion = ms.expand(ms.Problem(u.diff(t, 2) + u + eps * (sp.exp(v) - 1), u, small=eps), 1)
    with pytest.raises(ms.EvaluationError, match="Bessel function is asked for at 1e\\+12"):
        expansion.slow_flow.to_numpy()(0.0, [1e12, 0.0], 0.1)


def test_limit_cycles_against_dry_friction():
    """u'' + ω²u + ε(c sgn u' − u' + u'³/3 + u³) = 0: da/dt = ε(a/2 − ω²a³/8 − 2c/(πω)), dβ/dt = 3εa²/(8ω)."""
    omega = sp.Symbol("omega", positive=True)
    problem = ms.Problem(u.diff(t, 2) + omega**2 * u + eps * (DRY - v + v**3 / 3 + u**3), u, small=eps)
    expansion = ms.expand(problem, 1)
    inner, outer = ms.limit_cycles(expansion, {c: sp.Rational(1, 10), omega: sp.Rational(3, 2)})
    roots = np.sort(np.roots([-(1.5**2) / 8, 0, 1 / 2, -0.2 / (1.5 * np.pi)]))[1:]
    assert [float(x.amplitude) for x in (inner, outer)] == pytest.approx(roots, rel=1e-10)
    assert (inner.stable, outer.stable) == (False, True)
    for cycle, a in zip((inner, outer), roots, strict=True):
        assert float(cycle.frequency.subs(eps, 0.01)) == pytest.approx(1.5 + 0.01 * 3 * a**2 / 12, rel=1e-10)
        assert float(cycle.exponent.coeff(eps)) == pytest.approx(0.5 - 3 * 2.25 * a**2 / 8, rel=1e-7)
    with pytest.raises(ms.UnsupportedTermError, match="give `parameters` values for omega"):
        ms.limit_cycles(expansion, {c: 0.1})


def test_the_critical_drive_is_refused():
    with pytest.raises(ms.EvaluationError, match=r"not polynomial.*folds of frequency_response"):
        ms.critical_drive(driven(DRAG))
