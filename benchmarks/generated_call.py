"""One call of a generated slow flow against the same formula written by hand in NumPy.

Compared: `slow_flow.to_numpy("cartesian")` of a damped Duffing oscillator to order 2, called as f(t, y, *parameters)
and bound, with `opponents.damped_duffing.flow`, in which common subexpressions are shared and scalars are multiplied
before arrays; for one state, where the overhead of a call counts, and for a million, where passes over memory count.

Floor: for one state, the same formula with Python numbers, without any check of shapes; for a million, the formula with
everything that depends on the parameters alone worked out beforehand. Both are reported without a target.
"""

from __future__ import annotations

from functools import partial

import numpy as np

import multiscale as ms
from benchmarks.opponents.damped_duffing import flow, flow_bound, flow_of_numbers
from benchmarks.problems import damped_duffing
from benchmarks.report import Result, against
from benchmarks.timing import in_turns

TARGET = 1.3
VALUES = {"alpha_3": 1.25, "epsilon": 0.1, "mu": 0.3, "omega": 2.0}
STATES = 10**6


def _checked(name: str, found: np.ndarray, expected: np.ndarray) -> None:
    if found.shape != expected.shape or not np.allclose(found, expected, rtol=1e-12, atol=1e-14):
        raise RuntimeError(f"{name} and the generated function disagree")


def run() -> list[Result]:
    generated = ms.expand(damped_duffing(), 2).slow_flow.to_numpy("cartesian")
    if generated.parameters != tuple(VALUES):
        raise RuntimeError(f"unexpected parameters {generated.parameters}")
    values = tuple(VALUES.values())
    bound, by_hand_bound = generated.bind(VALUES), flow_bound(*values)
    one, many = np.array([0.4, -0.7]), np.random.default_rng(1).normal(size=(2, STATES))
    results = []
    for label, y, floor in (("one state", one, flow_of_numbers), (f"{STATES} states", many, None)):
        _checked("flow", flow(0.0, y, *values), generated(0.0, y, *values))
        _checked("flow_bound", by_hand_bound(0.0, y), bound(0.0, y))
        candidates = {
            "generated": partial(generated, 0.0, y, *values),
            "by hand": partial(flow, 0.0, y, *values),
            "generated, bound": partial(bound, 0.0, y),
            "by hand, bound": partial(by_hand_bound, 0.0, y),
        }
        if floor is not None:
            _checked("flow_of_numbers", floor(0.0, y, *values), generated(0.0, y, *values))
            candidates["floor"] = partial(floor, 0.0, y, *values)
        rounds = in_turns(candidates, repeats=15)
        results += [
            against(f"{label}, f(t, y, *parameters)", rounds, library="generated", opponent="by hand", target=TARGET),
            against(f"{label}, bound", rounds, library="generated, bound", opponent="by hand", target=TARGET),
            against(
                f"{label}, bound, against constants worked out beforehand",
                rounds,
                library="generated, bound",
                opponent="by hand, bound",
            ),
        ]
        if floor is not None:
            floored = against(f"{label}, against Python numbers", rounds, library="generated", opponent="floor")
            results.append(floored)
    return results
