"""Coupled leading orders: residuals, equivalent forms, and the motion itself. All numbers are invented."""

from __future__ import annotations

import pickle

import pytest
import sympy as sp
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st
from support.claims import examination_of, flow_raised
from support.coupled import motion_errors, slope

import multiscale as ms

# Order 1 with quadratic terms is asked for on purpose in a few places.
pytestmark = pytest.mark.filterwarnings("ignore::multiscale.errors.OrderingWarning")

t = sp.Symbol("t", real=True)
eps, alpha, mu, f, sigma, Om, G, k, kappa = sp.symbols("epsilon alpha mu f sigma Omega G k kappa", positive=True)
x, y, z, v, w = (sp.Function(name)(t) for name in "xyzvw")
R = sp.Rational

ROTOR = [
    x.diff(t, 2) - G * y.diff(t) + k * x + eps * alpha * x * (x**2 + y**2),
    y.diff(t, 2) + G * x.diff(t) + k * y + eps * alpha * y * (x**2 + y**2) + eps * mu * y.diff(t),
]
MASSES = [x.diff(t, 2) + 3 * x - y + eps * x**2, y.diff(t, 2) + 2 * y - x + eps * mu * y.diff(t) + eps**2 * y**3]
THERMAL = [x.diff(t, 2) + x + eps * x * z + eps**2 * x**3, z.diff(t) + kappa * z - x**2 * eps - mu * x]
CHAIN = [
    x.diff(t, 2) + 2 * x - y + eps * x * z,
    y.diff(t, 2) + 2 * y - x - z + eps * mu * y.diff(t),
    z.diff(t, 2) + 2 * z - y,
]
SYSTEMS = {
    "rotor": (ROTOR, [x, y], 2, {}),
    "two masses": (MASSES, [x, y], 3, {}),
    "thermal state": (THERMAL, [x, z], 3, {}),
    "chain of three": (CHAIN, [x, y, z], 2, {}),
    "two equal oscillators": (
        [x.diff(t, 2) + k * x + eps * (x - y) ** 3, y.diff(t, 2) + k * y + eps * mu * x],
        [x, y],
        3,
        {},
    ),
    "one mode of a degenerate system": (
        [x.diff(t, 2) + k * x + z + eps * x**2 * y, y.diff(t, 2) + k * y + eps * x**2 * z, z.diff(t) + z + eps * x * y],
        [x, y, z],
        2,
        {},
    ),
    "circulatory": ([x.diff(t, 2) + 2 * x + y + eps * x**2, y.diff(t, 2) + 5 * y - x + eps * x * y], [x, y], 2, {}),
    "one mode carried": (MASSES, [x, y], 3, {"modes": [1]}),
    "another reference": (MASSES, [x, y], 3, {"references": {0: y, 1: y}}),
    "algebraic unknown": ([x.diff(t, 2) + k * x + y, y - kappa * x - eps * x**2], [x, y], 3, {}),
    "driven": (
        [*MASSES[:1], MASSES[1] - eps * f * sp.cos(Om * t)],
        [x, y],
        2,
        {"resonances": {Om: sp.sqrt(R(5, 2) - sp.sqrt(5) / 2) + eps * sigma}},
    ),
    "slowly varying whirl": (
        [
            x.diff(t, 2) - (R(6, 5) + eps * t) * y.diff(t) + 2 * x + eps * x**2,
            y.diff(t, 2) + (R(6, 5) + eps * t) * x.diff(t) + 2 * y,
        ],
        [x, y],
        2,
        {},
    ),
    "slowly varying coupled stiffness": (
        [x.diff(t, 2) + (2 + eps * t) * x - y / 2 + eps * x**2, y.diff(t, 2) + 3 * y - x / 2],
        [x, y],
        1,
        {},
    ),
    "denominators with several terms": (
        [(k + mu) * x.diff(t, 2) + G * k * x + y, (k + kappa) * y.diff(t, 2) + (k + mu) * y + eps * alpha * x * y],
        [x, y],
        2,
        {},
    ),
    "radicals in the stiffness": (
        [
            x.diff(t, 2) + sp.sqrt(k) * x - sp.sqrt(2) * y / 3 + eps * x**3,
            y.diff(t, 2) + k * sp.sin(kappa) * y - sp.sqrt(2) * x / 3,
        ],
        [x, y],
        1,
        {},
    ),
    "cart with a pendulum": (
        [
            (k + mu) * x.diff(t, 2) + mu * y.diff(t, 2) + kappa * x,
            x.diff(t, 2) + y.diff(t, 2) + G * y + eps * alpha * y**3,
        ],
        [x, y],
        1,
        {},
    ),
    "driven off resonance": ([MASSES[0] - f * sp.cos(Om * t), MASSES[1]], [x, y], 2, {}),
}


def expanded(name, order=None):
    equations, unknowns, full, options = SYSTEMS[name]
    return ms.expand(ms.Problem(equations, unknowns, small=eps, **options), order or full, tolerance=0.0)


@pytest.mark.parametrize("name", SYSTEMS)
def test_residual_has_the_order_promised(name):
    ms.certify(expanded(name)).require()


@pytest.mark.parametrize("level", [1, 2])
def test_a_perturbed_slow_flow_is_seen(level):
    examination = examination_of(expanded("thermal state"))
    change = examination.claim.amplitudes[0] * R(1, 1000)
    assert min(examination.exponents(flow_raised(examination.claim, level, change))) < level + 0.01


def flows(equations, unknowns, order, **options):
    result = ms.expand(ms.Problem(equations, unknowns, small=eps, **options), order, tolerance=0.0)
    return result, [result.slow_flow.by_scale[n][A] for n in range(1, order + 1) for A in result.symbols.A]


def agree(one, other):
    return all(sp.expand(sp.radsimp(sp.cancel(p - q))) == 0 for p, q in zip(one, other, strict=True))


class TestEquivalentForms:
    """Slow flows of equivalent forms agree to every order if the amplitude is measured in the same coordinate."""

    def test_first_and_second_order(self):
        _, second = flows([x.diff(t, 2) + k * x + eps * alpha * x**2 + eps * mu * x.diff(t)], [x], 4)
        _, first = flows([x.diff(t) - v, v.diff(t) + k * x + eps * alpha * x**2 + eps * mu * v], [x, v], 4)
        assert agree(first, second)

    def test_the_convention_matters(self):
        """In the velocity the same motion has another amplitude: D_1 agrees up to scale, D_2 of a cubic does not."""
        equations = [x.diff(t) - v, v.diff(t) + x + eps * alpha * x**3 + eps * mu * v]
        (_, first), (_, other) = (flows(equations, [x, v], 2, references=r) for r in (None, {0: v}))
        assert agree(first[:1], other[:1])
        assert not agree(first, other)

    def test_coupled_and_modal(self):
        """u_1 = q_1, u_2 = q_1 + q_2 with only the first mode carried: the same coordinate measures it."""
        q1, q2 = x, y
        forces = (q1 * q2 + q1**2, q1**2 - q2**2)
        modal = [q1.diff(t, 2) + 2 * q1 + eps * forces[0], q2.diff(t, 2) + 7 * q2 + eps * forces[1]]
        # q_2 = u_2 − u_1; the second equation is the sum of both.
        u1, u2 = v, w
        inserted = [e.subs({q1: u1, q2: u2 - u1}, simultaneous=True).doit() for e in modal]
        coupled = [sp.expand(inserted[0]), sp.expand(inserted[0] + inserted[1])]
        _, one = flows(modal, [q1, q2], 3, modes=[0])
        _, other = flows(coupled, [u1, u2], 3, modes=[0])
        assert agree(one, other)

    def test_row_operations_change_nothing(self):
        mixed = [2 * MASSES[0] + MASSES[1], MASSES[0] - 3 * MASSES[1]]
        one, _ = flows(MASSES, [x, y], 2)
        other, _ = flows([sp.expand(e) for e in mixed], [x, y], 2)
        assert one.equals(other)

    def test_general_part_gives_what_oscillators_give(self):
        equations = [x.diff(t, 2) + k * x + eps * x * y, y.diff(t, 2) + 4 * k * y + eps * alpha * x**2]
        (plain, one), (general, other) = (flows(equations, [x, y], 2, modes=m) for m in (None, [0, 1]))
        assert plain.computation.canonical.operator is None
        assert general.computation.canonical.operator is not None
        assert agree(one, other)
        assert plain.equals(general)

    def test_detuned_internal_resonance_by_the_name_of_a_mode(self):
        """Coupled masses near 1:2 against the same problem in modal coordinates, to first order."""
        w1, w2 = sp.symbols("omega_1 omega_2", positive=True)
        q1, q2 = v, w
        modal = [q1.diff(t, 2) + k * q1 + eps * q1 * q2, q2.diff(t, 2) + R(41, 10) * k * q2 + eps * q1**2]
        inserted = [e.subs({q1: (x + y) / 2, q2: (x - y) / 2}, simultaneous=True).doit() for e in modal]
        coupled = [sp.expand(inserted[0] + inserted[1]), sp.expand(inserted[0] - inserted[1])]
        one, _ = flows(modal, [q1, q2], 1, resonances={q2: 2 * sp.sqrt(k) + eps * sigma})
        other, _ = flows(coupled, [x, y], 1, resonances={w2: 2 * w1 + eps * sigma})
        # x = q_1 + q_2, so that the amplitudes in x are those of q_1 and q_2.
        renamed = dict(zip(other.symbols.A, one.symbols.A, strict=True))
        assert agree(
            [e.subs(renamed) for e in other.slow_flow.by_scale[1].values()], list(one.slow_flow.by_scale[1].values())
        )
        assert set(other.problem.parameters) == {k, sigma}
        assert other.problem.natural_frequencies == (sp.sqrt(k), 2 * sp.sqrt(k))

    def test_modes_made_equal_by_a_relation(self):
        """Coupled masses near 1:1 against modal coordinates; both modes share one rate, and keep their shapes."""
        w1, w2 = sp.symbols("omega_1 omega_2", positive=True)
        q1, q2 = v, w
        modal = [q1.diff(t, 2) + k * q1 + eps * q1 * q2**2, q2.diff(t, 2) + R(11, 10) * k * q2 + eps * q1**3]
        inserted = [e.subs({q1: (x + y) / 2, q2: (x - y) / 2}, simultaneous=True).doit() for e in modal]
        coupled = [sp.expand(inserted[0] + inserted[1]), sp.expand(inserted[0] - inserted[1])]
        one, _ = flows(modal, [q1, q2], 1, resonances={q2: sp.sqrt(k) + eps * sigma})
        other, _ = flows(coupled, [x, y], 1, resonances={w2: w1 + eps * sigma})
        # The modes are measured in x = q_1 + q_2 and y = q_1 − q_2.
        A, B = other.symbols.A
        C, D = one.symbols.A
        change = {A: C + D, B: C - D}
        x_flow, y_flow = (e.subs(change, simultaneous=True) for e in other.slow_flow.by_scale[1].values())
        q1_flow, q2_flow = one.slow_flow.by_scale[1].values()
        assert agree([x_flow, y_flow], [q1_flow + q2_flow, q1_flow - q2_flow])


MOTIONS = {
    "rotor": (ROTOR, [x, y], {}, {alpha: 0.7, mu: 0.3, G: 0.7, k: 2.0}, [0.5, 0.1, -0.3, 0.4]),
    "thermal state": (THERMAL, [x, z], {}, {kappa: 1.6, mu: 0.4}, [0.6, 0.2]),
    "two masses": (MASSES, [x, y], {}, {mu: 0.4}, [0.5, 0.1, 0.3, -0.2]),
}


@pytest.mark.slow
@pytest.mark.parametrize("name", MOTIONS)
def test_motion_error_has_its_order(name):
    """O(ε²) on t ≤ T/ε for N = 2, and O(ε) only when the second-order slow flow is changed."""
    equations, unknowns, options, values, start = MOTIONS[name]
    result = ms.expand(ms.Problem(equations, unknowns, small=eps, **options), 2, tolerance=0.0)
    small = [0.02, 0.01, 0.005]
    errors = motion_errors(result, values, start, small, 1.0)
    assert slope(small, errors) > 1.8
    assert errors[-1] < 0.02 * small[-1]
    wrong = motion_errors(result, values, start, small, 1.0, turn=0.3, level=2)
    assert slope(small, wrong) < 1.4


def test_whirl_of_a_rotor():
    """Backward and forward whirl: frequencies ½(√(G² + 4k) ∓ G), y = ∓ix, and exact circular motion.

    x + iy = r e^{iωt} solves the undamped rotor exactly when ω² + Gω... = k + εαr²: forward whirl ω² − Gω = k + εαr².
    """
    result = ms.expand(ms.Problem([e.subs(mu, 0) for e in ROTOR], [x, y], small=eps), 3)
    backward, forward = result.modes
    assert backward.frequency == sp.sqrt(G**2 + 4 * k) / 2 - G / 2
    assert forward.frequency == sp.sqrt(G**2 + 4 * k) / 2 + G / 2
    # One whirls with x + iy = r e^{iωt}, the other against it.
    assert {backward.shape[y], forward.shape[y]} == {sp.I, -sp.I}
    for mode, other in ((0, 1), (1, 0)):
        a = result.symbols.a[mode]
        series = result.frequency(mode).subs(result.symbols.a[other], 0)
        sign = 1 if mode else -1
        exact = (sign * G + sp.sqrt(G**2 + 4 * k + 4 * eps * alpha * a**2)) / 2
        at = {G: R(7, 10), k: 2, alpha: R(3, 4), a: R(1, 3)}
        difference = series.subs(at) - exact.subs(at)
        for n in range(4):
            assert abs(sp.N(sp.diff(difference, eps, n).subs(eps, 0), 20)) < 1e-15


FIXED = settings(derandomize=True, deadline=None, max_examples=12, suppress_health_check=[HealthCheck.too_slow])
entries = st.integers(-2, 2)


@st.composite
def gyroscopic(draw):
    """M = 1, K = B^T B + 1 and G antisymmetric, weak random forces of degree two and three."""
    b = sp.Matrix(2, 2, lambda i, j: draw(entries))
    stiffness = b.T * b + sp.eye(2)
    g = draw(st.integers(0, 2)) * R(1, 2)
    unknowns = [x, y]
    jets = [x, y, x.diff(t), y.diff(t)]
    equations = []
    for i, u in enumerate(unknowns):
        force = draw(st.integers(1, 3)) * sp.Mul(*(draw(st.sampled_from(jets)) for _ in range(draw(st.integers(2, 3)))))
        turning = (-1) ** (i + 1) * g * unknowns[1 - i].diff(t)
        equations.append(u.diff(t, 2) + turning + (stiffness[i, :] * sp.Matrix(unknowns))[0] + eps * force)
    return equations, unknowns


@pytest.mark.slow
def test_residuals_of_random_gyroscopic_systems():
    @FIXED
    @given(gyroscopic())
    def check(system):
        ms.certify(ms.expand(ms.Problem(*system, small=eps), 1, tolerance=0.0)).require()

    check()


IRREDUCIBLE = [[3, -1, 0], [-1, 2, -R(1, 3)], [0, -1, 4]]


def blocks(count):
    """`count` equal blocks of three masses, whose frequencies have no closed form, with weak coupling of the blocks."""
    unknowns = [[sp.Function(f"u{b}{i}")(t) for i in range(3)] for b in range(count)]
    flat = [u for block in unknowns for u in block]
    equations = []
    for b, block in enumerate(unknowns):
        for i, u in enumerate(block):
            weak = eps * flat[0] * flat[-1] if (b, i) == (0, 0) else eps * mu * flat[0].diff(t) if i == 1 else 0
            equations.append(u.diff(t, 2) + (sp.Matrix(IRREDUCIBLE)[i, :] * sp.Matrix(block))[0] + weak)
    return equations, flat


class TestFloatingPoint:
    """Modes without a closed form, by the residual in floating point: |residual| = O(ε^{N+1}) above rounding."""

    @pytest.mark.parametrize(("count", "options"), [(1, {}), (1, {"modes": [1]}), (2, {"modes": [0, 1]})])
    def test_residual(self, count, options):
        equations, unknowns = blocks(count)
        result = ms.expand(ms.Problem(equations, unknowns, small=eps, **options), 2, tolerance=0.0)
        assert result.representation == "complex"
        state = [0.3, 0.1, -0.2, 0.25, 0.15, 0.2][: 2 * result.computation.modes]
        small, errors = [0.08, 0.04], []
        for e in small:
            values = {"epsilon": e, "mu": 0.3}
            flow = result.slow_flow.to_numpy().bind(values)
            jets = [result.to_numpy(derivative=d).bind(values)(0.4, state) for d in (0, 1)]
            # The second derivative from the first, along the slow flow, by a central difference.
            h, speed = 1e-4, result.to_numpy(derivative=1).bind(values)
            ahead, behind = (speed(0.4 + s * h, state + s * h * flow(0.4, state)) for s in (1, -1))
            known = {u.diff(t, 2): (p - q) / (2 * h) for u, p, q in zip(unknowns, ahead, behind, strict=True)}
            known |= {u.diff(t): x for u, x in zip(unknowns, jets[1], strict=True)}
            place = dict(zip(unknowns, jets[0], strict=True))
            plain = [x.xreplace(known).xreplace(place).subs({eps: e, mu: 0.3}) for x in equations]
            errors.append(max(abs(float(x)) for x in plain))
        assert slope(small, errors) > 2.7

    @pytest.mark.parametrize(
        ("count", "options", "order"), [(1, {}, 2), (1, {"modes": [1]}, 3), (2, {"modes": [0, 1]}, 2)]
    )
    def test_residual_with_many_digits(self, count, options, order):
        """50 digits leave room for ε = 10⁻⁹: the order is seen as in exact arithmetic."""
        equations, unknowns = blocks(count)
        problem = ms.Problem(equations, unknowns, small=eps, **options)
        result = ms.expand(problem, order, representation="mpmath", tolerance=0.0)
        assert result.representation == "mpmath"
        ms.certify(result).require()
        double = ms.expand(problem, order, tolerance=0.0)
        ms.certify(double).require()
        at, state = {"epsilon": 0.3, "mu": 0.7}, [0.4, 0.1, -0.2, 0.3, 0.2, 0.1][: 2 * len(result.modes)]
        one, other = (e.slow_flow.to_numpy().bind(at)(0.0, state) for e in (result, double))
        assert one == pytest.approx(other, rel=1e-11, abs=1e-14)
        assert pickle.loads(pickle.dumps(result)) == result

    def test_a_drive_near_a_mode(self):
        equations, unknowns = blocks(1)
        equations[2] -= eps * f * sp.cos(Om * t)
        free = ms.Problem([*equations[:2], equations[2].subs(f, 0)], unknowns, small=eps)
        named, explicit = (
            ms.Problem(equations, unknowns, small=eps, resonances={Om: w1 + eps * sigma})
            for w1 in (sp.Symbol("omega_1", positive=True), free.natural_frequencies[0])
        )
        one, other = (ms.expand(p, 1, tolerance=0.0) for p in (named, explicit))
        assert len(one.slow_flow.phases) == 1
        assert one.equals(other)

    def test_a_repeated_frequency(self):
        equations, unknowns = blocks(2)
        result = ms.expand(ms.Problem(equations, unknowns, small=eps), 1, tolerance=0.0)
        frequencies = [float(mode.frequency) for mode in result.modes]
        assert frequencies[::2] == pytest.approx(frequencies[1::2])
        assert [mode.reference for mode in result.modes] == [unknowns[0], unknowns[3]] * 3


SHORT = ["rotor", "thermal state", "two equal oscillators", "driven"]


@pytest.mark.parametrize("name", SHORT)
def test_extending_computes_nothing_again(name):
    assert ms.extend(expanded(name, 1), 2) == expanded(name, 2)


def test_extending_in_floating_point():
    equations, unknowns = blocks(1)
    problem = ms.Problem(equations, unknowns, small=eps)
    assert ms.extend(ms.expand(problem, 1, tolerance=0.0), 2) == ms.expand(problem, 2, tolerance=0.0)


@pytest.mark.parametrize("name", SHORT)
def test_representations_agree(name):
    pytest.importorskip("flint")
    equations, unknowns, _, options = SYSTEMS[name]
    problem = ms.Problem(equations, unknowns, small=eps, **options)
    one, other = (ms.expand(problem, 2, representation=r, tolerance=0.0) for r in ("sympy", "flint"))
    assert one == other
    assert str(one.slow_flow.polar) == str(other.slow_flow.polar)


def test_views_speak_of_modes():
    """Every view of a result whose modes are fewer than its unknowns."""
    result = expanded("thermal state", 2)
    assert len(result.modes) == 1
    assert len(result.symbols.A) == 1
    assert result.modes[0].reference == x
    assert set(result.solution()) == {x, z}
    assert set(ms.harmonics(result)) == {x, z}
    level = result.levels[1]
    assert level.operator[z] == kappa * sp.Function("z_1")(result.symbols.T[0]) - mu * sp.Function("x_1")(
        result.symbols.T[0]
    ) + sp.Function("z_1")(result.symbols.T[0]).diff(result.symbols.T[0])
    assert set(level.corrections) == set(level.forcing) == set(level.secular) == {x, z}
    values = {"epsilon": 0.1, "kappa": 1.6, "mu": 0.4}
    state = [0.5, 0.2]
    place = result.to_numpy().bind(values)
    assert place(0.3, state).shape == (2,)
    squared = ms.observable(result, x**2 + z).to_numpy().bind(values)(0.3, state)
    assert squared == pytest.approx(place(0.3, state)[0] ** 2 + place(0.3, state)[1], abs=0.05)
    assert result.frequency_to_numpy().bind(values)(0.0, state) == pytest.approx(
        float(result.frequency().subs({eps: 0.1, kappa: 1.6, mu: 0.4, result.symbols.a[0]: sp.sqrt(0.29)}))
    )


def test_forcing_is_what_the_operator_makes_of_the_corrections():
    """L_0 U_n = forcing for the equations as they stand, with the secular part taken out."""
    result = expanded("thermal state", 2)
    T0 = result.symbols.T[0]
    at = {T0: 0.7, mu: 0.3, kappa: 1.6, result.symbols.A[0]: 0.3 + 0.2j}
    for n in (1, 2):
        level = result.levels[n]
        fields = {sp.Function(f"{u.func.__name__}_{n}")(T0): level.corrections[u] for u in (x, z)}
        for u in (x, z):
            left = level.operator[u].subs(fields).doit()
            rest = left - level.forcing[u] + level.secular[u]
            assert abs(complex(sp.N(rest.subs(at)))) < 1e-12


def test_steady_response_of_a_driven_coupled_problem():
    """The driven first mode against direct integration; the other mode stays at rest."""
    first = sp.sqrt(R(5, 2) - sp.sqrt(5) / 2)
    equations = [
        x.diff(t, 2) + 3 * x - y + eps * alpha * x**3 + eps * mu * x.diff(t) - eps * f * sp.cos(Om * t),
        y.diff(t, 2) + 2 * y - x + eps * mu * y.diff(t),
    ]
    named = ms.Problem(equations, [x, y], small=eps, resonances={Om: sp.Symbol("omega_1", positive=True) + eps * sigma})
    result = ms.expand(named, 2, tolerance=0.0)
    explicit = ms.Problem(equations, [x, y], small=eps, resonances={Om: first + eps * sigma})
    assert result.equals(ms.expand(explicit, 2, tolerance=0.0))
    small, values = 0.02, {alpha: 1.0, mu: 0.5, f: 0.5, sigma: 0.4}
    (state, *_) = ms.equilibria(result, {**values, eps: small})
    by_frequency = {**{s: c for s, c in values.items() if s != sigma}, eps: small, Om: float(first) + small * 0.4}
    assert ms.equilibria(result, by_frequency)[0].state == pytest.approx(state.state, abs=1e-9)
    errors = motion_errors(result, values, state.state, [small], 1.0, eliminated={Om: first + eps * sigma})
    assert errors[0] < 10 * small**2


def test_forces_that_are_not_polynomial_need_uncoupled_oscillators():
    with pytest.raises(ms.UnsupportedTermError, match=r"Abs\(.*x.*modal coordinates"):
        ms.Problem([MASSES[0] + eps * sp.Abs(x.diff(t)) * x.diff(t), MASSES[1]], [x, y], small=eps)
