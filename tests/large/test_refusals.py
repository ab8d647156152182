"""What a large model is refused for, and what is warned of."""

import pickle
import sys

import numpy as np
import pytest
import scipy.sparse as sparse
import sympy as sp
from support.chains import chain, coefficients, difference, stretches

import multiscale as ms

t = sp.Symbol("t", real=True)
eps, f, Omega = sp.symbols("epsilon f Omega", positive=True)
sigma = sp.Symbol("sigma", real=True)
w1, w2 = sp.symbols("omega_1 omega_2", positive=True)
MASS, STIFFNESS, SPRINGS = chain(5, 0.3)


def refused(error, match, **changed):
    given = {"M": MASS, "K": STIFFNESS, "springs": SPRINGS, "order": 2} | changed
    with pytest.raises(error, match=match):
        ms.reduce_model(**given)


CASES = {
    "K not square": ({"K": np.ones((3, 4))}, "K is 3 × 4: expected it to be square"),
    "M of another size": ({"M": np.eye(4)}, "M is 4 × 4: expected it to be 5 × 5, as K is"),
    "symbols": ({"K": sp.eye(5) * w1}, "K"),
    "complex": ({"C": 1j * np.eye(5)}, "C holds complex"),
    "not finite": ({"C": np.full((5, 5), np.nan)}, "C holds entries that are not finite"),
    "elongation": ({"springs": ms.Springs(np.eye(4), cubic=1.0)}, r"elongation is 4 × 4: expected \(springs, 5\)"),
    "stiffness of springs": (
        {"springs": ms.Springs(np.eye(5), cubic=[1.0, 2.0])},
        r"cubic of springs has the shape \(2,\)",
    ),
    "springs": ({"springs": np.eye(5)}, "springs is a ndarray: expected multiscale.Springs"),
    "nothing nonlinear": ({"springs": None}, "linear, undamped and free"),
    "tensor": ({"cubic": np.ones((5, 5))}, r"cubic has the shape \(5, 5\): expected \(5, 5, 5, 5\)"),
    "indices": ({"quadratic": (np.array([[0, 1]]), [1.0])}, r"quadratic has indices of shape \(1, 2\)"),
    "index": ({"quadratic": {(0, 1, 9): 1.0}}, "quadratic has the index 9: expected 0 … 4"),
    "not symmetric": ({"quadratic": lambda a, b: a * np.roll(b, 1)}, "not symmetric"),
    "not linear": ({"quadratic": lambda a, b: a * a * b * b}, "not linear"),
    "wrong length": ({"cubic": lambda a, b, c: np.ones(3)}, r"cubic returned the shape \(3,\)"),
    "drive vector": ({"drive": (np.ones(3), f)}, r"drive has a vector of shape \(3,\): expected \(5,\)"),
    "drive pair": ({"drive": [np.ones(5), f]}, "drive has an entry that is no pair"),
    "drive text": ({"drive": (np.ones(5), "f*cos(t)")}, "drive is 'f\\*cos\\(t\\)', a str"),
    "no modes": ({"modes": []}, "modes is empty"),
    "mode": ({"modes": [-1]}, "modes has the entry -1"),
    "too many": ({"modes": [7]}, "mode 7 was asked for, but only 5"),
    "twice": ({"modes": [0, 0.6]}, "asks twice"),
    "reference": ({"references": {0: 5}}, r"references\[0\] is 5: expected a degree of freedom, 0 … 4"),
    "orders": ({"orders": {"C": 0}}, "expected integers ≥ 1"),
    "scales": ({"scales": {"C": f}}, "scales has C: expected some of"),
    "order": ({"order": 0}, "order is 0"),
    "rigid": (
        {"K": stretches(5)[1:].T @ stretches(5)[1:] - sparse.csr_matrix(([1.0], ([4], [4])), shape=(5, 5))},
        "does not oscillate",
    ),
    "unstable": ({"K": STIFFNESS - sparse.identity(5)}, "does not oscillate"),
    "damped at leading order": ({"G": 0.1 * np.eye(5)}, "not imaginary"),
}


@pytest.mark.parametrize("case", CASES)
def test_what_is_given_is_checked(case):
    changed, match = CASES[case]
    refused(ms.ProblemError, match, **changed)


def test_a_reference_at_rest_is_refused():
    springs = ms.Springs(stretches(3), cubic=1.0)
    stiffness = stretches(3).T @ stretches(3)
    with pytest.raises(ms.ProblemError, match=r"does not move the degree of freedom 1.*references={0: "):
        ms.reduce_model(
            np.eye(3), stiffness, springs=springs, order=1, modes=[1], references={0: 1}, orders={"cubic": 1}
        )


def one_to_three(distance):
    """A mode at 3ω_1 (and a little more), which cubic springs reach."""
    root = np.diag([1.0, 3.0 + distance, 4.7])
    shapes = np.linalg.qr(np.random.default_rng(3).normal(size=(3, 3)))[0]
    return {"M": np.eye(3), "K": shapes @ root**2 @ shapes.T, "springs": ms.Springs(np.eye(3), cubic=1.0)}


def test_a_mode_in_resonance_that_is_not_carried_is_named():
    model = one_to_three(0.0)
    with pytest.raises(
        ms.ResonanceError, match=r"combination 3\*omega_1 = 3 meets the frequency 3 .* adding 3 to `modes`"
    ):
        ms.reduce_model(**model, order=3)
    both = ms.reduce_model(**model, order=3, modes=[0, 3.0], resonances={w2: 3 * w1 + eps**2 * sigma})
    assert both.certify().passed
    assert len(both.slow_flow.phases) == 1


def test_rigid_motions():
    """A chain that is free at both ends: cubic springs do not move it as a whole, a constant part is not resisted."""
    n = 60
    b = stretches(n)[1:-1]
    model = {"M": sparse.identity(n), "K": b.T @ b, "modes": [0.0524], "order": 2, "tolerance": 1e-9}
    free = ms.reduce_model(**model, springs=ms.Springs(b, cubic=1.0), orders={"cubic": 2})
    assert free.certify().passed
    with pytest.raises(ms.ResonanceError, match="K is singular"):
        ms.reduce_model(**model, springs=ms.Springs(b, quadratic=1.0))
    with pytest.raises(ms.ProblemError, match="does not oscillate"):
        ms.reduce_model(**model | {"modes": [0]}, springs=ms.Springs(b, cubic=1.0))


def square_net(side=8):
    """Equal tensions in both directions: the second and the third mode have one frequency."""
    h, one = 1 / (side + 1), sparse.identity(side)
    b = sparse.vstack([sparse.kron(stretches(side), one), sparse.kron(one, stretches(side))]).tocsr()
    mass = h**2 * sparse.identity(side * side)
    return {"M": mass, "K": b.T @ b + 7.3 * mass, "springs": ms.Springs(b / h, cubic=h**2)}


def test_modes_of_one_frequency():
    """Carried together with a relation, refused without, and refused where one of them is forgotten."""
    with pytest.raises(ms.ResonanceError, match=r"omega_1 = .* meets the frequency .* not carried"):
        ms.reduce_model(**square_net(), order=2, modes=[1])
    with pytest.raises(ms.ResonanceError, match=r"meets omega_2, the frequency of a carried mode: declare it"):
        ms.reduce_model(**square_net(), order=2, modes=[1, 2])
    both = ms.reduce_model(**square_net(), order=3, modes=[1, 2], resonances={w2: w1 + eps**2 * sigma})
    assert both.certify().passed
    assert both.values({eps: 0.1})["sigma"] == pytest.approx(0.0, abs=1e-8)
    assert both.slow_flow.phases


def test_a_mode_near_resonance_is_warned_of():
    with pytest.warns(ms.SmallDivisorWarning, match=r"3\*omega_1 = 3 is close to 3.01, a mode that is not carried"):
        ms.reduce_model(**one_to_three(0.01), order=2)
    with pytest.warns(ms.SmallDivisorWarning, match=r"3\*omega_1 = 3 is close to 3.01, omega_2: declare"):
        ms.reduce_model(**one_to_three(0.01), order=2, modes=[0, 1])


def test_a_mode_that_no_force_reaches_is_not_warned_of():
    """Springs to the ground on one coordinate each, uncoupled: the mode next to 3ω_1 stays at rest."""
    springs = ms.Springs(np.eye(2), cubic=1.0)
    model = ms.reduce_model(np.eye(2), np.diag([1.0, 9.0 + 1e-7]), springs=springs, order=3)
    assert model.certify().passed


def test_a_hard_drive_on_a_mode_is_refused():
    wave = f * sp.cos(Omega * t)
    refused(
        ms.ResonanceError,
        "meets the natural frequency",
        drive=(np.ones(5), wave),
        orders={"drive": 0},
        resonances={Omega: w1 + eps * sigma},
    )


def test_a_relation_without_detuning_must_hold():
    refused(ms.ResonanceError, "add a detuning", modes=[0, 1], resonances={w2: 2 * w1}, tolerance=0.0)
    exact = one_to_three(0.0)
    both = ms.reduce_model(**exact, order=2, modes=[0, 1], resonances={w2: 3 * w1})
    assert both.certify().passed


def test_splitting_needs_symmetric_matrices():
    gyroscopic = 0.1 * (np.eye(5, k=1) - np.eye(5, k=-1))
    refused(ms.ResonanceError, "symmetric M and K", G=gyroscopic, modes=[0, 1], resonances={w2: 2 * w1 + eps * sigma})


def test_quadratic_springs_at_order_one_are_remarked():
    with pytest.warns(ms.OrderingWarning, match="second order"):
        ms.reduce_model(MASS, STIFFNESS, springs=SPRINGS, order=1, tolerance=0.0)


def test_the_equations_are_shut():
    model = ms.reduce_model(MASS, STIFFNESS, springs=SPRINGS, order=2, tolerance=0.0)
    with pytest.raises(ms.MultiscaleError, match="stand in its matrices"):
        ms.certify(model.expansion)
    with pytest.raises(ms.MultiscaleError, match="vectors in its fields"):
        ms.to_json(model.expansion)
    with pytest.raises(ms.MultiscaleError, match=r"stand in its matrices|vectors in its fields"):
        pickle.dumps(model.expansion)
    with pytest.raises(ms.MultiscaleError, match="stand in its matrices"):
        ms.write_module(model.expansion, "unwritten.py")
    with pytest.raises(ms.MultiscaleError, match="are vectors"):
        ms.harmonics(model.expansion)
    with pytest.raises(ms.MultiscaleError, match="are vectors"):
        ms.with_amplitude(model.expansion, "peak")
    with pytest.raises(ms.EvaluationError, match="derivative is 3"):
        model.displacement(0.0, [1.0, 0.0], {eps: 0.1}, derivative=3)
    with pytest.raises(ms.EvaluationError, match=r"y has the shape \(3,\)"):
        model.displacement(0.0, [1.0, 0.0, 0.0], {eps: 0.1})
    assert "5 degrees of freedom, order 2" in repr(model)
    assert "statement of a large model" in repr(model.expansion.problem)
    assert model.expansion.problem._repr_latex_() == repr(model.expansion.problem)


def test_what_works_on_an_expansion_works_here():
    model = ms.reduce_model(MASS, STIFFNESS, springs=SPRINGS, order=2, tolerance=0.0)
    assert ms.backbone(model.expansion) == model.frequency()
    u = model.expansion.problem.unknowns[0]
    y = ms.initial_state(model.expansion, {u: 0.5, u.diff(t): 0.0}, {eps: 0.1})
    assert model.displacement(0.0, y, {eps: 0.1}, dofs=[model.modes[0].reference]) == pytest.approx([0.5], abs=1e-6)
    level = model.expansion.levels[1]
    assert level.order == 1
    assert level.forcing[u] != 0
    assert model.expansion.equals(ms.reduce_model(MASS, STIFFNESS, springs=SPRINGS, order=2, tolerance=0.0).expansion)


def test_scipy_is_named_where_it_is_missing(monkeypatch):
    monkeypatch.setitem(sys.modules, "scipy.sparse", None)
    with pytest.raises(ImportError, match=r"multiscale-expansions\[check\]"):
        ms.reduce_model(MASS, STIFFNESS, springs=SPRINGS, order=2)


def test_sparse_and_dense_eigenvalue_routes_agree():
    """Below 33 degrees of freedom modes come from a dense solver: pad the chain with distant stiff masses."""
    mass, stiffness, springs = chain(12, 0.3)
    small = ms.reduce_model(mass, stiffness, springs=springs, order=3, tolerance=0.0)
    far = sparse.diags(np.linspace(900.0, 1000.0, 60))
    b = sparse.hstack([springs.elongation, sparse.csr_matrix((13, 60))])
    padded = ms.reduce_model(
        sparse.block_diag([mass, sparse.identity(60)]),
        sparse.block_diag([stiffness, far]),
        springs=ms.Springs(b, springs.quadratic, springs.cubic),
        order=3,
        tolerance=0.0,
    )
    assert difference(coefficients(small.expansion), coefficients(padded.expansion)) < 1e-12
    gyroscopic = 0.3 * (sparse.eye(72, k=1) - sparse.eye(72, k=-1))
    one = ms.reduce_model(
        sparse.block_diag([mass, sparse.identity(60)]),
        sparse.block_diag([stiffness, far]),
        G=gyroscopic,
        springs=ms.Springs(b, springs.quadratic, springs.cubic),
        order=2,
        tolerance=0.0,
    )
    assert one.certify().passed
