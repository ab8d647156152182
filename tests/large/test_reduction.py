"""Large models against the exact route on small chains, and the forms in which forces may be given."""

import logging
import math

import numpy as np
import pytest
import scipy.sparse as sparse
import sympy as sp
from support.chains import chain, coefficients, difference, stretches, string, tensors

import multiscale as ms

t = sp.Symbol("t", real=True)
eps, f, Omega, mu = sp.symbols("epsilon f Omega mu", positive=True)
sigma, w1, w2 = sp.Symbol("sigma", real=True), *sp.symbols("omega_1 omega_2", positive=True)
U = [sp.Function(f"u_{k + 1}")(t) for k in range(4)]


def exact_chain(n, order, **options):
    """A chain of unit masses and springs with rational coefficients, in exact arithmetic, and its numbers."""
    b = sp.Matrix(n + 1, n, lambda i, j: int(i == j) - int(i == j + 1))
    stiffness = b.T * b + sp.eye(n) / 5
    k2 = [sp.Rational(1, 3 + s) for s in range(n + 1)]
    k3 = [sp.Rational(2 + s, 5) for s in range(n + 1)]
    force = [sum(c * b[s, i] * sum(b[s, j] * U[j] for j in range(n)) ** 2 for s, c in enumerate(k2)) for i in range(n)]
    cube = [sum(c * b[s, i] * sum(b[s, j] * U[j] for j in range(n)) ** 3 for s, c in enumerate(k3)) for i in range(n)]
    equations = [
        U[i].diff(t, 2)
        + sum(stiffness[i, j] * U[j] for j in range(n))
        + eps * force[i]
        + eps**2 * cube[i]
        + eps**2 * U[i].diff(t) / 10
        for i in range(n)
    ]
    expansion = ms.expand(ms.Problem(equations, U[:n], small=eps, **options), order)
    numbers = {
        "M": sparse.identity(n),
        "K": np.array(stiffness, dtype=float),
        "C": sparse.identity(n) / 10,
        "springs": ms.Springs(np.array(b, dtype=float), np.array(k2, dtype=float), np.array(k3, dtype=float)),
    }
    return expansion, numbers


@pytest.mark.parametrize(("n", "modes", "order"), [(2, [0], 4), (2, [0, 1], 3), (3, [0], 3), (3, [2, 0], 2)])
@pytest.mark.filterwarnings("ignore::multiscale.SmallDivisorWarning")
def test_a_small_chain_agrees_with_exact_arithmetic(n, modes, order):
    references = dict.fromkeys(modes, U[0])
    exact, numbers = exact_chain(n, order, modes=modes, references=references)
    assert exact.representation != "complex"
    own = sorted(modes)
    model = ms.reduce_model(**numbers, order=order, modes=own, references=dict.fromkeys(range(len(own)), 0))
    assert difference(coefficients(exact), coefficients(model.expansion)) < 1e-12
    y, parameters = np.random.default_rng(0).normal(size=2 * len(own)), {eps: 0.1}
    for derivative in (0, 1, 2):
        found = model.displacement(0.7, y, parameters, derivative=derivative)
        assert found == pytest.approx(exact.to_numpy(derivative).bind(epsilon=0.1)(0.7, y), abs=1e-12)


def dense(n=4, **options):
    mass, stiffness, springs = chain(n, 0.3)
    quadratic, cubic = tensors(springs)
    matrices = {"M": mass.toarray(), "K": stiffness.toarray(), "quadratic": quadratic, "cubic": cubic}
    return matrices | options, {"M": mass, "K": stiffness, "springs": springs} | options


CASES = {
    "free": ({}, 4, {}),
    "damped": ({"C": 0.1 * np.eye(4) + 0.05 * np.diag([1, 2, 3, 4])}, 3, {}),
    "gyroscopic": ({"G": 0.4 * (np.eye(4, k=1) - np.eye(4, k=-1))}, 3, {}),
    "circulatory": ({"G": 0.1 * np.diag([0, 0, 0, 0]) + 0.3 * (np.eye(4, k=2) - np.eye(4, k=-2))}, 2, {}),
}


@pytest.mark.parametrize("case", CASES)
@pytest.mark.filterwarnings("ignore::multiscale.SmallDivisorWarning")
def test_it_agrees_with_the_dense_route(case):
    options, order, _ = CASES[case]
    stated, sparse_form = dense(**options)
    expansion = ms.expand(ms.Problem.from_matrices(**stated, modes=[0], references={0: U[1]}), order)
    model = ms.reduce_model(**sparse_form, order=order, references={0: 1})
    assert difference(coefficients(expansion), coefficients(model.expansion)) < 1e-12
    y = np.array([0.4, -0.7])
    found = model.displacement(0.3, y, {eps: 0.2})
    assert found == pytest.approx(expansion.to_numpy().bind(epsilon=0.2)(0.3, y), abs=1e-12)


@pytest.mark.filterwarnings("ignore::multiscale.SmallDivisorWarning")
def test_a_drive_at_resonance_and_its_response():
    stated, sparse_form = dense(C=0.1 * np.eye(4))
    load = np.array([1.0, 0.5, -0.2, 0.3])
    relation = {Omega: w1 + eps**2 * sigma}
    wave = f * sp.cos(Omega * t)
    problem = ms.Problem.from_matrices(
        **stated, drive=[float(b) * wave for b in load], modes=[0], references={0: U[1]}, resonances=relation
    )
    expansion = ms.expand(problem, 3)
    model = ms.reduce_model(**sparse_form, drive=(load, wave), order=3, references={0: 1}, resonances=relation)
    values = {"f": 0.7, "sigma": 0.4}
    assert difference(coefficients(expansion, **values), coefficients(model.expansion, **values)) < 1e-12
    parameters = {eps: 0.2, f: 0.3, Omega: 1.01 * model.modes[0].frequency}
    states = [ms.equilibria(x, parameters) for x in (expansion, model.expansion)]
    assert [s.amplitudes for s in states[0]] == [pytest.approx(s.amplitudes, rel=1e-9) for s in states[1]]
    curve = ms.frequency_response(model.expansion, {eps: 0.3, f: 0.2}, sweep={sigma: np.linspace(-1, 2, 30)})
    assert curve.peak().interior
    states = np.random.default_rng(1).normal(size=(2, 3))
    times = np.linspace(0, 1, 3)
    batch = model.displacement(times, states, parameters, dofs=[2, 0])
    assert batch.shape == (2, 3)
    single = expansion.to_numpy().bind(parameters)(times[1], states[:, 1])
    assert batch[:, 1] == pytest.approx(single[[2, 0]], abs=1e-12)


@pytest.mark.filterwarnings("ignore::multiscale.SmallDivisorWarning")
def test_loads_of_different_shape_at_leading_order():
    stated, sparse_form = dense()
    waves = f * sp.cos(3.1 * t), 0.3 * sp.sin(0.35 * t + mu)
    loads = np.array([[1.0, 0.5, -0.2, 0.3], [0.0, 0.0, 1.0, 2.0]])
    orders = {"drive": 0}
    forces = [sum(float(b) * g for b, g in zip(column, waves, strict=True)) for column in loads.T]
    problem = ms.Problem.from_matrices(**stated, drive=forces, orders=orders, modes=[0], references={0: U[1]})
    expansion = ms.expand(problem, 2)
    drive = list(zip(loads, waves, strict=True))
    model = ms.reduce_model(**sparse_form, drive=drive, orders=orders, order=2, references={0: 1}, tolerance=1e-4)
    values = {"f": 0.7, "mu": 0.2}
    assert difference(coefficients(expansion, **values), coefficients(model.expansion, **values)) < 1e-12
    assert model.certify(parameters=values).passed


@pytest.mark.filterwarnings("ignore::multiscale.SmallDivisorWarning")
def test_a_pulsating_stiffness():
    """Principal parametric resonance, Ω = 2ω_1 + ε²σ, against the same equations written out."""
    stated, sparse_form = dense(C=0.1 * np.eye(4))
    pulsating = np.diag([1.0, 0.5, 0.2, 0.7]) + 0.1 * np.eye(4, k=1) + 0.1 * np.eye(4, k=-1)
    wave, relation = f * sp.cos(Omega * t), {Omega: 2 * w1 + eps**2 * sigma}
    plain = ms.Problem.from_matrices(**stated, modes=[0]).equations
    equations = [
        x + eps**2 * wave * sum(float(c) * u for c, u in zip(row, U, strict=True))
        for x, row in zip(plain, pulsating, strict=True)
    ]
    problem = ms.Problem(equations, U, small=eps, modes=[0], references={0: U[1]}, resonances=relation)
    expansion = ms.expand(problem, 3)
    model = ms.reduce_model(
        **sparse_form, K1=pulsating, scales={"K1": wave}, order=3, references={0: 1}, resonances=relation
    )
    values = {"f": 0.7, "sigma": 0.4}
    found = coefficients(model.expansion, **values)
    assert difference(coefficients(expansion, **values), found) < 1e-12
    assert (2, 0, (0, 1)) in found
    assert model.certify(parameters=values).passed


def test_internal_resonance_splits_the_stiffness_along_the_mode():
    """ω_2 = 2.07 against 2ω_1 = 2: uncoupled at leading order, so that the exact route can state it."""
    _, _, springs = chain(2, 0.3)
    quadratic, cubic = tensors(springs)
    relation = {w2: 2 * w1 + eps * sigma}
    model = ms.reduce_model(
        np.eye(2),
        np.diag([1.0, 2.07**2]),
        C=np.eye(2),
        springs=springs,
        modes=[0, 1],
        order=3,
        resonances=relation,
        scales={"C": mu},
    )
    problem = ms.Problem.from_matrices(
        M=np.eye(2, dtype=int),
        K=[[1, 0], [0, w2**2]],
        C=mu * sp.eye(2),
        quadratic=quadratic,
        cubic=cubic,
        resonances={w2: 2 + eps * sigma},
    )
    expansion = ms.expand(problem, 3)
    flows = [x.slow_flow.to_numpy() for x in (expansion, model.expansion)]
    y = [0.4, 0.3, -0.2, 0.6]
    values = {"epsilon": 0.1, "mu": 0.2, "sigma": 0.7}
    assert flows[0].bind(values)(0.0, y) == pytest.approx(flows[1].bind(values)(0.0, y), abs=1e-13)
    assert model.values({eps: 0.1, mu: 0.2})["sigma"] == pytest.approx(0.7)
    assert model.certify().passed


def test_the_detuning_of_the_structure_gives_the_motion_of_the_matrices():
    """With σ from the matrices, the residual of the equations as given falls; with another, it does not."""
    mass, stiffness, springs = sparse.identity(2), np.array([[1.0, 0.1], [0.1, 4.2]]), chain(2, 0.3)[2]
    relation = {w2: 2 * w1 + eps * sigma}
    model = ms.reduce_model(mass, stiffness, springs=springs, modes=[0, 1], order=3, resonances=relation)
    y, parameters = np.array([0.1, 0.2, -0.1, 0.1]), {eps: 0.1}
    u, v, a = (model.displacement(0.4, y, parameters, derivative=d) for d in (0, 1, 2))
    own = model.residual(0.4, y, parameters)
    shifted = model.residual(0.4, y, {eps: 0.1, sigma: 1.5})
    b, k2, k3 = springs.elongation, springs.quadratic, springs.cubic
    plain = mass @ a + stiffness @ u + 0.1 * b.T @ (k2 * (b @ u) ** 2) + 0.01 * b.T @ (k3 * (b @ u) ** 3)
    assert np.max(abs(own)) < 1e-5
    assert np.max(abs(plain)) < 3e-5
    assert np.max(abs(shifted)) < 1e-5
    assert v.shape == (2,)


def test_all_forms_of_forces_agree():
    mass, stiffness, springs = chain(6, 0.3)
    b, k2, k3 = springs.elongation, springs.quadratic, springs.cubic
    quadratic, cubic = tensors(springs)
    pairs = [(np.argwhere(x), x[tuple(np.argwhere(x).T)]) for x in (quadratic, cubic)]
    mappings = [{tuple(i): c for i, c in zip(*pair, strict=True)} for pair in pairs]
    functions = (
        lambda x, y: b.T @ (k2 * (b @ x) * (b @ y)),
        lambda x, y, z: b.T @ (k3 * (b @ x) * (b @ y) * (b @ z)),
    )
    first = coefficients(ms.reduce_model(mass, stiffness, springs=springs, order=4).expansion)
    assert len(first) == 2
    for q, c in ((quadratic, cubic), pairs, mappings, functions):
        other = coefficients(ms.reduce_model(mass, stiffness, quadratic=q, cubic=c, order=4).expansion)
        assert difference(first, other) < 1e-14


def continuum(order):
    """ω(a) of a string on a cubic foundation: u_tt − u_xx + κu + εαu³ = 0, its shapes sin kπx, k = 1 and 3.

    To the second order u³ reaches the third shape alone, so these two are exact.
    """
    kappa, alpha = sp.Integer(3), sp.Integer(2)
    q, x = U[:2], np.arange(64) / 64
    shapes = [np.sin(np.pi * x), np.sin(3 * np.pi * x)]
    forces = [sp.Integer(0), sp.Integer(0)]
    for m, (a, b) in enumerate([(3, 0), (2, 1), (1, 2), (0, 3)]):
        for k, phi in enumerate(shapes):
            # The mean of a trigonometric polynomial: exact with this many points, and a multiple of 1/4.
            mean = 2 * np.mean(shapes[0] ** a * shapes[1] ** b * phi)
            forces[k] += math.comb(3, m) * sp.Rational(round(4 * mean), 4) * q[0] ** a * q[1] ** b
    roots = sp.symbols("Omega_1 Omega_3", positive=True)
    equations = [u.diff(t, 2) + w**2 * u + eps * alpha * g for u, w, g in zip(q, roots, forces, strict=True)]
    expansion = ms.expand(ms.Problem(equations, q, small=eps), order)
    values = {w: sp.sqrt(kappa + (k * sp.pi) ** 2) for w, k in zip(roots, (1, 3), strict=True)}
    parts = [x.subs({expansion.symbols.a[1]: 0, expansion.symbols.a[0]: 1}) for x in expansion.frequency_corrections(0)]
    return [float(x.subs(values)) for x in parts]


def test_a_string_converges_to_the_continuum():
    """First order also in closed form: 9 α a²/(32 ω_1). Measured at x = 1/3, where the third shape has a node."""
    expected = continuum(2)
    assert expected[1] == pytest.approx(9 * 2 / (32 * np.sqrt(3 + np.pi**2)))
    errors = []
    for n in (41, 83, 167):
        mass, stiffness, springs = string(n, 3.0, 2.0)
        model = ms.reduce_model(
            mass, stiffness, springs=springs, order=2, orders={"cubic": 1}, references={0: (n + 1) // 3 - 1}
        )
        amplitude = {model.expansion.symbols.a[0]: np.sin(np.pi / 3)}
        values = [float(sp.sympify(x).subs(amplitude)) for x in model.expansion.frequency_corrections()]
        errors.append([abs(x - y) for x, y in zip(values, expected, strict=True)])
    slopes = np.log2(np.array(errors)[:-1] / np.array(errors)[1:])
    assert np.all(slopes > 1.95)
    assert np.all(slopes < 2.05)
    assert max(errors[-1]) < 1e-3


def test_extension_and_progress(caplog):
    mass, stiffness, springs = chain(40, 0.08)
    seen = []
    with caplog.at_level(logging.INFO, logger="multiscale"):
        model = ms.reduce_model(
            mass, stiffness, springs=springs, order=2, on_level=lambda level: seen.append(level.order)
        )
    assert seen == [1, 2]
    assert "level 2 of 2" in caplog.text
    longer = model.extended(4)
    direct = ms.reduce_model(mass, stiffness, springs=springs, order=4, tolerance=1e-4)
    assert difference(coefficients(longer.expansion), coefficients(direct.expansion)) == 0
    watch = direct.timing
    # One factorisation for each rate 0 … 5 (4 and 5 first met at levels 3 and 4), whatever the number of monomials.
    assert watch.factorisations == 6
    assert watch.solved > watch.factorisations
    stopped = ms.reduce_model(
        mass, stiffness, springs=springs, order=4, tolerance=1e-4, on_level=lambda level: level.order < 2
    )
    assert stopped.order == 2


def test_modes_are_found_by_number_and_by_frequency():
    mass, stiffness, springs = chain(60, 0.05, quadratic=None)
    by_number = ms.reduce_model(mass, stiffness, springs=springs, order=1, modes=[4])
    w = by_number.modes[0].frequency
    by_frequency = ms.reduce_model(mass, stiffness, springs=springs, order=1, modes=[w * 1.001])
    assert by_frequency.modes[0].frequency == pytest.approx(w, rel=1e-10)
    root = sparse.diags(mass.diagonal() ** -0.5)
    squares = np.linalg.eigvalsh((root @ stiffness @ root).toarray())
    assert w == pytest.approx(np.sqrt(squares[4]), rel=1e-10)


def test_stretches_have_one_row_for_each_spring():
    assert stretches(3).toarray().tolist() == [[1, 0, 0], [-1, 1, 0], [0, -1, 1], [0, 0, -1]]
