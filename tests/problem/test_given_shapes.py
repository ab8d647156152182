"""Modes that the user gives: the same results as without, for what has a closed form; verified, and refused by name."""

from __future__ import annotations

import pickle

import pytest
import sympy as sp

import multiscale as ms

t = sp.Symbol("t", real=True)
NAMES = "epsilon m k c alpha mu w G p m_1 m_2 m_3 k_1 k_2 k_3 sigma f Omega"
eps, m, k, c, alpha, mu, w, G, p, m1, m2, m3, k1, k2, k3, sigma, f, Om = sp.symbols(NAMES, positive=True)
x, y, z, v = (sp.Function(name)(t) for name in "xyzv")
root = sp.sqrt


def chain(size, weak=None):
    """Equal masses m, each held by k and tied to the next by c, the ends free; α stiffens the first spring."""
    unknowns = [x, y, z, v][:size]
    equations = []
    for i, u in enumerate(unknowns):
        ties = sum(c * (u - unknowns[j]) for j in (i - 1, i + 1) if 0 <= j < size)
        equations.append(m * u.diff(t, 2) + k * u + ties)
    equations[0] += eps * alpha * x**3 + eps * mu * x.diff(t) if weak is None else weak
    return equations, unknowns


THREE = {root(k / m): [1, 1, 1], root((k + c) / m): [1, 0, -1], root((k + 3 * c) / m): [1, -2, 1]}
FOUR = {
    root(k / m): [1, 1, 1, 1],
    root((k + (2 - root(2)) * c) / m): [1, root(2) - 1, 1 - root(2), -1],
    root((k + 2 * c) / m): [1, -1, -1, 1],
    root((k + (2 + root(2)) * c) / m): [1, -root(2) - 1, root(2) + 1, -1],
}
WHIRL = root(G**2 + 4 * k)
GYROSCOPIC = (
    [x.diff(t, 2) - G * y.diff(t) + k * x + eps * alpha * x**3, y.diff(t, 2) + G * x.diff(t) + k * y],
    [x, y],
)
WHIRLING = {(WHIRL - G) / 2: [1, -sp.I], (WHIRL + G) / 2: [1, sp.I]}
# ω² = k + c and k + 4c; K is not symmetric.
CIRCULATORY = (
    [x.diff(t, 2) + (k + 5 * c) * x + 2 * c * y + eps * alpha * x**3, y.diff(t, 2) - 2 * c * x + k * y],
    [x, y],
)
CIRCLING = {root(k + c): [1, -2], root(k + 4 * c): [2, -1]}
CIRCLING_LEFT = {root(k + c): [1, 2], root(k + 4 * c): [2, 1]}


def flows(equations, unknowns, order=1, **options):
    result = ms.expand(ms.Problem(equations, unknowns, small=eps, **options), order, tolerance=0.0)
    return [result.slow_flow.by_scale[n][A] for n in range(1, order + 1) for A in result.symbols.A]


AT = {m: sp.Rational(7, 5), k: 2, c: sp.Rational(3, 10), alpha: sp.Rational(4, 3), mu: sp.Rational(1, 7), G: 1}
AMPLITUDES = {f"A_{j}" if j else "A": sp.Rational(j + 1, 7) + sp.I * sp.Rational(2, j + 3) for j in range(4)}


def values(expressions):
    """At numbers for parameters and amplitudes."""
    named = [e.subs({s: AMPLITUDES[s.name] for s in e.free_symbols if s.name in AMPLITUDES}) for e in expressions]
    return [complex(sp.N(e.subs(AT))) for e in named]


CASES = {
    "chain of three": (chain(3), {"shapes": THREE}, {}),
    "one mode of three": (chain(3), {"shapes": dict([list(THREE.items())[1]])}, {"modes": [1]}),
    "chain of four, first mode": (chain(4), {"shapes": {root(k / m): FOUR[root(k / m)]}}, {"modes": [0]}),
    "chain of four, third mode": (chain(4), {"shapes": dict([list(FOUR.items())[2]])}, {"modes": [2]}),
    "gyroscopic": (GYROSCOPIC, {"shapes": WHIRLING}, {}),
    "circulatory": (CIRCULATORY, {"shapes": CIRCLING, "left_shapes": CIRCLING_LEFT}, {}),
    "another reference": (chain(3), {"shapes": THREE, "references": {0: z}}, {"references": {0: z}}),
}


@pytest.mark.parametrize("name", CASES)
def test_same_flow_as_without(name):
    (equations, unknowns), given, plain = CASES[name]
    one, other = (flows(equations, unknowns, **options) for options in (given, plain))
    assert len(one) == len(other) > 0
    assert values(one) == pytest.approx(values(other), rel=1e-12)


def test_second_order_of_one_mode_beside_modes_not_given():
    """The modes that are not given enter as divisors; the flow is the same at order two."""
    (equations, unknowns), given, plain = CASES["one mode of three"]
    one, other = (flows(equations, unknowns, order=2, **options) for options in (given, plain))
    assert values(one) == pytest.approx(values(other), rel=1e-12)


@pytest.mark.parametrize("name", ["one mode of three", "gyroscopic", "circulatory"])
def test_residual_has_the_order_promised(name):
    (equations, unknowns), given, _ = CASES[name]
    ms.certify(ms.expand(ms.Problem(equations, unknowns, small=eps, **given), 1, tolerance=0.0)).require()


def test_chain_of_four_with_radicals():
    """The second mode, whose frequency holds √2 beside parameters: Rayleigh's quotient of the stiffening."""
    shapes = dict([list(FOUR.items())[1]])
    (frequency, shape), equations = *shapes.items(), chain(4, weak=eps * alpha * x**3)[0]
    result = ms.expand(ms.Problem(equations, [x, y, z, v], small=eps, shapes=shapes), 1, tolerance=0.0)
    a = result.symbols.a[0]
    share = sp.Rational(3, 8) * alpha / (m * sum(s**2 for s in shape) * frequency)
    assert sp.simplify(sp.diff(result.frequency(), eps) - share * a**2) == 0
    assert result.modes[0].frequency == frequency


def general_chain(relation):
    matrix = sp.Matrix([[k1 + k2 - m1 * w**2, -k2, 0], [-k2, k2 + k3 - m2 * w**2, -k3], [0, -k3, k3 - m3 * w**2]])
    equations = [
        m1 * x.diff(t, 2) + k1 * x + k2 * (x - y) + eps * alpha * x**3,
        m2 * y.diff(t, 2) + k2 * (y - x) + k3 * (y - z),
        m3 * z.diff(t, 2) + k3 * (z - y),
    ]
    last = k3 - m3 * w**2
    shape = [((k2 + k3 - m2 * w**2) * last - k3**2) / k2, last, k3]
    options = {"resonances": {k1: sp.solve(matrix.det(), k1)[0]}} if relation else {}
    return ms.Problem(equations, [x, y, z], small=eps, shapes={w: shape}, **options)


class TestThreeSymbols:
    """A chain of three different masses and springs, whose frequencies are the roots of an irreducible cubic."""

    def test_without_shapes_the_error_names_them(self):
        problem = general_chain(relation=True)
        with pytest.raises(ms.ProblemError, match=r"shapes=\{frequency: shape\}.*resonances"):
            ms.Problem(problem.equations, problem.unknowns, small=eps)

    def test_without_the_relation_the_error_writes_it(self):
        with pytest.raises(ms.ProblemError, match=r"component 1 of L_0\(i\*omega\) phi is .*resonances=\{k_1: "):
            general_chain(relation=False)

    def test_frequency_by_rayleigh(self):
        problem = general_chain(relation=True)
        assert problem.natural_frequencies == (w,)
        assert set(problem.parameters) == {alpha, k2, k3, m1, m2, m3, w}
        result = ms.expand(problem, 1, tolerance=0.0)
        shape = [s / problem.shapes[w][0][0] for s in problem.shapes[w][0]]
        mass = sum(a * s**2 for a, s in zip((m1, m2, m3), shape, strict=True))
        expected = sp.Rational(3, 8) * alpha * result.symbols.a[0] ** 2 / (w * mass)
        assert sp.cancel(sp.diff(result.frequency(), eps) - expected) == 0

    @pytest.mark.slow
    def test_residual(self):
        ms.certify(ms.expand(general_chain(relation=True), 2, tolerance=0.0)).require()


def test_a_relation_with_a_detuning():
    """A drive near a mode whose frequency has a symbol."""
    equations, unknowns = chain(3)
    equations[0] -= eps * f * sp.cos(Om * t)
    relations = {k: m * w**2 - c, Om: w + eps * sigma}
    problem = ms.Problem(equations, unknowns, small=eps, shapes={w: [1, 0, -1]}, resonances=relations)
    result = ms.expand(problem, 1, tolerance=0.0)
    assert len(result.slow_flow.phases) == 1
    ms.certify(result).require()


def test_kept_by_pickle_storage_and_matrices():
    problem = ms.Problem(*CIRCULATORY, small=eps, shapes=CIRCLING, left_shapes=CIRCLING_LEFT)
    copy = pickle.loads(pickle.dumps(problem))
    assert copy == problem
    assert hash(copy) == hash(problem)
    assert problem != ms.Problem(*CIRCULATORY, small=eps, shapes=CIRCLING)
    result = ms.expand(problem, 1, tolerance=0.0)
    again = ms.from_json(ms.to_json(result))
    assert again == result
    assert again.problem == problem
    built = ms.Problem.from_matrices(
        sp.eye(2),
        K=[[k + 5 * c, 2 * c], [-2 * c, k]],
        cubic={(0, 0, 0, 0): alpha},
        orders={"cubic": 1},
        unknowns=[x, y],
        small=eps,
        shapes={w: sp.Matrix(s) for w, s in CIRCLING.items()},
        left_shapes={w: {x: s[0], y: s[1]} for w, s in CIRCLING_LEFT.items()},
    )
    assert built == problem


def test_several_shapes_of_one_frequency():
    equations = [x.diff(t, 2) + k * x + eps * x * y**2, y.diff(t, 2) + k * y + eps * x**3]
    one, other = (flows(equations, [x, y], **o) for o in ({"shapes": {root(k): [[1, 1], [1, -1]]}}, {"modes": [0, 1]}))
    assert one == other


def test_modes_not_given_are_said_to_be_unknown():
    def said(shapes):
        return ms.expand(ms.Problem(*chain(3), small=eps, shapes=shapes), 1, tolerance=0.0).warnings

    assert any("(4 at most) were not looked for" in s for s in said(CASES["one mode of three"][1]["shapes"]))
    assert not any("not looked for" in s for s in said(THREE))


def test_a_combination_that_meets_a_mode_not_given():
    """3ω of the mode given is exactly the frequency of the other one, at order one."""
    equations = [x.diff(t, 2) + 5 * x - 4 * y + eps * x**3, y.diff(t, 2) + 5 * y - 4 * x]
    with pytest.raises(ms.ResonanceError, match=r"has the frequency 3.*Give that mode in `shapes` too"):
        ms.expand(ms.Problem(equations, [x, y], small=eps, shapes={1: [1, 1]}), 1)
    ms.certify(ms.expand(ms.Problem(equations, [x, y], small=eps, shapes={1: [1, 1], 3: [1, -1]}), 1)).require()


REFUSED = {
    "wrong shape": (
        {"shapes": {root((k + c) / m): [1, 0, 1]}},
        r"component 2 of L_0\(i\*omega\) phi is -2\*c, not zero",
    ),
    "wrong frequency": ({"shapes": {root((k + 2 * c) / m): [1, 0, -1]}}, r"component 1 .* is -c, not zero"),
    "no relation": ({"shapes": {w: [1, 0, -1]}}, r"add resonances=\{c: -k \+ m\*w\*\*2\}"),
    "wrong left": (
        {"shapes": {root(k / m): [1, 1, 1]}, "left_shapes": {root(k / m): [1, 0, -1]}},
        r"left shape given .* component 1 of psi\^H L_0\(i\*omega\) is c",
    ),
    "left alone": ({"left_shapes": {root(k / m): [1, 1, 1]}}, "which shapes does not have"),
    "too short": ({"shapes": {root(k / m): [1, 1]}}, "expected 3 numbers or expressions"),
    "zero": ({"shapes": {root(k / m): [0, 0, 0]}}, "is zero: a shape needs a component"),
    "text": ({"shapes": {root(k / m): "111"}}, "expected one component"),
    "no mapping": ({"shapes": [1, 1, 1]}, "expected {frequency"),
    "negative": ({"shapes": {-w: [1, 1, 1]}}, "expected a positive number"),
    "stranger": ({"shapes": {root(k / m): {x: 1, v: 1}}}, "expected unknowns"),
    "dependent": ({"shapes": {root(k / m): [[1, 1, 1], [2, 2, 2]]}}, "not independent"),
    "other assumptions": ({"shapes": {root(sp.Symbol("k") / m): [1, 1, 1]}}, "same name and different assumptions"),
    "no such mode": ({"shapes": THREE, "modes": [3]}, "mode 3 was asked for"),
}


@pytest.mark.parametrize("name", REFUSED)
def test_refused_with_a_reason(name):
    options, message = REFUSED[name]
    with pytest.raises(ms.ProblemError, match=f"(?s){message}"):
        ms.Problem(*chain(3), small=eps, **options)


def test_the_conjugate_is_named():
    with pytest.raises(ms.ProblemError, match="Its complex conjugate is one"):
        ms.Problem(*GYROSCOPIC, small=eps, shapes={(WHIRL - G) / 2: [1, sp.I]})


def test_one_shape_of_two():
    equations = [x.diff(t, 2) + k * x + eps * x**3, y.diff(t, 2) + k * y]
    with pytest.raises(ms.ProblemError, match="more shapes than the 1 given"):
        ms.Problem(equations, [x, y], small=eps, shapes={root(k): [1, 0]})


def test_a_defective_root():
    equations = [x.diff(t, 2) + 2 * x + y + eps * x**3, y.diff(t, 2) + 4 * y - x]
    with pytest.raises(ms.ProblemError, match="defective"):
        ms.Problem(equations, [x, y], small=eps, shapes={root(3): [1, 1]})
