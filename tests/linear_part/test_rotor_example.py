"""The rotor example: its steady whirl against the exact circular solution, with errors of the order promised."""

from __future__ import annotations

import runpy
from pathlib import Path

import pytest

EXAMPLE = Path(__file__).parents[2] / "docs" / "examples" / "rotor_whirl.py"


def test_whirl_agrees_with_the_circular_solution():
    pytest.importorskip("scipy")
    module = runpy.run_path(str(EXAMPLE))
    worst = {}
    for order in (1, 2):
        errors = []
        for detuning, states in module["response"](order).items():
            exact = module["exact_radii"](detuning)
            assert len(states) == len(exact)
            errors += [abs(r - z) for (r, _), z in zip(states, exact, strict=True)]
        worst[order] = max(errors)
    assert worst[1] < 0.15
    assert worst[2] < worst[1] / 8


def test_three_states_meet_one_detuning():
    pytest.importorskip("scipy")
    states = runpy.run_path(str(EXAMPLE))["response"](2)[2.5]
    assert [stable for _, stable in states] == [True, False, True]
