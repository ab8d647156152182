"""Published closed forms of the steady response of driven oscillators.

Second routes: SymPy elimination and SciPy root finding written here, integration of the original equation.
"""

from __future__ import annotations

import numpy as np
import pytest
import sympy as sp
from support.driven import Om, Original, alpha, beta, cubic, eps, expanded, f, mu, plain, sigma, t, u, used, w

import multiscale as ms

from . import elliptic

NAYFEH_MOOK = "Nayfeh and Mook, Nonlinear Oscillations, 1979, §4.1, from memory, confirmed by computation"
a = sp.Symbol("a", positive=True)
VALUES = {"epsilon": 0.01, "mu": 0.1, "alpha": 1.3, "f": 0.5, "omega": 1.7}


def test_frequency_response_equation():
    """[μ² + (σ − 3αa²/(8ω))²]a² = f²/(4ω²), exactly, from the polar flow. Source: NAYFEH_MOOK."""
    flow = expanded("primary", 1).slow_flow.polar
    (gamma,) = expanded("primary", 1).symbols.gamma
    amplitude = expanded("primary", 1).symbols.a[0]
    rate, turn = flow[amplitude] / eps, flow[gamma] / eps
    sine = sp.solve(rate, sp.sin(gamma))[0]
    cosine = sp.solve(turn, sp.cos(gamma))[0]
    wanted = (mu**2 + (sigma - 3 * alpha * amplitude**2 / (8 * w)) ** 2) * amplitude**2 - f**2 / (4 * w**2)
    assert sp.simplify((sine**2 + cosine**2 - 1) * f**2 / (4 * w**2) - wanted) == 0


def test_every_point_of_a_sweep_obeys_it():
    r = ms.frequency_response(expanded("primary", 1), VALUES, sweep={"sigma": np.linspace(-1, 2, 300)})
    for b in r.branches:
        left = (0.1**2 + (b.parameter - 3 * 1.3 * b.amplitude**2 / (8 * 1.7)) ** 2) * b.amplitude**2
        assert left == pytest.approx(0.5**2 / (4 * 1.7**2), rel=1e-11)


def test_peak():
    """a = f/(2μω) at σ = 3αf²/(32μ²ω³). Source: NAYFEH_MOOK."""
    peak = ms.frequency_response(expanded("primary", 1), VALUES, sweep={"sigma": np.linspace(-1, 2, 60)}).peak()
    assert peak.amplitude == pytest.approx(0.5 / (2 * 0.1 * 1.7), rel=1e-14)
    assert peak.parameter == pytest.approx(3 * 1.3 * 0.25 / (32 * 0.01 * 1.7**3), rel=1e-9)


def test_locus_of_the_folds():
    """Vertical tangents: (σ − 3αa²/(8ω))(σ − 9αa²/(8ω)) + μ² = 0. Source: NAYFEH_MOOK (loci of vertical tangents)."""
    r = ms.frequency_response(expanded("primary", 1), VALUES, sweep={"sigma": np.linspace(-1, 2, 60)})
    assert len(r.folds) == 2
    for x in r.folds:
        third = 3 * 1.3 * x.amplitudes[0] ** 2 / (8 * 1.7)
        assert (x.parameter - third) * (x.parameter - 3 * third) + 0.1**2 == pytest.approx(0, abs=1e-13)


CRITICAL = sp.Rational(256, 9) * mu**3 * w**3 / (sp.sqrt(3) * alpha)


def test_critical_drive():
    """f² = 256 μ³ω³/(9√3 α), from the triple root of the cubic in a²; second route: its discriminant here.

    Source: the cusp of the response of Duffing's equation, e.g. Landau and Lifshitz, Mechanics, 1960, §29 (there
    f_k² = 32 m²ω₀²λ³/(3√3|κ|) with damping 2λ and frequency shift κb²), from memory, confirmed by computation.
    """
    onset = ms.critical_drive(expanded("primary", 1))
    assert sp.simplify(onset.drive**2 - CRITICAL) == 0
    kappa = 3 * alpha / (8 * w)
    assert sp.simplify(onset.drive**2 - 32 * w**2 * mu**3 / (3 * sp.sqrt(3) * kappa)) == 0
    x = sp.Symbol("x")
    values = {mu: sp.Rational(1, 10), w: 1, alpha: 1}
    cubic_in_square = (mu**2 + (sigma - 3 * alpha * x / (8 * w)) ** 2) * x - f**2 / (4 * w**2)
    at = cubic_in_square.subs({f: onset.drive, sigma: onset.detuning}).subs(values)
    root = (onset.amplitude**2).subs(values)
    assert [sp.simplify(sp.diff(at, x, k).subs(x, root)) for k in range(3)] == [0, 0, 0]


@pytest.mark.parametrize("order", [1, 2, 3])
def test_critical_drive_separates_one_from_three(order):
    values = {"epsilon": 0.05, "mu": 0.1, "alpha": 1.0, "omega": 1.0}
    onset = ms.critical_drive(expanded("primary", order), values)
    counts = []
    for share in (0.999, 1.001):
        swept = ms.frequency_response(
            expanded("primary", order),
            values | {"f": share * onset.drive},
            sweep={"sigma": onset.detuning + np.linspace(-0.05, 0.05, 41)},
        )
        counts.append(len(swept.folds))
    assert counts == [0, 2]
    if order == 1:
        assert onset.drive**2 == pytest.approx(256 * 0.1**3 / (9 * np.sqrt(3)), rel=1e-12)
        assert onset.detuning == pytest.approx(np.sqrt(3) * 0.1, rel=1e-9)


def test_critical_drive_with_nonlinear_damping():
    """No source: a resonator with damping (2μ + ηu²)u', the cusp of which is checked by the count of folds."""
    problem = ms.Problem(
        cubic + eps * (beta * u**2 * u.diff(t) - f * sp.cos(Om * t)), u, small=eps, resonances={Om: w + eps * sigma}
    )
    expansion = ms.expand(problem, 1)
    values = {"epsilon": 0.05, "mu": 0.1, "alpha": 1.0, "omega": 1.0, "beta": 0.2}
    onset = ms.critical_drive(expansion, values)
    symbolic = ms.critical_drive(expansion)
    assert float(symbolic.drive.subs({mu: 0.1, alpha: 1, w: 1, beta: 0.2})) == pytest.approx(onset.drive, rel=1e-9)
    counts = [
        len(
            ms.frequency_response(
                expansion,
                values | {"f": share * onset.drive},
                sweep={"sigma": onset.detuning + np.linspace(-0.05, 0.05, 41)},
            ).folds
        )
        for share in (0.999, 1.001)
    ]
    assert counts == [0, 2]


SMALL = np.array([0.08, 0.04, 0.02])


@pytest.mark.parametrize("order", [1, 2])
def test_folds_of_the_original_equation(order):
    """Jump points: the multiplier of the original equation passes 1 at the fold of the expansion to O(ε^N).

    Second route: the detuning at which a periodic motion of given velocity-free phase has the multiplier 1, by shooting
    on either side of the fold and extrapolating (1 − multiplier)², which is linear in the detuning there.
    """
    optimize = pytest.importorskip("scipy.optimize")
    errors = []
    for small in SMALL:
        values = {"epsilon": small, "mu": 0.1, "alpha": 1.0, "f": 0.4, "omega": 1.0}
        expansion = expanded("primary", order)
        r = ms.frequency_response(expansion, values, sweep={"sigma": np.linspace(0, 1.2, 40)})
        exact = ms.frequency_response(expanded("primary", 3), values, sweep={"sigma": np.linspace(0, 1.2, 40)}).folds[0]
        guess = np.array([expanded("primary", 3).to_numpy(k).bind(values | {"sigma": exact.parameter})(0.0, exact.state)[0] for k in (0, 1)])  # fmt: skip  # noqa: E501

        def residual(x, values=values):
            end, matrix = Original("primary", values | {"sigma": x[2]}).over_a_period(x[:2])
            return [*(end - x[:2]), np.linalg.det(matrix - np.eye(2)) / values["epsilon"] ** 2]

        found = optimize.root(residual, [*guess, exact.parameter], tol=1e-10)
        assert max(abs(v) for v in found.fun) < 1e-8
        errors.append(abs(found.x[2] - r.folds[0].parameter))
    assert np.polyfit(np.log(SMALL), np.log(errors), 1)[0] > order - 0.25
    wrong = [e + 0.05 * s ** (order - 1) for e, s in zip(errors, SMALL, strict=True)]
    assert np.polyfit(np.log(SMALL), np.log(wrong), 1)[0] < order - 0.3


def test_superharmonic_peak():
    """a = αΛ³/(μω), Λ = f/(2(ω² − Ω²)), at σ = (3αΛ²/ω)(1 + α²Λ⁴/(8μ²ω²)).

    Source: Nayfeh and Mook 1979, §4.1.3, from memory, confirmed by the sweep; here Ω = ω/3 in Λ.
    """
    values = {"epsilon": 0.01, "mu": 0.1, "alpha": 1.0, "f": 1.0, "omega": 1.0}
    big = 1.0 / (2 * (1 - 1 / 9))
    p = ms.frequency_response(expanded("superharmonic", 1), values, sweep={"sigma": np.linspace(0, 12, 200)}).peak()
    assert p.amplitude == pytest.approx(big**3 / 0.1, rel=1e-12)
    assert p.parameter == pytest.approx(3 * big**2 * (1 + big**4 / (8 * 0.01)), rel=1e-9)


@pytest.mark.parametrize(("amplitude", "published"), [(1, "1.0892"), (2, "1.3178"), (3, "1.6257")])
def test_backbone_of_the_beam(amplitude, published):
    """Simply supported beam, immovable ends: q'' + q + q³/4 = 0 (Woinowsky-Krieger, J. Appl. Mech. 17, 1950, 35, from
    memory, confirmed by the elliptic integral): the backbone of the driven problem, at the amplitude of the fundamental
    that has the published peak. The series converges at 1 only; the others are the business of rational functions."""
    driven = ms.Problem(
        u.diff(t, 2) + u + eps * (u**3 / 4 + 2 * mu * u.diff(t) - f * sp.cos(Om * t)),
        u,
        small=eps,
        resonances={Om: 1 + eps * sigma},
    )
    expansion = ms.expand(driven, 3)
    exact = float(elliptic.cubic_frequency(sp.Rational(amplitude**2, 4)))
    assert abs(exact - float(published)) < 5e-5
    undriven = ms.expand(ms.Problem(u.diff(t, 2) + u + eps * u**3 / 4, u, small=eps), 3)
    curve = ms.backbone(expansion).subs(mu, 0)
    assert sp.expand(curve - undriven.frequency()) == 0
    if amplitude == 1:
        fundamental = 1 - sp.Rational(1, 32) / 4 + sp.Rational(21, 1024) / 16
        got = float(curve.subs({eps: 1, expansion.symbols.a[0]: fundamental}))
        assert got == pytest.approx(float(published), abs=1e-3)


def test_effective_cubic_of_quadratic_and_cubic():
    """α_eff = α₃ − 10α₂²/(9ω²). Source: Nayfeh and Mook 1979, §2.3 (from ω_2), from memory; also by the exact frequency
    of row 3 of the same chapter, which tests/published/test_quadratic_cubic_oscillator.py confirms."""
    problem = ms.Problem(
        plain + eps * beta * u**2 + eps**2 * (alpha * u**3 + 2 * mu * u.diff(t) - f * sp.cos(Om * t)),
        u,
        small=eps,
        resonances={Om: w + eps**2 * sigma},
    )
    expansion = ms.expand(problem, 2)
    assert sp.expand(ms.effective_cubic(expansion) - eps**2 * (alpha - 10 * beta**2 / (9 * w**2))) == 0
    assert ms.effective_damping(expansion) == eps**2 * mu


def test_effective_damping_of_van_der_pol():
    """−(1/a)da/dt = −ε/2 (1 − a²/4) at the first order. Source: Kevorkian and Cole, Perturbation Methods in Applied
    Mathematics, 1981, from memory, confirmed by the limit cycle of amplitude 2."""
    expansion = ms.expand(ms.Problem(u.diff(t, 2) + u + eps * (u**2 - 1) * u.diff(t), u, small=eps), 1)
    amplitude = expansion.symbols.a[0]
    assert sp.expand(ms.effective_damping(expansion) + eps * (1 - amplitude**2 / 4) / 2) == 0


def test_backbone_is_the_driven_flow_without_its_drive():
    """The driven expansion's own coefficients at f = 0, in the frame of the drive: Ω − dγ/dt is the frequency."""
    expansion = expanded("primary", 3)
    (gamma,) = expansion.symbols.gamma
    turn = expansion.slow_flow.polar[gamma].subs(f, 0)
    assert sp.expand(w + eps * sigma - turn - ms.backbone(expansion)) == 0
    amplitude = expansion.symbols.a[0]
    decay = expansion.slow_flow.polar[amplitude].subs(f, 0)
    assert sp.simplify(decay + amplitude * ms.effective_damping(expansion)) == 0


def test_critical_drive_refuses_what_it_does_not_treat():
    with pytest.raises(ms.EvaluationError, match="near primary resonance"):
        ms.critical_drive(expanded("parametric", 1))
    with pytest.raises(ms.EvaluationError, match="solves for"):
        ms.critical_drive(expanded("primary", 1), used(expanded("primary", 1), VALUES))


@pytest.mark.parametrize("mode", [0])
def test_internal_resonance_has_no_backbone(mode):
    v = sp.Function("v")(t)
    equations = [u.diff(t, 2) + u + eps * u * v, v.diff(t, 2) + 4 * v + eps * u**2]
    with pytest.warns(ms.OrderingWarning):
        expansion = ms.expand(ms.Problem(equations, [u, v], small=eps), 1)
    with pytest.raises(ms.ResonanceError):
        ms.backbone(expansion, mode)
