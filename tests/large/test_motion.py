"""Large models against direct integration, their residual, and what must be visible in it."""

from dataclasses import replace

import numpy as np
import pytest
import scipy.sparse as sparse
import sympy as sp
from scipy.integrate import solve_ivp
from support.chains import chain

import multiscale as ms
from multiscale.algebra.vector_ring import VectorElement

t = sp.Symbol("t", real=True)
eps, f, Omega = sp.symbols("epsilon f Omega", positive=True)
sigma = sp.Symbol("sigma", real=True)
w1 = sp.Symbol("omega_1", positive=True)


def integrated(model, springs, damping, start, times, small):
    """DOP853 on the equations of motion, from the matrices alone."""
    mass, stiffness = model.matrices["M"], model.matrices["K"]
    b, k2, k3, inverse = springs.elongation, springs.quadratic, springs.cubic, 1 / mass.diagonal()
    n = model.size

    def rate(_, x):
        u, v = x[:n], x[n:]
        stretch = b @ u
        force = stiffness @ u + b.T @ (small * k2 * stretch**2 + small**2 * k3 * stretch**3)
        return np.concatenate([v, -inverse * (force + small**2 * damping * v)])

    found = solve_ivp(rate, (0, times[-1]), start, "DOP853", times, rtol=1e-12, atol=1e-13)
    return found.y[:n]


@pytest.mark.slow
@pytest.mark.parametrize("order", [2, 3])
def test_error_against_direct_integration_falls_with_the_order(order):
    """30 masses from the reconstructed motion, over t = O(1/ε): the error is O(ε^N)."""
    mass, stiffness, springs = chain(30, 0.05, quadratic=1.0, cubic=2.0)
    damping = 0.05
    model = ms.reduce_model(
        mass, stiffness, C=damping * sparse.identity(30), springs=springs, order=order, tolerance=1e-4
    )
    rhs = model.slow_flow.to_numpy()
    errors, values = [], np.array([0.16, 0.08, 0.04])
    for small in values:
        y, times = np.array([1.0, 0.3]), np.linspace(0, 12 / small, 60)
        start = [model.displacement(0.0, y, {eps: small}, derivative=d) for d in (0, 1)]
        truth = integrated(model, springs, damping, np.concatenate(start), times, small)
        slow = solve_ivp(rhs.bind(epsilon=small), (0, times[-1]), y, "DOP853", times, rtol=1e-11, atol=1e-12)
        found = model.displacement(times, slow.y, {eps: small})
        errors.append(np.max(np.abs(found - truth)))
    slopes = np.diff(np.log(errors)) / np.diff(np.log(values))
    assert np.all(slopes > order - 0.2)
    assert errors[-1] < 5e-4


def certified(order=3, **options):
    mass, stiffness, springs = chain(50, 0.3)
    return ms.reduce_model(mass, stiffness, springs=springs, order=order, tolerance=1e-4, **options)


@pytest.mark.parametrize("order", [1, 2, 3, 4, 5])
@pytest.mark.filterwarnings("ignore::multiscale.OrderingWarning")
def test_the_residual_falls_with_the_order(order):
    certificate = certified(order).certify()
    assert certificate.passed
    assert min(certificate.exponents) > order + 0.7
    certificate.require()


def test_the_residual_of_a_driven_damped_model():
    load = np.zeros(50)
    load[7] = 1.0
    model = certified(
        C=0.1 * sparse.identity(50), drive=(load, f * sp.cos(Omega * t)), resonances={Omega: w1 + eps**2 * sigma}
    )
    assert model.certify(parameters={"sigma": 0.4}).passed
    shifted = model.residual(0.3, [0.5, 0.2], {eps: 0.05, f: 0.3, Omega: model.modes[0].frequency})
    assert shifted.shape == (50,)
    assert np.max(abs(shifted)) < 1e-5


def altered(model, level, factor):
    """The model with one vector field multiplied."""
    computation = model.expansion.computation
    tower = computation.hierarchy.tower
    jets = [list(levels) for levels in tower.jets]
    for levels in jets:
        levels[level] = tuple(VectorElement({m: factor * c for m, c in x.terms.items()}) for x in levels[level])
    tower = replace(tower, jets=tuple(tuple(levels) for levels in jets))
    computation = replace(computation, hierarchy=replace(computation.hierarchy, tower=tower))
    return replace(model, expansion=replace(model.expansion, computation=computation))


@pytest.mark.parametrize(("level", "exponent"), [(1, 1), (2, 2)])
def test_a_wrong_field_is_found(level, exponent):
    certificate = altered(certified(), level, 1.001).certify()
    assert not certificate.passed
    assert min(certificate.exponents) < exponent + 0.5
    with pytest.raises(ms.MultiscaleError, match="too slowly"):
        certificate.require()


def test_a_wrong_slow_flow_is_found():
    model = certified()
    computation = model.expansion.computation
    tower = computation.hierarchy.tower
    images = {name: x * tower.ring.constant(1.001) for name, x in tower.time[2].images.items()}
    time = (*tower.time[:2], replace(tower.time[2], images=images), *tower.time[3:])
    computation = replace(computation, hierarchy=replace(computation.hierarchy, tower=replace(tower, time=time)))
    wrong = replace(model, expansion=replace(model.expansion, computation=computation))
    assert not wrong.certify().passed


def test_wrong_equations_are_found():
    model = certified()
    (coefficient, shape), *others = model.weak
    assert not replace(model, weak=((coefficient * 1.001, shape), *others)).certify().passed
