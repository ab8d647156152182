"""A spring beyond a clearance, u'' + u + ε(max(u − g, 0) − max(−u − g, 0)) = 0, against its exact period.

Exact: within the clearance a cosine of frequency 1, beyond it one of frequency √(1 + ε) about εg/(1 + ε), joined where
|u| = g with continuous velocity.
"""

from __future__ import annotations

import numpy as np
import pytest
import sympy as sp

import multiscale as ms

from .integration import slope

t = sp.Symbol("t", real=True)
eps, g = sp.symbols("epsilon g", positive=True)
u = sp.Function("u")(t)
GAP = 0.6


@pytest.fixture(scope="module")
def expansion() -> ms.Expansion:
    spring = sp.Max(u - g, 0) - sp.Max(-u - g, 0)
    return ms.expand(ms.Problem(u.diff(t, 2) + u + eps * spring, u, small=eps), 1)


def exact_frequency(peak: float, small: float) -> float:
    stiff = np.sqrt(1 + small)
    centre = small * GAP / (1 + small)
    beyond = np.arccos((GAP - centre) / (peak - centre)) / stiff
    speed = stiff * (peak - centre) * np.sin(stiff * beyond)
    within = np.arctan2(GAP, speed)
    return np.pi / 2 / (beyond + within)


def test_frequency_is_elementary(expansion: ms.Expansion):
    (a,) = expansion.symbols.a
    contact = sp.acos(g / a) - g / a * sp.sqrt(1 - g**2 / a**2)
    shift = expansion.frequency_corrections()[1]
    assert shift.has(sp.Piecewise)
    above = shift.subs({a: 3, g: 1})
    assert sp.simplify(above - (contact / sp.pi).subs({a: 3, g: 1})) == 0
    assert shift.subs({a: 1, g: 3}) == 0


def test_error_of_the_frequency(expansion: ms.Expansion):
    """At equal amplitude the frequency is right to O(ε²); 0.9 of its shift is not."""
    function = expansion.frequency_to_numpy()
    smalls, errors, controls = [0.08, 0.04, 0.02, 0.01], [], []
    a = 1.3
    for small in smalls:
        # The peak of a motion whose fundamental is a differs from a by O(ε), which moves the frequency by O(ε²).
        found = float(function(0.0, [0.0, a], small, GAP))
        errors.append(abs(found - exact_frequency(a, small)))
        controls.append(abs(1 + 0.9 * (found - 1) - exact_frequency(a, small)))
    assert 1.9 < slope(smalls, errors) < 2.3
    assert errors[-1] < 0.1 * smalls[-1] ** 2
    assert slope(smalls, controls) < 1.3


@pytest.mark.parametrize("a", [0.1, 0.5999])
def test_nothing_happens_below_the_gap(expansion: ms.Expansion, a: float):
    function = expansion.slow_flow.to_numpy("polar").bind(epsilon=0.3, g=GAP)
    assert function(0.0, [a, 0.0]).tolist() == [0.0, 0.0]
    jacobian = expansion.slow_flow.to_numpy(wrt="state").bind(epsilon=0.3, g=GAP)
    assert not jacobian(0.0, [0.0, a]).any()
