"""Coupled leading orders as they are stated: frequencies in closed form, matrices, choice of modes, refusals."""

from __future__ import annotations

import pickle

import numpy as np
import pytest
import sympy as sp

import multiscale as ms

t = sp.Symbol("t", real=True)
eps, k, c, G, m, M, a, f, Om, sigma = sp.symbols("epsilon k c G m M a f Omega sigma", positive=True)
x, y, z = (sp.Function(name)(t) for name in "xyz")
R, root = sp.Rational, sp.sqrt


def masses(stiffness, unknowns=(x, y), **options):
    equations = [u.diff(t, 2) + (sp.Matrix(stiffness)[i, :] * sp.Matrix(unknowns))[0] for i, u in enumerate(unknowns)]
    equations[0] += eps * unknowns[0] ** 3
    return ms.Problem(equations, unknowns, small=eps, **options)


FREQUENCIES = {
    "rational squares": ([[R(5, 2), -R(3, 2)], [-R(3, 2), R(5, 2)]], (1, 2)),
    "roots of rationals": ([[3, -1], [-1, 3]], (root(2), 2)),
    "denested": ([[3, -1], [-1, 3 + R(8, 3)]], None),
    "nested, dependent": ([[3, -1], [-1, 2]], (root(R(5, 2) - root(5) / 2), root(R(5, 2) + root(5) / 2))),
    "nested, independent": ([[4, -1], [-1, 2]], (root(3 - root(2)), root(3 + root(2)))),
    "decimals": ([[2.5, -1.5], [-1.5, 2.5]], (1, 2)),
    "symmetric": ([[k + c, -c], [-c, k + c]], (root(k), root(k + 2 * c))),
    "circulatory": ([[3, 1], [-1, 6]], None),
    "general": ([[k, -c], [-c, a]], None),
}


@pytest.mark.parametrize("name", FREQUENCIES)
def test_frequencies(name):
    stiffness, wanted = FREQUENCIES[name]
    found = masses(stiffness).natural_frequencies
    if wanted is not None:
        assert all(sp.simplify(w - v) == 0 for w, v in zip(found, wanted, strict=True))
    at = {k: 2.0, c: 0.7, a: 5.0}
    numbers = np.array([[float(sp.sympify(e).subs(at)) for e in row] for row in stiffness])
    exact = np.sqrt(np.sort(np.linalg.eigvals(numbers).real))
    assert [float(w.subs(at)) for w in found] == pytest.approx(list(exact), rel=1e-12)


@pytest.mark.parametrize("name", FREQUENCIES)
def test_shapes_solve_the_eigenproblem(name):
    stiffness, _ = FREQUENCIES[name]
    at = {k: 2.0, c: 0.7, a: 5.0}
    for mode in ms.expand(masses(stiffness), 1, tolerance=0.0).modes:
        shape = np.array([complex(mode.shape[u].subs(at)) for u in (x, y)])
        matrix = np.array([[float(sp.sympify(e).subs(at)) for e in row] for row in stiffness])
        assert matrix @ shape == pytest.approx(float(mode.frequency.subs(at)) ** 2 * shape, abs=1e-12)
        assert mode.shape[mode.reference] == 1


def test_frequencies_without_closed_form_are_numbers():
    stiffness = [[3, -1, 0], [-1, 2, -R(1, 3)], [0, -1, 4]]
    result = ms.expand(masses(stiffness, (x, y, z)), 2, tolerance=0.0)
    assert result.representation == "complex"
    assert "floating point" in repr(result)
    assert any("no closed form" in remark for remark in result.warnings)
    exact = np.sqrt(np.sort(np.linalg.eigvals(np.array(stiffness, dtype=float)).real))
    assert [float(w) for w in result.problem.natural_frequencies] == pytest.approx(list(exact), rel=1e-14)
    with pytest.raises(ms.ProblemError, match="no closed form"):
        ms.expand(result.problem, 1, representation="sympy")
    assert pickle.loads(pickle.dumps(result)) == result
    with pytest.raises(ms.ProblemError, match=r"of degree 3 in omega\*\*2"):
        masses([[3, -1, 0], [-1, 2, -c], [0, -1, 4]], (x, y, z))


def test_floating_point_agrees_with_exact_arithmetic():
    """The same equations of exact frequencies, beside an uncoupled block that has none."""
    exact_part = [x.diff(t, 2) + 3 * x - y + eps * x**2, y.diff(t, 2) + 2 * y - x + eps * a * x * y]
    unknowns = [sp.Function(f"w{n}")(t) for n in range(3)]
    block = [[3, -1, 0], [-1, 2, -R(1, 3)], [0, -1, 4]]
    others = [u.diff(t, 2) + 10 * (sp.Matrix(block)[i, :] * sp.Matrix(unknowns))[0] for i, u in enumerate(unknowns)]
    exact = ms.expand(ms.Problem(exact_part, [x, y], small=eps), 3, tolerance=0.0)
    whole = ms.Problem([*exact_part, *others], [x, y, *unknowns], small=eps, modes=[0, 1])
    numeric = ms.expand(whole, 3, tolerance=0.0)
    assert exact.representation != "complex"
    assert numeric.representation == "complex"
    at, state = {"epsilon": 0.3, "a": 0.7}, [0.4, 0.1, -0.2, 0.3]
    one, other = (e.slow_flow.to_numpy().bind(at)(0.0, state) for e in (exact, numeric))
    assert other == pytest.approx(one, rel=1e-11, abs=1e-13)
    one, other = (e.to_numpy().bind(at)(0.7, state) for e in (exact, numeric))
    assert other[:2] == pytest.approx(one, rel=1e-11)


def test_modes_are_chosen_by_number():
    stiffness = [[3, -1], [-1, 2]]
    one = ms.expand(masses(stiffness, modes=[1]), 2, tolerance=0.0)
    assert len(one.modes) == 1
    assert one.frequency().subs(eps, 0) == root(R(5, 2) + root(5) / 2)
    both = ms.expand(masses(stiffness), 2, tolerance=0.0)
    assert (
        sp.simplify(
            both.frequency(1).subs(both.symbols.a[0], 0).subs(both.symbols.a[1], one.symbols.a[0]) - one.frequency()
        )
        == 0
    )


def test_a_mode_that_is_met_must_be_carried():
    problem = ms.Problem(
        [x.diff(t, 2) + x + eps * x * y, y.diff(t, 2) + 4 * y + eps * x**2], [x, y], small=eps, modes=[0]
    )
    with pytest.raises(ms.ResonanceError, match="frequency 2 of a mode that is not carried"):
        ms.expand(problem, 2)


def test_a_mode_nearly_met_and_not_carried_is_a_warning():
    stiffness = [[R(5, 2), -R(3, 2)], [-R(3, 2), R(5, 2) + R(1, 100)]]  # frequencies 1.002… and 2.002…
    equations = [e + eps * x * y for e in masses(stiffness).equations]
    with pytest.warns(ms.SmallDivisorWarning, match="of a mode that is not carried, which it excites"):
        ms.expand(ms.Problem(equations, [x, y], small=eps, modes=[0]), 2)
    far = ms.expand(masses([[3, -1], [-1, 9]], modes=[0]), 2)
    assert not any("not carried" in remark for remark in far.warnings)


def test_references():
    result = ms.expand(masses([[3, -1], [-1, 2]], references={1: y}), 2, tolerance=0.0)
    assert [mode.reference for mode in result.modes] == [x, y]
    assert result.modes[1].shape[y] == 1
    assert pickle.loads(pickle.dumps(result.problem)) == result.problem
    equal = ms.Problem(
        [x.diff(t, 2) + k * x + eps * y**3, y.diff(t, 2) + k * y], [x, y], small=eps, references={0: y, 1: x}
    )
    assert [mode.reference for mode in ms.expand(equal, 1).modes] == [y, x]


class TestMatrices:
    def test_same_as_equations(self):
        built = ms.Problem.from_matrices(
            sp.Matrix([[2, 0], [0, 1]]),
            [[a, 0], [0, 0]],
            np.array([[0, -1], [1, 0]]),
            [[k, 0], [0, k]],
            quadratic={(0, 0, 1): c},
            cubic={(1, 1, 1, 1): 3, (0, 0, 0, 0): a},
            drive=[0, f * sp.cos(Om * t)],
            unknowns=[x, y],
            small=eps,
        )
        written = [
            2 * x.diff(t, 2) + eps**2 * a * x.diff(t) - y.diff(t) + k * x + eps * c * x * y + eps**2 * a * x**3,
            y.diff(t, 2) + x.diff(t) + k * y + 3 * eps**2 * y**3 - eps**2 * f * sp.cos(Om * t),
        ]
        assert [sp.expand(p - q) for p, q in zip(built.equations, written, strict=True)] == [0, 0]

    def test_arrays_and_orders(self):
        cubic = np.zeros((2, 2, 2, 2))
        cubic[0, 0, 0, 1] = 0.5
        built = ms.Problem.from_matrices(np.eye(2), K=np.diag([1.0, 3.0]), cubic=cubic, orders={"cubic": 1})
        u = built.unknowns
        assert built.equations[0].coeff(built.small) == 0.5 * u[0] ** 2 * u[1]
        assert built.natural_frequencies == (1, root(3))

    def test_first_order(self):
        built = ms.Problem.from_matrices(C=[[1, 0], [0, 1]], K=[[-1, -1], [2, 1]], quadratic={(0, 0, 0): -1})
        assert built.natural_frequencies == (1,)

    @pytest.mark.parametrize(
        ("build", "message"),
        [
            (lambda: ms.Problem.from_matrices(), "no matrices"),
            (lambda: ms.Problem.from_matrices([[1]], K=[[1, 0], [0, 1]]), "K is 2 × 2, but there are 1 unknowns"),
            (lambda: ms.Problem.from_matrices([[1]], K=[["k"]]), "K has the entry 'k'"),
            (lambda: ms.Problem.from_matrices([[1]], K=[[1]], cubic={(0, 0, 0): 1}), "expected 4 indices from 0 to 0"),
            (lambda: ms.Problem.from_matrices([[1]], K=[[1]], cubic=np.zeros((2, 2, 2, 2))), "has the shape"),
            (lambda: ms.Problem.from_matrices([[1]], K=[[1]], orders={"K": 1}), "K stand at leading order"),
            (lambda: ms.Problem.from_matrices([[1]], K=[[1]], drive=[1, 2]), "drive has 2 components"),
        ],
    )
    def test_refused(self, build, message):
        with pytest.raises(ms.ProblemError, match=message):
            build()


REFUSED = {
    "rigid body": (lambda: masses([[k, -k], [-k, k]]), "zero frequency.*rigid-body"),
    "defective, coupled": (
        lambda: masses([[2, 1], [-1, 4]]),
        r"frequency sqrt\(3\) is a root of multiplicity 2.*defective",
    ),
    "nilpotent": (
        lambda: ms.Problem([x.diff(t) - y + eps * x**2, y.diff(t)], [x, y], small=eps),
        "zero frequency",
    ),
    "all decays": (
        lambda: ms.Problem([x.diff(t) + x - y + eps * x**2, y.diff(t) + x + y], [x, y], small=eps),
        r"s\*\*2 \+ 2\*s \+ 2 has no root on the imaginary axis",
    ),
    "flutter": (lambda: masses([[1, 2], [-2, 1]]), "no root on the imaginary axis"),
    "singular": (lambda: masses([[1, 1], [1, 1]]), "zero frequency"),
    "no linear term": (
        lambda: ms.Problem([x.diff(t, 2) + x + y, eps * y**2 - x**2], [x, y], small=eps),
        "equation 2 has no linear term",
    ),
    "strong nonlinearity": (
        lambda: ms.Problem([x.diff(t, 2) + x + y + x * y, y.diff(t) + y + eps * x], [x, y], small=eps),
        "nonlinear term stands at leading order",
    ),
    "no such mode": (lambda: masses([[3, -1], [-1, 2]], modes=[2]), "mode 2 was asked for.*modes 0 … 1"),
    "half a pair": (
        lambda: ms.Problem([x.diff(t, 2) + x + eps * y**3, y.diff(t, 2) + y], [x, y], small=eps, modes=[0]),
        "share the frequency 1",
    ),
    "mode by text": (lambda: masses([[3, -1], [-1, 2]], modes="1"), "expected the numbers of the modes"),
    "reference at rest": (
        lambda: ms.Problem(
            [x.diff(t, 2) + x + eps * y**3, y.diff(t, 2) + 2 * y - x], [x, y], small=eps, references={1: x}
        ),
        "does not move in them",
    ),
    "relation with a mode too many": (
        lambda: masses([[3, -1], [-1, 2]], resonances={sp.Symbol("omega_3"): sp.Symbol("omega_1") + eps * sigma}),
        "names omega_3, but the equations have 2 modes",
    ),
    "frequency by name in the linear part": (
        lambda: ms.Problem(
            [
                x.diff(t, 2) + Om * y.diff(t) + 3 * x + eps * f * sp.cos(Om * t),
                y.diff(t, 2) - Om * x.diff(t) + 5 * y,
            ],
            [x, y],
            small=eps,
            resonances={Om: sp.Symbol("omega_1") + eps * sigma},
        ),
        "puts omega_1 into the linear terms",
    ),
    "gyroscopic mode by name": (
        lambda: ms.Problem(
            [x.diff(t, 2) - 2 * y.diff(t) + 3 * x + eps * x**2, y.diff(t, 2) + 2 * x.diff(t) + 5 * y],
            [x, y],
            small=eps,
            resonances={sp.Symbol("omega_2"): 3 * sp.Symbol("omega_1") + eps * sigma},
        ),
        "split a parameter of the equations",
    ),
    "drive on a mode at leading order": (
        lambda: ms.Problem(
            [x.diff(t, 2) + 3 * x - y + eps * x**2, y.diff(t, 2) + 3 * y - x + f * sp.cos(2 * t)], [x, y], small=eps
        ),
        "response is unbounded",
    ),
}


@pytest.mark.parametrize("name", REFUSED)
def test_refused_with_a_reason(name):
    build, message = REFUSED[name]
    with pytest.raises((ms.ProblemError, ms.UnsupportedTermError, ms.ResonanceError), match=f"(?s){message}"):
        build()


def test_a_growing_motion_is_remarked():
    """x oscillates beside a y that grows: the carried motion is a solution, but nothing stays near it."""
    growing = [x.diff(t, 2) + x + eps * x * y, y.diff(t) - 2 * y + eps * x**2]
    decaying = [x.diff(t, 2) + x + eps * x * y, y.diff(t) + 2 * y + eps * x**2]
    remarks, none = (ms.expand(ms.Problem(e, [x, y], small=eps), 2).warnings for e in (growing, decaying))
    assert any("grows like exp(2*t)" in remark for remark in remarks)
    assert any("1 of the roots of the leading order lie off the imaginary axis and decay" in remark for remark in none)
    assert not any("grows" in remark for remark in none)


G, K = sp.symbols("G K", positive=True)
WHIRLING = [x.diff(t, 2) - G * y.diff(t) + k * x + eps * x**2, y.diff(t, 2) + G * x.diff(t) + k * y + eps * x * y]
TURNING = [x.diff(t, 2) - 2 * y.diff(t) + 3 * x + eps * x**2, y.diff(t, 2) + 2 * x.diff(t) + K * y + eps * x * y]


@pytest.mark.parametrize(
    ("equations", "ratio", "written", "parameter", "frequencies"),
    [
        (WHIRLING, 2, "{k: 2*G**2 + epsilon*sigma}", k, (G, 2 * G)),
        (WHIRLING, 3, "{k: 3*G**2/4 + epsilon*sigma}", k, (G / 2, 3 * G / 2)),
        (TURNING, 3, "{K: 3 + epsilon*sigma}", K, (1, 3)),
    ],
)
def test_the_line_that_the_refusal_of_a_named_gyroscopic_mode_writes(equations, ratio, written, parameter, frequencies):
    """It is the split at which the modes are in that ratio exactly, and it certifies."""
    first, second = (sp.Symbol(f"omega_{n}", positive=True) for n in (1, 2))
    with pytest.raises(ms.ProblemError) as refusal:
        ms.Problem(equations, [x, y], small=eps, resonances={second: ratio * first + eps * sigma})
    assert f"resonances={written}" in str(refusal.value)
    value = sp.sympify(written.split(": ")[1][:-1], locals={"G": G, "epsilon": eps, "sigma": sigma})
    problem = ms.Problem(equations, [x, y], small=eps, resonances={parameter: value})
    assert problem.natural_frequencies == frequencies
    ms.certify(ms.expand(problem, 2, tolerance=0.0)).require()
