"""Public objects travel to a freshly started process and give the same numbers there."""

from __future__ import annotations

import multiprocessing
import pickle

import numpy as np
import pytest
import sympy as sp

import multiscale as ms

t = sp.Symbol("t", real=True)
eps, mu, f, Omega = sp.symbols("epsilon mu f Omega", positive=True)
sigma = sp.Symbol("sigma", real=True)
u, v = sp.Function("u")(t), sp.Function("v")(t)
VALUES = {"epsilon": 0.01, "mu": 0.1, "f": 0.4}

FREE = ms.Problem(u.diff(t, 2) + u + eps * u**3, u, small=eps)
CYCLE = ms.Problem(u.diff(t, 2) + u + eps * (u**2 - 1) * u.diff(t), u, small=eps)
DRIVEN = ms.Problem(
    u.diff(t, 2) + u + eps * (2 * mu * u.diff(t) + u**3 - f * sp.cos(Omega * t)),
    u,
    small=eps,
    resonances={Omega: 1 + eps * sigma},
)


ONSET = ms.Problem([u.diff(t) - v, v.diff(t) + u - mu * v + u**2 * v], [u, v], ordering={u: 1, v: 1, mu: 2})


def free():
    return ms.expand(FREE, 2)


def driven():
    return ms.expand(DRIVEN, 2)


def response():
    return ms.frequency_response(driven(), VALUES, sweep={sigma: np.linspace(-1, 3, 41)})


# name -> (how it is made, what is asked of it in the other process)
OBJECTS = {
    "Problem": (lambda: DRIVEN, "natural_frequencies"),
    "Expansion": (driven, "nonresonance"),
    "SlowFlow": (lambda: driven().slow_flow, "polar"),
    "Level": (lambda: driven().levels[2], "corrections"),
    "NumpyFunction": (lambda: driven().slow_flow.to_numpy(), "source"),
    "BoundFunction": (lambda: driven().slow_flow.to_numpy().bind(VALUES, sigma=0.2), "parameters"),
    "Equilibrium": (lambda: ms.equilibria(driven(), VALUES | {"sigma": 0.5})[0], "amplitudes"),
    "Response": (response, "complete"),
    "LimitCycle": (lambda: ms.limit_cycles(ms.expand(CYCLE, 2))[0], "frequency"),
    "PeriodicSeries": (lambda: ms.periodic_series(CYCLE, 6), "frequency_coefficients"),
    "Observable": (lambda: ms.observable(free(), u**2), "to_numpy"),
    "RingDownModel": (lambda: ms.ring_down_model(free(), [0, 1, 2], free=["epsilon"]), "names"),
    "ResponseModel": (
        lambda: ms.response_model(driven(), {sigma: [0.0, 1.0]}, free=["f", "mu"], known={eps: 0.01}),
        "names",
    ),
    "Certificate": (lambda: ms.certify(driven()), "exponents"),
    "Approximant": (lambda: ms.pade([1, 2, 3, 5, 9], eps), "poles"),
    "Validity": (lambda: ms.validity(free(), {eps: 0.1}, 0.01), "amplitude"),
    "Comparison": (
        lambda: ms.compare(free(), {}, {u: 1.0, u.diff(t): 0.0}, [0.1, 0.05], 1.0),
        "order",
    ),
    "TermEstimate": (lambda: ms.estimate_terms(FREE, 4), "total"),
    "Onset": (lambda: ms.onset(ms.expand(ONSET, 2), mu), "parameter"),
    "NoisyFlow": (lambda: ms.noisy_flow(driven(), {u: f}), "drift"),
}


def ask(data, question):
    """Run in the other process."""
    return type(found := getattr(pickle.loads(data), question)).__name__, None if callable(found) else found


@pytest.fixture(scope="module")
def other():
    with multiprocessing.get_context("spawn").Pool(1) as pool:
        yield pool


@pytest.mark.parametrize("name", OBJECTS)
def test_objects_travel_to_another_process(name, other):
    made, question = OBJECTS[name]
    thing = made()
    kind, answer = other.apply(ask, (pickle.dumps(thing), question))
    own = getattr(thing, question)
    assert kind == type(own).__name__
    if not callable(own):
        assert answer == own
