"""Onset of oscillation: criticality, series along the branch, and what is refused."""

from __future__ import annotations

import pytest
import sympy as sp

import multiscale as ms

t = sp.Symbol("t", real=True)
mu, beta = sp.symbols("mu beta", real=True)
A, eps = sp.symbols("A epsilon", positive=True)
x, y, z = (sp.Function(name)(t) for name in "xyz")
R = sp.Rational


def normal_form(cubic, quintic=0):
    """r' = μr + cubic r³ + quintic r⁵, θ' = 1 + r², in the plane."""
    square = x**2 + y**2
    growth = mu + cubic * square + quintic * square**2
    equations = [x.diff(t) - growth * x + (1 + square) * y, y.diff(t) - growth * y - (1 + square) * x]
    return ms.Problem([sp.expand(e) for e in equations], [x, y], ordering={x: 1, y: 1, mu: 2})


@pytest.mark.parametrize(("cubic", "kind"), [(-1, True), (1, False), (beta, None)])
def test_exact_normal_form(cubic, kind):
    """The radius is the amplitude: μ = −cubic a² − quintic a⁴ and ω = 1 + a² exactly."""
    result = ms.expand(normal_form(cubic, R(1, 3)), 4)
    cycle, a, e = ms.onset(result, mu), result.symbols.a[0], result.problem.small
    assert sp.expand(cycle.parameter.subs(e, 1) + cubic * a**2 + a**4 / 3) == 0
    assert sp.expand(cycle.frequency.subs(e, 1) - 1 - a**2) == 0
    assert (cycle.crossing, cycle.coefficient) == (e**2, cubic * e**2)
    assert cycle.supercritical is kind


def test_limit_cycles_and_onset_are_inverse_series():
    result = ms.expand(normal_form(-1, R(1, 3)), 4)
    cycle, (orbit,) = ms.onset(result, mu), ms.limit_cycles(result)
    e, a = result.problem.small, result.symbols.a[0]
    back = sp.series(cycle.parameter.subs(a, orbit.amplitude), e, 0, 3).removeO()
    assert sp.simplify(back - mu) == 0
    assert orbit.exponent == -2 * e**2 * mu


def test_symbolic_brusselator():
    """B = 1 + A² + μ: ω_0 = A and the first coefficient −(2 + A²)/(8A²) for the amplitude of x."""
    B = 1 + A**2 + mu
    X, Y = A + x, B / A + y
    equations = [x.diff(t) - (A - (B + 1) * X + X**2 * Y), y.diff(t) - (B * X - X**2 * Y)]
    result = ms.expand(ms.Problem([sp.expand(e) for e in equations], [x, y], ordering={x: 1, y: 1, mu: 2}), 2)
    assert result.problem.natural_frequencies == (A,)
    cycle, e = ms.onset(result, mu), result.problem.small
    assert sp.cancel(cycle.crossing / e**2 - R(1, 2)) == 0
    assert sp.cancel(cycle.coefficient / e**2 + (2 + A**2) / (8 * A**2)) == 0
    assert cycle.supercritical is True


def test_slaved_unknown_changes_criticality():
    """A decaying unknown driven by x² feeds back on x: with strong feedback the onset becomes subcritical."""

    def coefficient(feedback):
        equations = [x.diff(t) - mu * x + y + x**3 + feedback * x * z, y.diff(t) - x, z.diff(t) + z + x**2]
        result = ms.expand(ms.Problem(equations, [x, y, z], ordering={x: 1, y: 1, z: 1, mu: 2}), 2)
        return ms.onset(result, mu)

    # z = −½a² − …: mean part −a²/2 and second harmonic; the mean alone adds feedback·a²/4 to the growth rate.
    assert coefficient(0).supercritical is True
    assert coefficient(4).supercritical is False


def test_refusals():
    result = ms.expand(normal_form(-1), 2)
    with pytest.raises(ms.EvaluationError, match="no parameter"):
        ms.onset(result, beta)
    with pytest.raises(ms.ProblemError, match="pass the result"):
        ms.onset(normal_form(-1), mu)
    off = [x.diff(t) - (mu + eps) * x + y + x**3, y.diff(t) - x]
    shifted = ms.expand(ms.Problem(off, [x, y], ordering={x: 1, y: 1, mu: 2, eps: 2}), 2)
    with pytest.raises(ms.ProblemError, match="not zero: measure mu"):
        ms.onset(shifted, mu)
    late = [x.diff(t) - mu * x + y + x**3, y.diff(t) - x]
    with pytest.raises(ms.ProblemError, match="give mu a lower power"):
        ms.onset(ms.expand(ms.Problem(late, [x, y], ordering={x: 1, y: 1, mu: 4}), 2), mu)
    two = [x.diff(t, 2) + x + mu * x.diff(t) + y, y.diff(t, 2) + 3 * y + x**3]
    with pytest.raises(ms.UnsupportedTermError, match="carries 2 modes"):
        ms.onset(ms.expand(ms.Problem(two, [x, y], ordering={x: 1, y: 1, mu: 2}), 2), mu)
