"""A long kernel at fixed parameters gives the same numbers to the last bit, with its coefficients worked out once."""

from __future__ import annotations

import copy
import math
import pickle

import numpy as np
import pytest
import sympy as sp

import multiscale as ms
from multiscale.codegen import numpy_function
from multiscale.codegen.staging import staged

t = sp.Symbol("t", real=True)
eps, k, m, mu, f, Omega, sigma = sp.symbols("epsilon k m mu f Omega sigma", positive=True)
alpha, fixed = sp.symbols("alpha fixed_0_", real=True)
u = sp.Function("u")(t)
PROBLEM = ms.Problem(
    m * u.diff(t, 2) + k * u + 2 * eps * mu * u.diff(t) + eps * (alpha + fixed) * u**3 + eps * alpha * u**2,
    u,
    small=eps,
)
VALUES = {"epsilon": 0.17, "k": 2.3, "m": 0.7, "mu": 0.11, "alpha": -0.9, "fixed_0_": 0.4}


@pytest.fixture(params=["flow", "jacobian", "polar", "displacement", "frequency"], scope="module")
def function(request):
    result = ms.expand(PROBLEM, 3)
    return {
        "flow": lambda: result.slow_flow.to_numpy(),
        "jacobian": lambda: result.slow_flow.to_numpy(wrt="state"),
        "polar": lambda: result.slow_flow.to_numpy("polar"),
        "displacement": lambda: result.to_numpy(1),
        "frequency": lambda: result.frequency_to_numpy(),
    }[request.param]()


@pytest.fixture
def long(monkeypatch):
    monkeypatch.setattr(numpy_function, "LONG", 0)


def test_same_bits(function, long):
    values = function.values(VALUES)
    bound = function.bind(VALUES)
    assert bound._staged is not None
    for y in np.random.default_rng(5).normal(size=(20, 2)):
        np.testing.assert_array_equal(bound(0.3, y), function(0.3, y, *values))
    many = np.random.default_rng(6).normal(size=(2, 9))
    np.testing.assert_array_equal(bound(0.3, many), function(0.3, many, *values))


def test_copies(function, long):
    bound = function.bind(VALUES)
    for other in (copy.deepcopy(bound), pickle.loads(pickle.dumps(bound))):
        np.testing.assert_array_equal(other(0.1, [0.4, 0.2]), bound(0.1, [0.4, 0.2]))


def test_singular_parameters_answer_as_numpy_does(function, long):
    bound = function.bind(VALUES | {"m": 0.0})
    with np.errstate(all="ignore"):
        assert not np.isfinite(bound(0.3, np.array([0.4, 0.2]))).all()


def test_short_kernels_are_left_alone():
    bound = ms.expand(PROBLEM, 1 + 1).slow_flow.to_numpy().bind(VALUES)
    assert bound._staged is None


def test_coefficients_are_worked_out_once():
    calls = []

    def sqrt(x):
        calls.append(x)
        return math.sqrt(x)

    source = "def kernel(t, p, a):\n    v0 = sqrt(a)\n    return (v0 * p + sqrt(a) * t, sqrt(p))\n"
    kernel = staged(source, {"sqrt": sqrt}, (4.0,))
    assert calls == [4.0, 4.0]
    assert kernel(1.0, 9.0) == (20.0, 3.0)
    assert calls == [4.0, 4.0, 9.0]
