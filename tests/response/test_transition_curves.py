"""Boundaries of instability tongues: Hill equations, damping, thresholds and refusals."""

from __future__ import annotations

from types import SimpleNamespace

import numpy as np
import pytest
import sympy as sp
from published.integration import slope
from published.rows import difference
from support.parametric import boundary, ddu, distance, du, eps, monodromy, parametric, t, u, unchecked

from multiscale.errors import ProblemError, UnsupportedTermError
from multiscale.response.tongues.transition_curves import threshold, transition_curves

delta, h, mu, Omega, c = sp.symbols("delta h mu Omega c", positive=True)
phi = sp.Symbol("phi", real=True)
w = sp.Symbol("w")
cos, sin, pi = sp.cos, sp.sin, sp.pi
TWO = cos(2 * t) + sp.Rational(7, 10) * cos(4 * t)

# name: equation, parameter, tongue, order, period
FLOQUET = {
    "Hill, 1": (ddu + (delta + 2 * eps * TWO) * u, delta, 1, 4, np.pi),
    "Hill, 2": (ddu + (delta + 2 * eps * TWO) * u, delta, 2, 4, np.pi),
    "Hill, 3": (ddu + (delta + 2 * eps * TWO) * u, delta, 3, 4, np.pi),
    "Hill, 0": (ddu + (delta + 2 * eps * TWO) * u, delta, 0, 3, np.pi),
    "orders": (ddu + (delta + eps * cos(2 * t) + eps**2 * cos(4 * t) + eps**2) * u, delta, 2, 3, np.pi),
    "phases, 1": (ddu + (delta + eps * (cos(2 * t + 1) + sin(4 * t + pi / 3))) * u, delta, 1, 4, np.pi),
    "phases, 2": (ddu + (delta + eps * (cos(2 * t + 1) + sin(4 * t + pi / 3))) * u, delta, 2, 3, np.pi),
    "phases, 3": (ddu + (delta + eps * (cos(2 * t + 1) + sin(4 * t + pi / 3))) * u, delta, 3, 3, np.pi),
    "cos t + cos 3t/2": (ddu + (delta + eps * (cos(t) + cos(3 * t / 2))) * u, delta, 3, 3, 4 * np.pi),
    "square of a cosine": (ddu + (delta + 2 * eps * cos(t) ** 2) * u, delta, 1, 3, np.pi),
    "inertia": ((1 + eps * cos(2 * t)) * ddu + (delta + eps * cos(2 * t + 1)) * u, delta, 1, 3, np.pi),
    "inertia, 2": ((1 + eps * cos(2 * t)) * ddu + (delta + eps * cos(2 * t + 1)) * u, delta, 2, 3, np.pi),
    "inertia, 3": ((1 + eps * cos(2 * t)) * ddu + (delta + eps * cos(2 * t + 1)) * u, delta, 3, 4, np.pi),
    "velocity": (ddu + eps * sin(2 * t) * du + (delta + 3 * eps * cos(2 * t)) * u, delta, 1, 3, np.pi),
    "mass": (delta * ddu + (1 + 2 * eps * cos(2 * t)) * u, delta, 2, 4, np.pi),
    "mass and stiffness": ((1 + delta) * ddu + (5 - delta + eps * cos(2 * t)) * u, delta, 1, 3, np.pi),
    "parameter in the drive": (ddu + delta * (1 + 2 * eps * cos(2 * t)) * u, delta, 2, 4, np.pi),
    "other frequency": (ddu + (delta + 2 * eps * cos(3 * t)) * u, delta, 1, 4, 2 * np.pi / 3),
    "damped, 0": (ddu + 2 * eps * du + (delta + 3 * eps * cos(2 * t)) * u, delta, 0, 3, np.pi),
    "damped, 1": (ddu + 2 * eps * du + (delta + 6 * eps * cos(2 * t)) * u, delta, 1, 3, np.pi),
    "damped, 1, phase": (ddu + eps * du + (delta + 3 * eps * TWO.subs(t, t + 1)) * u, delta, 1, 3, np.pi),
    "damped, 2": (ddu + eps**2 * du / 16 + (delta + 2 * eps * cos(2 * t)) * u, delta, 2, 4, np.pi),
    "damped, 2, both harmonics": (ddu + eps * du / 8 + (delta + 2 * eps * TWO) * u, delta, 2, 3, np.pi),
    "damped, oscillating damping": (
        ddu + eps * (1 + cos(2 * t)) * du + (delta + 3 * eps * sin(2 * t)) * u,
        delta,
        1,
        3,
        np.pi,
    ),
}
CASES = [pytest.param(*case, id=name) for name, case in FLOQUET.items()]


def errors(equation, parameter, tongue, period, curves, small):
    """|series − boundary by Floquet multipliers|, curve × small value."""
    found = []
    for series in curves:
        at = sp.lambdify(eps, series)
        row = []
        for e in small:
            split = min((abs(sp.lambdify(eps, x)(e) - at(e)) for x in curves if x != series), default=e**2)
            row.append(abs(boundary(equation, parameter, at(e), 0.4 * split, {eps: e}, period, tongue) - at(e)))
        found.append(row)
    return np.array(found)


@pytest.mark.parametrize(("equation", "parameter", "tongue", "order", "period"), CASES)
def test_against_floquet_multipliers(equation, parameter, tongue, order, period):
    """The error is of the order after the last one kept; an error in the last coefficient is of that order."""
    small = np.array([0.08, 0.056, 0.04])
    curves = transition_curves(parametric(equation), parameter, order=order, tongue=tongue)
    assert len(curves) == (1 if tongue == 0 else 2)
    found = errors(equation, parameter, tongue, period, curves, small)
    assert np.all(found[:, 0] < 30 * small[0] ** (order + 1))
    for series, row in zip(curves, found, strict=True):
        if row[-1] > 1e-11:
            assert slope(small, row) > order + 0.7
        wrong = [abs(x + 0.3 * e**order) for e, x in zip(small, row, strict=True)]
        assert slope(small, wrong) < order + 0.5, series


@pytest.mark.parametrize("tongue", [1, 2])
def test_multipliers_on_either_side(tongue):
    """Undamped: |trace| > 2 between the boundaries, < 2 beyond them."""
    equation = ddu + (delta + 2 * eps * TWO) * u
    lower, upper = (x.subs(eps, 0.05) for x in transition_curves(parametric(equation), delta, order=4, tongue=tongue))
    step = 0.1 * (upper - lower)
    traces = [
        abs(np.trace(monodromy(equation, {eps: 0.05, delta: x}, np.pi)))
        for x in (lower - step, lower + step, upper - step, upper + step)
    ]
    assert [x > 2 for x in traces] == [False, True, True, False]


def test_damped_stability_on_either_side():
    equation = ddu + 2 * eps * du + (delta + 6 * eps * cos(2 * t)) * u
    lower, upper = (x.subs(eps, 0.05) for x in transition_curves(parametric(equation), delta, order=3, tongue=1))
    step = 0.1 * (upper - lower)
    largest = [
        max(abs(np.linalg.eigvals(monodromy(equation, {eps: 0.05, delta: float(x)}, np.pi))))
        for x in (lower - step, lower, lower + step, upper - step, upper, upper + step)
    ]
    assert largest[1] == pytest.approx(1, abs=1e-4)
    assert largest[4] == pytest.approx(1, abs=1e-4)
    assert [x > 1 for x in (largest[0], *largest[2:4], largest[5])] == [False, True, True, False]


# Exact statements


@pytest.mark.parametrize("tongue", range(1, 5))
@pytest.mark.parametrize("drive", [cos(2 * t + phi), sin(2 * t), cos(2 * t + pi / 3), cos(2 * t + phi / 2 + pi / 4)])
def test_a_phase_alone_changes_nothing(tongue, drive):
    wanted = transition_curves(parametric(ddu + (delta + eps * cos(2 * t)) * u), delta, order=5, tongue=tongue)
    found = transition_curves(parametric(ddu + (delta + eps * drive) * u), delta, order=5, tongue=tongue)
    assert difference(found, wanted) == []


@pytest.mark.parametrize("tongue", range(4))
def test_scaling_of_time(tongue):
    """With τ = Ωt/2, δ = (Ω/2)²a and ε = (Ω/2)²q."""
    given = transition_curves(parametric(ddu + (delta - 2 * eps * cos(Omega * t)) * u), delta, order=6, tongue=tongue)
    plain = transition_curves(parametric(ddu + (delta - 2 * eps * cos(2 * t)) * u), delta, order=6, tongue=tongue)
    unit = (Omega / 2) ** 2
    assert difference(given, [unit * x.subs(eps, eps / unit) for x in plain]) == []


def test_symbolic_stiffness_and_mass():
    m, k = sp.symbols("m k", positive=True)
    (lower, upper) = transition_curves(
        parametric(m * ddu + (delta + 2 * eps * k * cos(Omega * t)) * u), delta, order=2, tongue=1
    )
    mean = m * Omega**2 / 4 - k**2 * eps**2 / (2 * m * Omega**2)
    assert difference((lower, upper), (mean - eps * k, mean + eps * k)) == []


def test_symbolic_weight_of_the_second_harmonic():
    curves = transition_curves(
        parametric(ddu + (delta + 2 * eps * (cos(2 * t) + c * cos(4 * t))) * u), delta, order=4, tongue=2
    )
    fixed = transition_curves(parametric(ddu + (delta + 2 * eps * TWO) * u), delta, order=4, tongue=2)
    assert difference([x.subs(c, sp.Rational(7, 10)) for x in curves], fixed) == []


def test_irrational_frequency():
    curves = transition_curves(parametric(ddu + (delta - 2 * eps * cos(sp.sqrt(8) * t)) * u), delta, order=4, tongue=1)
    given = transition_curves(parametric(ddu + (delta - 2 * eps * cos(Omega * t)) * u), delta, order=4, tongue=1)
    assert difference(curves, [x.subs(Omega, sp.sqrt(8)) for x in given]) == []


def test_nonlinear_terms_are_dropped():
    linear = ddu + (delta + eps * cos(2 * t)) * u
    nonlinear = linear + eps * u**3 + eps**2 * u**2 * cos(t) + u * du**2 + sin(u) - u
    wanted = transition_curves(parametric(linear), delta, order=3, tongue=2)
    assert transition_curves(unchecked(nonlinear), delta, order=3, tongue=2) == wanted


def test_decimals_stay_decimals():
    (lower, _) = transition_curves(parametric(ddu + (delta + 0.5 * eps * cos(2 * t)) * u), delta, order=2, tongue=1)
    assert float(lower.subs(eps, 0.1)) == pytest.approx(1 - 0.025 - 0.1**2 / 128, abs=1e-15)


def test_decimal_frequencies_are_exact():
    given = transition_curves(parametric(ddu + (delta + eps * cos(0.5 * t)) * u), delta, order=3, tongue=1)
    exact = transition_curves(parametric(ddu + (delta + eps * cos(t / 2)) * u), delta, order=3, tongue=1)
    assert given == exact


def test_coexistence_of_odd_tongues():
    """u'' + ε sin 2t u' + (δ + ε cos 2t)u = 0: the drives cancel at the first harmonic; confirmed by the monodromy
    matrix."""
    equation = ddu + eps * sin(2 * t) * du + (delta + eps * cos(2 * t)) * u
    first, second = transition_curves(parametric(equation), delta, order=8, tongue=1)
    assert first == second
    matrix = monodromy(equation, {eps: 0.05, delta: float(first.subs(eps, 0.05))}, np.pi)
    assert matrix == pytest.approx(-np.eye(2), abs=1e-9)


def test_coexistence():
    """(1 + εh cos 2t)u'' + δu = 0 has no even tongues: Magnus and Winkler, Hill's Equation, 1966, ch. 7, from memory;
    confirmed by the monodromy matrix, which is the identity."""
    equation = (1 + eps * cos(2 * t)) * ddu + delta * u
    first, second = transition_curves(parametric(equation), delta, order=8, tongue=2)
    assert first == second
    matrix = monodromy(equation, {eps: 0.05, delta: float(first.subs(eps, 0.05))}, np.pi)
    assert matrix == pytest.approx(np.eye(2), abs=1e-9)
    lower, upper = transition_curves(parametric(equation), delta, order=3, tongue=3)
    assert lower != upper


def test_damped_root():
    """Second order, by hand: δ = 1 ∓ ε√(h² − 4μ²) − ε²h²/8."""
    problem = parametric(ddu + 2 * eps * mu * du + (delta + 2 * eps * h * cos(2 * t)) * u)
    root = sp.sqrt(h**2 - 4 * mu**2)
    wanted = [1 + sign * eps * root - eps**2 * h**2 / 8 for sign in (-1, 1)]
    assert list(transition_curves(problem, delta, order=2, tongue=1)) == [sp.expand(x) for x in wanted]


def test_orders_agree():
    """A longer series begins with the shorter one."""
    problem = parametric(
        ddu + 2 * eps**2 * mu * du + (delta + 2 * eps * h * (cos(2 * t + phi) + c * eps * sin(4 * t))) * u
    )
    short = transition_curves(problem, delta, order=3, tongue=2)
    long = transition_curves(problem, delta, order=4, tongue=2)
    for x, y in zip(short, long, strict=True):
        assert sp.simplify(sp.series(sp.expand(y), eps, 0, 4).removeO() - sp.expand(x)) == 0


@pytest.mark.parametrize("tongue", range(3))
@pytest.mark.parametrize(
    "equation",
    [
        ddu + (delta + eps * cos(2 * t)) * u,
        ddu + eps**2 * mu * du + (delta + 2 * eps * h * (cos(Omega * t + phi) + cos(2 * Omega * t))) * u,
    ],
)
def test_representations_agree(equation, tongue):
    pytest.importorskip("flint")
    found = [
        transition_curves(parametric(equation), delta, order=4, tongue=tongue, representation=name)
        for name in ("sympy", "flint")
    ]
    assert found[0] == found[1]


# Threshold


def tip(equation, sign, small, near):
    """The drive at which min over δ of det(Φ − sign) changes sign."""
    optimize = pytest.importorskip("scipy.optimize")
    centre = 1 - small**2 * near**2 / 8

    def least(value):
        found = optimize.minimize_scalar(
            lambda x: distance(equation, delta, x, {eps: small, h: value}, np.pi, sign),
            bounds=(centre - 0.3 * small, centre + 0.3 * small),
            method="bounded",
            options={"xatol": 1e-10},
        )
        return found.fun

    return optimize.brentq(least, 0.98 * near, 1.02 * near, xtol=1e-12)


def test_threshold_against_floquet_multipliers():
    equation = ddu + 2 * eps * du + (delta + 2 * eps * h * cos(2 * t)) * u
    series = threshold(parametric(equation), delta, h, order=2, tongue=1)
    assert series == 2 + 3 * eps**2 / 8
    small = (0.3, 0.24, 0.2)
    found = [abs(tip(equation, -1, e, float(series.subs(eps, e))) - float(series.subs(eps, e))) for e in small]
    assert max(found) < 0.3**4
    assert slope(small, found) > 3.5
    wrong = [abs(x + 0.05 * e**2) for e, x in zip(small, found, strict=True)]
    assert slope(small, wrong) < 2.5


def test_threshold_of_a_higher_tongue():
    equation = ddu + 2 * eps**2 * mu * du + (delta - 2 * eps * h * cos(2 * t)) * u
    assert threshold(parametric(equation), delta, h, order=1, tongue=2) == 4 * sp.sqrt(mu)


def test_threshold_without_damping_is_zero():
    assert threshold(parametric(ddu + (delta + eps * h * cos(2 * t)) * u), delta, h, order=2, tongue=1) == 0


# Refusals

MATHIEU = ddu + (delta + 2 * eps * cos(2 * t)) * u
v = sp.Function("v")(t)


@pytest.mark.parametrize(
    ("problem", "parameter", "options", "error", "message"),
    [
        (unchecked(MATHIEU), c, {}, ProblemError, "c does not appear"),
        (unchecked(MATHIEU), delta + 1, {}, ProblemError, "expected the symbol"),
        (unchecked(MATHIEU), eps, {}, ProblemError, "expected the symbol"),
        (unchecked(MATHIEU), delta, {"tongue": -1}, ProblemError, "tongue=-1: expected an integer ≥ 0"),
        (unchecked(MATHIEU), delta, {"tongue": 0.5}, ProblemError, "tongue=0.5: expected an integer"),
        (unchecked(MATHIEU), delta, {"order": 0}, ProblemError, "order=0: expected an integer ≥ 1"),
        (unchecked(MATHIEU), delta, {"order": True}, ProblemError, "order=True"),
        (unchecked(MATHIEU), delta, {"order": "two"}, ProblemError, "order='two'"),
        (unchecked(ddu + delta * u + eps * u**3), delta, {}, ProblemError, "a parametric drive such as"),
        (unchecked(ddu + (delta + eps * (cos(t) ** 2 + sin(t) ** 2)) * u), delta, {}, ProblemError, "cancel"),
        (
            unchecked(ddu + (delta + eps * (cos(t) + cos(sp.sqrt(2) * t))) * u),
            delta,
            {},
            UnsupportedTermError,
            "not a rational multiple",
        ),
        (
            unchecked(ddu + (delta + eps * (cos(t) + cos(Omega * t))) * u),
            delta,
            {},
            UnsupportedTermError,
            "not a rational multiple",
        ),
        (
            SimpleNamespace(equations=(MATHIEU, v.diff(t, 2) + v), unknowns=(u, v), small=eps, time=t),
            delta,
            {},
            UnsupportedTermError,
            "2 unknowns.*one equation",
        ),
        (unchecked(ddu + (delta + h * cos(2 * t)) * u), delta, {}, ProblemError, "does not stand in the equation"),
        (
            unchecked(ddu + (delta + h * cos(2 * t) + eps) * u),
            delta,
            {},
            UnsupportedTermError,
            "oscillates without a factor epsilon.*Give it a factor",
        ),
        (unchecked(MATHIEU + mu * du), delta, {}, UnsupportedTermError, "damping stands at leading order"),
        (unchecked(MATHIEU + eps * cos(t)), delta, {}, UnsupportedTermError, "epsilon.*external forces"),
        (unchecked(MATHIEU + u.diff(t, 3)), delta, {}, UnsupportedTermError, "only first and second"),
        (unchecked(MATHIEU + eps * du / u), delta, {}, UnsupportedTermError, "no linearisation"),
        (unchecked(MATHIEU + eps * u * sp.tan(t)), delta, {}, UnsupportedTermError, "tan.*Fourier sum"),
        (unchecked(ddu + delta * u / (1 + eps * cos(t))), delta, {}, UnsupportedTermError, "denominator"),
        (unchecked(MATHIEU + eps * u * cos(t**2)), delta, {}, UnsupportedTermError, "not linear in t"),
        (unchecked(ddu + (1 + eps * cos(delta * t)) * u), delta, {}, UnsupportedTermError, "Measure time"),
        (unchecked(ddu + (delta + eps * cos((2 + eps) * t)) * u), delta, {}, UnsupportedTermError, "Measure time"),
        (unchecked(ddu + (delta**2 + eps * cos(2 * t)) * u), delta, {}, UnsupportedTermError, "affinely"),
        (unchecked(ddu + (1 + eps * h * cos(2 * t)) * u), h, {}, ProblemError, "only with a factor"),
        (unchecked(delta * ddu + (1 + eps * cos(2 * t)) * u), delta, {"tongue": 0}, ProblemError, "does not depend"),
        (
            unchecked(delta * (ddu + u) + c * u + eps * cos(2 * t) * u),
            delta,
            {"tongue": 1},
            ProblemError,
            "does not depend",
        ),
        (
            unchecked(delta * (ddu + u) + eps * cos(2 * t) * u),
            delta,
            {"tongue": 3},
            ProblemError,
            "resonant as well",
        ),
        (
            unchecked(MATHIEU + 2 * eps * mu * du),
            delta,
            {"tongue": 2, "order": 3},
            UnsupportedTermError,
            r"damping outweighs.*epsilon\*\*n",
        ),
        (unchecked(MATHIEU + 3 * eps * du), delta, {}, ProblemError, "below the threshold"),
        (
            unchecked(ddu + eps * du + (delta + 2 * eps * (1 + eps) * cos(2 * t)) * u),
            delta,
            {},
            UnsupportedTermError,
            "fractional power.*epsilon",
        ),
    ],
)
def test_refusals(problem, parameter, options, error, message):
    with pytest.raises(error, match=message):
        transition_curves(problem, parameter, **{"order": 2, "tongue": 1, **options})


@pytest.mark.parametrize(
    ("equation", "options", "error", "message"),
    [
        (MATHIEU, {}, ProblemError, "expected the symbol of a factor"),
        (ddu + eps**2 * mu * du + (delta + eps * h * cos(2 * t)) * u, {"order": 2}, UnsupportedTermError, r"A\*h\*\*k"),
        (ddu + eps * mu * du + (delta + eps * (h + c) * cos(2 * t)) * u, {}, UnsupportedTermError, "common factor"),
        (ddu + eps * mu * du + (delta + eps * h * cos(2 * t)) * u, {"tongue": 2}, UnsupportedTermError, "outweighs"),
        (ddu + (delta + eps * h * cos(2 * t)) * u, {"tongue": 0}, ProblemError, "tongue=0"),
    ],
)
def test_refusals_of_thresholds(equation, options, error, message):
    with pytest.raises(error, match=message):
        threshold(parametric(equation), delta, h, **{"order": 1, "tongue": 1, **options})
