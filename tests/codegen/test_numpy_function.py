"""Generated functions agree with the SymPy expressions they come from and keep the stated rules of shape and name."""

from __future__ import annotations

import copy
import multiprocessing
import pickle
import subprocess
import sys
from contextlib import nullcontext

import numpy as np
import pytest
import sympy as sp

import multiscale as ms

t = sp.Symbol("t", real=True)
eps, k, m, mu, alpha, beta2 = sp.symbols("epsilon k m mu alpha beta_2", positive=True)
w1, w2 = sp.symbols("omega_1 omega_2", positive=True)
u, v = sp.Function("u")(t), sp.Function("v")(t)

PROBLEMS = {
    "one mode": (m * u.diff(t, 2) + k * u + 2 * eps * mu * u.diff(t) + eps * alpha * u**3 + eps * beta2 * u**2, u),
    "two modes": (
        [
            u.diff(t, 2) + w1**2 * u + eps * alpha * u * v,
            v.diff(t, 2) + w2**2 * v + eps * (mu * v.diff(t) + beta2 * u**2),
        ],
        [u, v],
    ),
    "internal resonance": (
        [
            u.diff(t, 2) + w1**2 * u + eps * alpha * u * v,
            v.diff(t, 2) + 4 * w1**2 * v + eps * (mu * v.diff(t) + beta2 * u**2),
        ],
        [u, v],
    ),
    "numbers": (u.diff(t, 2) + u + eps * (u**2 - 1) * u.diff(t), u),
}
VALUES = {eps: 0.17, k: 2.3, m: 0.7, mu: 0.11, alpha: 0.9, beta2: -0.4, w1: 1.3, w2: 2.9}


@pytest.fixture(params=PROBLEMS, scope="module")
def result(request):
    equations, unknowns = PROBLEMS[request.param]
    return ms.expand(ms.Problem(equations, unknowns, small=eps), 3)


def bindings(result):
    return {s: VALUES[s] for s in (*result.problem.parameters, result.problem.small)}


def state(size):
    return np.linspace(0.4, 1.1, size)


@pytest.mark.parametrize("form", ["cartesian", "polar"])
def test_flow_and_jacobian_agree_with_sympy(result, form):
    flow = getattr(result.slow_flow, form)
    # The numeric forms interleave p and q; the polar form keeps its order.
    y = state(len(flow))
    numbers = dict(zip(flow, y, strict=True)) | bindings(result)
    expected = [float(x.subs(numbers)) for x in flow.values()]
    np.testing.assert_allclose(
        result.slow_flow.to_numpy(form).bind(bindings(result))(0.0, y), expected, rtol=1e-12, atol=1e-15
    )
    jacobian = np.array(result.slow_flow.jacobian(form).subs(numbers), dtype=float)
    found = result.slow_flow.to_numpy(form, wrt="state").bind(bindings(result))(0.0, y)
    np.testing.assert_allclose(found, jacobian, rtol=1e-11, atol=1e-14)


@pytest.mark.parametrize("form", ["cartesian", "polar", "complex"])
def test_parameter_derivatives_agree_with_sympy(result, form):
    flow = getattr(result.slow_flow, form)
    y = state(len(flow)) * (1 + 0.3j if form == "complex" else 1)
    numbers = dict(zip(flow, y, strict=True)) | bindings(result)
    function = result.slow_flow.to_numpy(form, wrt="parameters")
    symbols = {s.name: s for s in bindings(result)}
    expected = [
        [complex(sp.diff(x, symbols[name]).subs(numbers)) for name in function.parameters] for x in flow.values()
    ]
    np.testing.assert_allclose(function.bind(bindings(result))(0.0, y), expected, rtol=1e-11, atol=1e-14)


def test_complex_form_agrees_with_sympy(result):
    A = state(len(result.symbols.A)) * (1 - 0.4j)
    numbers = dict(zip(result.symbols.A, A, strict=True)) | bindings(result)
    expected = [complex(x.subs(numbers)) for x in result.slow_flow.complex.values()]
    found = result.slow_flow.to_numpy("complex").bind(bindings(result))(0.0, A)
    assert found.dtype == np.complex128
    np.testing.assert_allclose(found, expected, rtol=1e-12)


@pytest.mark.parametrize("derivative", [0, 1, 2])
def test_displacement_agrees_with_the_solution(result, derivative):
    """Derivatives are those along the slow flow, d/dt = ∂/∂t + Σ ẏ ∂/∂y, through the retained order in ε."""
    y = state(2 * len(result.symbols.A))
    values = {s: sp.Float(x, 30) for s, x in bindings(result).items() if s != eps}
    barred = {sp.conjugate(A): sp.Symbol(f"{A.name}_bar") for A in result.symbols.A}
    rates = {A: x.subs(values).subs(barred) for A, x in result.slow_flow.complex.items()}
    rates |= {
        barred[sp.conjugate(A)]: x.subs(values).conjugate().subs(barred) for A, x in result.slow_flow.complex.items()
    }
    numbers = {
        A: complex(*z) for A, z in zip(result.symbols.A, zip(y[::2] / 2, -y[1::2] / 2, strict=True), strict=True)
    }
    numbers |= {barred[sp.conjugate(A)]: numbers[A].conjugate() for A in result.symbols.A} | {t: 1.7}
    expected = []
    for field in result.solution("complex").values():
        field = field.subs(values).subs(barred)
        for _ in range(derivative):
            field = field.diff(t) + sum(rate * field.diff(x) for x, rate in rates.items())
        series = sp.Poly(field.subs(numbers), eps).all_coeffs()[::-1]
        expected.append(sum(complex(c) * VALUES[eps] ** n for n, c in enumerate(series[: result.order + 1])).real)
    found = result.to_numpy(derivative).bind(bindings(result))(1.7, y)
    np.testing.assert_allclose(found, expected, rtol=1e-10)


@pytest.mark.parametrize("form", ["polar", "complex"])
def test_solution_forms_agree(result, form):
    y = state(2 * len(result.symbols.A))
    points = dict(
        zip([s for pair in zip(result.symbols.p, result.symbols.q, strict=True) for s in pair], y, strict=True)
    )
    A = y[::2] / 2 - 0.5j * y[1::2]
    beta = dict(zip(result.symbols.beta, np.angle(A), strict=True))
    gamma = {g: x.subs(beta) for g, x in result.slow_flow.phases.items()}
    others = {
        "complex": dict(zip(result.symbols.A, A, strict=True)),
        "polar": dict(zip(result.symbols.a, 2 * abs(A), strict=True)) | beta | gamma,
    }
    base = bindings(result) | {t: 0.83}
    for one, other in zip(result.solution("cartesian").values(), result.solution(form).values(), strict=True):
        assert complex(one.subs(base | points)) == pytest.approx(complex(other.subs(base | others[form])), rel=1e-12)


def test_frequency_agrees_with_sympy():
    equations, unknowns = PROBLEMS["two modes"]
    result = ms.expand(ms.Problem(equations, unknowns, small=eps), 3)
    y = np.array([0.3, 0.4, -0.5, 1.2])
    amplitudes = dict(zip(result.symbols.a, [0.5, 1.3], strict=True))
    for mode in (0, 1):
        found = result.frequency_to_numpy(mode).bind(bindings(result))(0.0, y)
        assert found.shape == ()
        assert float(found) == pytest.approx(
            float(result.frequency(mode).subs(amplitudes | bindings(result))), rel=1e-13
        )


SHAPES = [
    ((), (), (), ()),
    ((), (5,), (), (5,)),
    ((), (5,), (5,), (5,)),
    ((4, 1), (5,), (), (4, 5)),
    ((), (1,), (3, 1, 2), (3, 1, 2)),
    ((7,), (), (), (7,)),
]


@pytest.mark.parametrize(("time", "batch", "parameter", "expected"), SHAPES)
def test_shapes(time, batch, parameter, expected):
    """Also a constant component takes the whole shape: the amplitude of a conservative oscillator never changes."""
    equations, unknowns = PROBLEMS["numbers"]
    flow = ms.expand(ms.Problem(u.diff(t, 2) + u + eps * alpha * u**3, u, small=eps), 2).slow_flow
    arguments = (np.zeros(time), np.ones((2, *batch)), np.full(parameter, 0.9), 0.1)
    assert flow.to_numpy("polar")(*arguments).shape == (2, *expected)
    assert not flow.to_numpy("polar")(*arguments)[0].any()
    assert flow.to_numpy("cartesian", wrt="state")(*arguments).shape == (2, 2, *expected)
    assert flow.to_numpy("cartesian", wrt="parameters")(*arguments).shape == (2, 2, *expected)
    assert ms.expand(ms.Problem(equations, unknowns, small=eps), 1).to_numpy()(
        arguments[0], arguments[1], 0.1
    ).shape == ((1, *np.broadcast_shapes(time, batch)))


@pytest.fixture(scope="module")
def rhs():
    equations, unknowns = PROBLEMS["one mode"]
    return ms.expand(ms.Problem(equations, unknowns, small=eps), 2).slow_flow.to_numpy()


@pytest.fixture(scope="module")
def parameters():
    return {s.name: x for s, x in VALUES.items() if s in (eps, k, m, mu, alpha, beta2)}


INPUTS = {
    "list": [1, 2],
    "integers": np.array([1, 2]),
    "float32": np.array([1, 2], dtype=np.float32),
    "strided": np.array([1.0, 9.0, 2.0, 9.0])[::2],
    "strings of nothing": np.array([1, 2], dtype=object),
    "column": np.asfortranarray([[1.0], [2.0]])[:, 0],
}


@pytest.mark.parametrize("kind", INPUTS)
def test_welcome_states(rhs, parameters, kind):
    expected = rhs.bind(parameters)(0.0, np.array([1.0, 2.0]))
    found = rhs.bind(parameters)(0, INPUTS[kind])
    assert found.dtype == np.float64
    np.testing.assert_array_equal(found, expected)


def test_many_states_equal_single_states(rhs, parameters):
    y = np.random.default_rng(5).normal(size=(2, 30))
    together = rhs.bind(parameters)(0.0, y)
    one_by_one = np.array([rhs.bind(parameters)(0.0, column) for column in y.T]).T
    np.testing.assert_allclose(together, one_by_one, rtol=1e-13)


def test_values_and_bind_agree(rhs, parameters):
    assert rhs.parameters == ("alpha", "beta_2", "epsilon", "k", "m", "mu")
    assert rhs.arguments == ("t", "y", *rhs.parameters)
    values = rhs.values({alpha: 0.9, "beta_2": -0.4}, epsilon=0.17, k=2.3, m=0.7, mu=0.11)
    assert values == tuple(parameters[name] for name in rhs.parameters)
    np.testing.assert_array_equal(rhs(0.0, [0.2, 0.1], *values), rhs.bind(parameters)(0.0, [0.2, 0.1]))


def test_one_mapping_serves_every_function(parameters):
    equations, unknowns = PROBLEMS["one mode"]
    for order in (1, 2):
        with pytest.warns(ms.OrderingWarning) if order == 1 else nullcontext():
            result = ms.expand(ms.Problem(equations, unknowns, small=eps), order)
        for function in (result.slow_flow.to_numpy("polar"), result.to_numpy(1), result.frequency_to_numpy()):
            assert function.bind(parameters)(0.0, [0.3, 0.2]).size


REFUSED = {
    "unknown": (lambda f, p: f.bind(p, gamma=1), "unknown parameter 'gamma'"),
    "missing": (lambda f, p: f.bind(epsilon=0.1), "missing parameter alpha, beta_2, k, m, mu"),
    "twice": (lambda f, p: f.bind(p, epsilon=0.1), "'epsilon' is given twice"),
    "no value": (lambda f, p: f.bind({**p, "k": None}), "k is None: expected numbers"),
    "no time": (lambda f, p: f(None, [1.0, 0.0], *f.values(p)), "t is None: expected numbers"),
    "ragged state": (lambda f, p: f.bind(p)(0.0, [[1.0, 2.0], [1.0]]), "y is .*: expected numbers"),
    "huge state": (lambda f, p: f.bind(p)(0.0, [10**400, 1]), "(?s)y is .*: expected numbers"),
    "text": (lambda f, p: f.bind({**p, "k": "two"}), "k is 'two': expected numbers"),
    "complex parameter": (lambda f, p: f.bind({**p, "k": 1j}), "k is complex"),
    "complex state": (lambda f, p: f.bind(p)(0.0, [1j, 0]), "y is complex"),
    "too few states": (lambda f, p: f.bind(p)(0.0, [1.0]), r"shape \(1,\): expected \(2,\)"),
    "no axis": (lambda f, p: f.bind(p)(0.0, 1.0), r"shape \(\)"),
    "too few parameters": (lambda f, p: f(0.0, [1.0, 0.0], 0.1), "1 parameter values were given, expected 6"),
    "shapes": (lambda f, p: f.bind(p)(np.zeros(3), np.zeros((2, 4))), "do not broadcast"),
}


@pytest.mark.parametrize("name", REFUSED)
def test_refused(rhs, parameters, name):
    call, message = REFUSED[name]
    with pytest.raises(ms.EvaluationError, match=message):
        call(rhs, parameters)


def test_a_bound_array_is_a_copy(rhs, parameters):
    values = np.array([0.7, 0.9])
    bound = rhs.bind({**parameters, "k": values})
    before = bound(0.0, [0.3, 0.1])
    values[:] = 99.0
    np.testing.assert_array_equal(bound(0.0, [0.3, 0.1]), before)


@pytest.fixture(scope="module")
def detuned():
    omega = sp.Symbol("Omega", positive=True)
    equation = u.diff(t, 2) + u + eps * (u.diff(t) + alpha * u**3 - sp.cos(omega * t))
    relation = {omega: 1 + eps * sp.Symbol("sigma", real=True)}
    return ms.expand(ms.Problem(equation, u, small=eps, resonances=relation), 1)


@pytest.mark.parametrize(
    ("small", "sigma", "frequency", "agree"),
    [
        (1e-9, 0.3, 1 + 0.3e-9, True),  # the detuning is a difference that has lost nine digits
        (0.1, 0.0, 1.0, True),
        (0.1, 0.5, 1.05, True),
        (1e-3, 1e-7, 1.0, False),
        (0.1, 0.5, 1.0500001, False),
    ],
)
def test_detuning_and_frequency_agree_as_far_as_they_are_known(detuned, small, sigma, frequency, agree):
    from multiscale.codegen.module import module_source

    scope: dict = {}
    exec(compile(module_source(detuned), "<flow>", "exec"), scope)
    given = {"alpha": 1.0, "epsilon": small, "sigma": sigma, "Omega": frequency}
    calls = {
        detuned.slow_flow.to_numpy().values: (ms.EvaluationError, "contradicts Omega"),
        scope["parameters"]: (ValueError, "but the relation needs"),
    }
    for function, (error, words) in calls.items():
        with nullcontext() if agree else pytest.raises(error, match=words):
            function(given)


def test_singular_parameters_answer_as_numpy_does(rhs, parameters):
    with np.errstate(all="ignore"):
        assert not np.isfinite(rhs.bind({**parameters, "m": 0.0})(0.0, [1.0, 0.5])).all()


def test_ordering_binds_epsilon_to_one():
    ordered = ms.expand(ms.Problem(u.diff(t, 2) + u + alpha * u**3, u, ordering={u: 1}), 2).slow_flow.to_numpy()
    np.testing.assert_array_equal(
        ordered.bind(alpha=0.3)(0.0, [0.4, 0.1]), ordered.bind(alpha=0.3, epsilon=1)(0.0, [0.4, 0.1])
    )


@pytest.mark.parametrize("copied", [copy.deepcopy, lambda f: pickle.loads(pickle.dumps(f))], ids=["deepcopy", "pickle"])
def test_copies(rhs, parameters, copied):
    other = copied(rhs)
    assert other == rhs
    assert hash(other) == hash(rhs)
    np.testing.assert_array_equal(copied(rhs.bind(parameters))(0.0, [0.3, 0.1]), rhs.bind(parameters)(0.0, [0.3, 0.1]))


def test_bound_functions_travel_to_spawned_processes(rhs, parameters):
    with multiprocessing.get_context("spawn").Pool(1) as pool:
        (found,) = pool.starmap(rhs.bind(parameters), [(0.0, [0.3, 0.1])])
    np.testing.assert_array_equal(found, rhs.bind(parameters)(0.0, [0.3, 0.1]))


def test_source_is_the_same_on_every_run(rhs):
    code = (
        "import sympy as sp, multiscale as ms\n"
        "t = sp.Symbol('t', real=True)\nu = sp.Function('u')(t)\n"
        "eps, k, m, mu, alpha, b = sp.symbols('epsilon k m mu alpha beta_2', positive=True)\n"
        "x = m*u.diff(t, 2) + k*u + 2*eps*mu*u.diff(t) + eps*alpha*u**3 + eps*b*u**2\n"
        "print(ms.expand(ms.Problem(x, u, small=eps), 2).slow_flow.to_numpy().source, end='')"
    )
    for seed in ("1", "77"):
        found = subprocess.run(
            [sys.executable, "-c", code], capture_output=True, text=True, env={"PYTHONHASHSEED": seed}, check=True
        )
        assert found.stdout == rhs.source


def test_kernel_runs_under_another_namespace():
    """The kernel takes its functions from outside and never writes in place: here, SymPy plays the array library."""
    equations, unknowns = PROBLEMS["two modes"]
    with pytest.warns(ms.OrderingWarning):
        result = ms.expand(ms.Problem(equations, unknowns, small=eps), 1)
    function = result.to_numpy()
    kernel = function.compiled({name: getattr(sp, name) for name in function.functions})
    symbols = {s.name: s for s in bindings(result)}
    state = [s for pair in zip(result.symbols.p, result.symbols.q, strict=True) for s in pair]
    found = kernel(t, *state, *(symbols[name] for name in function.parameters))
    numbers = bindings(result) | dict(zip(state, [0.3, 0.1, 0.2, 0.7], strict=True)) | {t: 0.4}
    for x, y in zip(found, result.solution("cartesian").values(), strict=True):
        assert float(x.subs(numbers)) == pytest.approx(float(y.subs(numbers)), rel=1e-12)


def test_awkward_names_become_identifiers():
    names = sp.symbols("lambda k' 2nd x_{1} p", positive=True)
    result = ms.expand(ms.Problem(u.diff(t, 2) + u + eps * sp.Mul(*names) * u**3, u, small=eps), 1)
    function = result.slow_flow.to_numpy()
    assert function.parameters == ("2nd", "epsilon", "k'", "lambda", "p", "x_{1}")
    np.testing.assert_allclose(function.bind(dict.fromkeys(names, 1.0), epsilon=1.0)(0.0, [1.0, 0.0]), [0.0, -0.375])


@pytest.mark.slow
def test_a_hundred_thousand_terms_compile():
    from multiscale.codegen.printer import source
    from multiscale.codegen.program import Program

    result = ms.expand(ms.Problem(u.diff(t, 2) + u + eps * alpha * mu * k * m * beta2 * u**3, u, small=eps), 1)
    program = Program(result.problem, result.computation)
    tape = program.tape
    variables = [tape.input(f"parameter {name}") for name in ("alpha", "beta_2", "k", "m", "mu")]
    exponents = np.ndindex(10, 10, 10, 10, 10)
    terms = {e: tape.constant(1 + sum(e) % 7) for e in exponents}
    text, _ = source(
        tape,
        [program.horner(terms, variables)],
        [f"parameter {n}" for n in ("alpha", "beta_2", "k", "m", "mu")],
        "Large.",
    )
    scope: dict = {}
    exec(compile(text, "<large>", "exec"), scope)
    x = np.array([0.5, -0.3, 0.7, 0.2, 0.4])
    powers = [xi ** np.arange(10) for xi in x]
    weights = 1 + np.indices((10,) * 5).sum(axis=0) % 7
    expected = np.einsum("abcde,a,b,c,d,e->", weights, *powers)
    assert scope["kernel"](*x)[0] == pytest.approx(expected, rel=1e-12)
    assert max(map(len, text.splitlines())) < 1000
