"""What may be stated with forces that are not polynomial: mixtures, slow factors, resonances, offsets."""

from __future__ import annotations

import numpy as np
import pytest
import sympy as sp

import multiscale as ms

t = sp.Symbol("t", real=True)
eps, w, c, mu, alpha, f, h, Omega = sp.symbols("epsilon omega_0 c mu alpha f h Omega", positive=True)
s = sp.Symbol("sigma", real=True)
u, x = sp.Function("u")(t), sp.Function("x")(t)
v = u.diff(t)
DRAG = sp.Abs(v) * v


def expanded(force, order=1, omega=w, **options) -> ms.Expansion:
    return ms.expand(ms.Problem(u.diff(t, 2) + omega**2 * u + force, u, small=eps, **options), order)


def difference(got, wanted):
    return sp.cancel(sp.expand(got - wanted))


def test_terms_keep_their_closed_forms_beside_a_quadrature():
    expansion = expanded(eps * (DRAG + sp.tanh(u) + sp.sin(u)))
    (a,), (beta,) = expansion.symbols.a, expansion.symbols.beta
    assert difference(expansion.slow_flow.polar[a], -4 * eps * w * a**2 / (3 * sp.pi)) == 0
    turn = expansion.slow_flow.polar[beta]
    assert turn.has(sp.besselj)
    assert len(turn.atoms(sp.Integral)) == 1
    one = expanded(eps * (DRAG + sp.sin(u))).slow_flow.to_numpy("polar").bind(epsilon=0.1, omega_0=1.3)(0, [0.8, 0])
    two = expanded(eps * sp.tanh(u)).slow_flow.to_numpy("polar").bind(epsilon=0.1, omega_0=1.3)(0, [0.8, 0])
    both = expansion.slow_flow.to_numpy("polar").bind(epsilon=0.1, omega_0=1.3)(0, [0.8, 0])
    assert np.allclose(both, one + two, rtol=1e-13, atol=1e-17)


def test_parameters_masses_and_factors():
    m, k = sp.symbols("m k", positive=True)
    problem = ms.Problem(m * u.diff(t, 2) + k * u + eps * c * DRAG, u, small=eps)
    expansion = ms.expand(problem, 1)
    (a,) = expansion.symbols.a
    assert difference(expansion.slow_flow.polar[a], -4 * eps * c * sp.sqrt(k / m) * a**2 / (3 * sp.pi * m)) == 0
    assert expansion.slow_flow.to_numpy().parameters == ("c", "epsilon", "k", "m")


def test_drag_on_a_resonantly_driven_oscillator():
    """The same average as without a drive, in the phases of the drive."""
    force = eps * (c * DRAG + alpha * u**3 - f * sp.cos(Omega * t))
    expansion = expanded(force, resonances={Omega: w + eps * s})
    (a,), (gamma,) = expansion.symbols.a, expansion.symbols.gamma
    decay = eps * (-4 * c * w * a**2 / (3 * sp.pi) + f * sp.sin(gamma) / (2 * w))
    assert difference(expansion.slow_flow.polar[a], decay) == 0


@pytest.mark.parametrize("number", [2, 3])
def test_a_harmonic_drives_another_oscillator(number):
    """ε g(u) in the equation of x, whose frequency is near a multiple of that of u."""
    force = sp.Abs(u) if number == 2 else sp.Abs(u) * u
    function = (lambda z: abs(z)) if number == 2 else (lambda z: abs(z) * z)
    omega = sp.Symbol("omega_2", positive=True)
    problem = ms.Problem(
        [u.diff(t, 2) + w**2 * u, x.diff(t, 2) + omega**2 * x + eps * force],
        [u, x],
        small=eps,
        resonances={omega: number * w + eps * s},
    )
    expansion = ms.expand(problem, 1)
    assert len(expansion.slow_flow.phases) == 1
    flow = expansion.slow_flow.to_numpy().bind(epsilon=0.1, omega_0=1.3, sigma=0.0)
    y = np.array([0.7, -0.4, 0.0, 0.0])
    theta = 2 * np.pi * np.arange(2**18) / 2**18
    mean = np.mean(function(y[0] * np.cos(theta) + y[1] * np.sin(theta)) * np.exp(-1j * number * theta))
    change = 0.1 * 1j * mean / (2 * number * 1.3)
    assert np.allclose(flow(0.0, y), [0, 0, 2 * change.real, -2 * change.imag], rtol=0, atol=1e-10)


def test_a_static_offset_at_leading_order():
    """u = h + a cos θ: the average is taken about the offset."""
    expansion = expanded(-(w**2) * h + eps * sp.Abs(u) * u)
    found = expansion.slow_flow.to_numpy("polar").bind(epsilon=0.1, h=0.4, omega_0=1.3)(0.0, [0.9, 0.0])
    theta = 2 * np.pi * np.arange(2**18) / 2**18
    motion = 0.4 + 0.9 * np.cos(theta)
    mean = np.mean(np.abs(motion) * motion * np.exp(-1j * theta))
    assert np.allclose(found, [0.0, 0.1 * mean.real / (1.3 * 0.9)], rtol=0, atol=1e-9)


def test_a_force_at_the_second_power():
    expansion = expanded(eps * u**3 + eps**2 * sp.sign(v), order=2, omega=1)
    (a,), (beta,) = expansion.symbols.a, expansion.symbols.beta
    assert difference(expansion.slow_flow.polar[a], -2 * eps**2 / sp.pi) == 0
    cubic = ms.expand(ms.Problem(u.diff(t, 2) + u + eps * u**3, u, small=eps), 2)
    assert difference(expansion.slow_flow.polar[beta], cubic.slow_flow.polar[beta]) == 0


def test_a_slowly_varying_factor():
    M = sp.Function("M")(eps * t)
    expansion = expanded(eps * M * DRAG)
    (a,) = expansion.symbols.a
    assert difference(expansion.slow_flow.polar[a], -4 * eps * M * w * a**2 / (3 * sp.pi)) == 0
    assert not expansion.slow_flow.autonomous


def test_functions_for_polynomial_forces_say_so():
    with pytest.raises(ms.UnsupportedTermError, match="force that is not polynomial"):
        ms.periodic_series(expanded(eps * (DRAG - v), omega=1).problem, 2)


def test_a_cycle_against_drag():
    """a/2 = 4a²/(3π)."""
    (cycle,) = ms.limit_cycles(expanded(eps * (DRAG - v), omega=1))
    assert float(cycle.amplitude) == pytest.approx(float(3 * sp.pi / 8), rel=1e-11)
    assert cycle.stable


def test_the_undriven_oscillator_keeps_its_laws():
    F = sp.Function("F")
    driven = expanded(eps * (F(v) - f * sp.cos(Omega * t)), resonances={Omega: w + eps * s}, laws={F: np.tanh})
    assert ms.effective_damping(driven).has(sp.Integral)


def test_solution_and_levels_are_written():
    expansion = expanded(eps * DRAG, order=2, omega=1, harmonics=3)
    A, a = expansion.symbols.A[0], expansion.symbols.a[0]
    assert not any("@" in str(value) for value in expansion.solution("polar").values())
    assert not any("@" in str(value) for value in expansion.solution("cartesian").values())
    level = expansion.levels[2]
    assert level.divisors == ()
    written = [*level.solvability.values(), *level.corrections.values(), *level.forcing.values()]
    assert not any("@" in str(value) for value in written)
    # |A|A at level 1: −4a²/(3π) = 2|dA/dt| at A = a/2.
    (rate,) = expansion.levels[1].solvability.values()
    assert difference(rate.subs(A, a / 2), -2 * a**2 / (3 * sp.pi)) == 0
