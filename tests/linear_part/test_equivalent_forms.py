"""Equivalent forms of random problems give the same slow flow if the amplitude is measured in the same coordinate."""

from __future__ import annotations

import random

import pytest
import sympy as sp

import multiscale as ms

pytestmark = pytest.mark.filterwarnings("ignore::multiscale.errors.OrderingWarning")

t = sp.Symbol("t", real=True)
eps = sp.Symbol("epsilon", positive=True)
x, y, v, w = (sp.Function(name)(t) for name in "xyvw")
SEEDS = range(4)


def flows(equations, unknowns, order, **options):
    """D_1, …, D_N of every mode at numbers for the amplitudes."""
    result = ms.expand(ms.Problem(equations, unknowns, small=eps, **options), order, tolerance=0.0)
    at = {A: sp.Rational(j + 1, 3) + sp.I * sp.Rational(2, j + 5) for j, A in enumerate(result.symbols.A)}
    found = [result.slow_flow.by_scale[n][A] for n in range(1, order + 1) for A in result.symbols.A]
    return [complex(sp.N(e.subs(at))) for e in found]


def forces(chance, jets):
    """Two polynomials of degrees two and three, with a damping term."""
    terms = [sp.Mul(*chance.choices(jets, k=chance.choice((2, 3)))) for _ in range(4)] + [jets[2], jets[3]]
    return [sum(chance.randint(-3, 3) * term for term in chance.sample(terms, 3)) + terms[k] for k in (0, 1)]


@pytest.mark.parametrize("seed", SEEDS)
@pytest.mark.parametrize("turning", [0, sp.Rational(1, 2)])
def test_first_and_second_order(seed, turning):
    """x'' + … in x, y and the same as four equations of first order, gyroscopic or not."""
    chance = random.Random(seed)
    stiffness = sp.Matrix([[2 + chance.randint(0, 3), chance.choice((-1, 1))], [0, 3]])
    stiffness[1, 0] = stiffness[0, 1]
    jets = [x, y, x.diff(t), y.diff(t)]
    weak = forces(chance, jets)
    second, first = [], [x.diff(t) - v, y.diff(t) - w]
    rates = {x.diff(t): v, y.diff(t): w}
    for k, u in enumerate((x, y)):
        known = (stiffness[k, :] * sp.Matrix([x, y]))[0] + eps * weak[k]
        known += (-1) ** (k + 1) * turning * (y, x)[k].diff(t)
        second.append(u.diff(t, 2) + known)
        first.append((v, w)[k].diff(t) + known.xreplace(rates))
    one, other = flows(second, [x, y], 2), flows(first, [x, y, v, w], 2)
    assert one == pytest.approx(other, rel=1e-9, abs=1e-12)
    # In the velocity of a mode the amplitude is another one.
    changed = flows(first, [x, y, v, w], 2, references={0: v})
    assert changed != pytest.approx(one, rel=1e-3)


@pytest.mark.parametrize("seed", SEEDS)
def test_modal_and_coupled(seed):
    """u_1 = q_1, u_2 = r q_1 + q_2, the first mode carried: q_1 measures it in both."""
    chance = random.Random(100 + seed)
    r = chance.choice((-2, -1, 1, 2)) * sp.Rational(1, chance.randint(1, 3))
    weak = forces(chance, [x, y, x.diff(t), y.diff(t)])
    modal = [x.diff(t, 2) + 2 * x + eps * weak[0], y.diff(t, 2) + 7 * y + eps * weak[1]]
    inserted = [sp.expand(e.subs({x: v, y: w - r * v}, simultaneous=True).doit()) for e in modal]
    coupled = [inserted[0] + 3 * inserted[1], sp.expand(r * inserted[0] + inserted[1])]
    one, other = (flows(e, u, 3, modes=[0]) for e, u in ((modal, [x, y]), (coupled, [v, w])))
    assert one == pytest.approx(other, rel=1e-9, abs=1e-12)
