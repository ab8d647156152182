"""One detuning written in several ways gives one slow flow and one field, exactly, order by order.

    Ω = ω + εσ,     ω = Ω − εσ,     ω² = Ω² + εδ,     Ω² = ω² + εδ

and the last two without a relation, put into the equation by hand. The results of a form are written in its own
symbols; the second route is algebra: its relation is solved exactly for those symbols in terms of ω, σ and ε (they
are polynomials in ε), put in, and the result expanded in ε. Where the frames of two forms turn at different rates, A
changes by i(Φ' − ω)A.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass

import pytest
import sympy as sp

import multiscale as ms

from .rows import difference

t = sp.Symbol("t", real=True)
NAMES = "epsilon mu alpha_2 alpha_3 f sigma delta omega omega_1 omega_2 Omega theta"
eps, mu, alpha2, alpha3, f, sigma, delta, w, w1, w2, Om, theta = sp.symbols(NAMES, positive=True)
u, v = sp.Function("u")(t), sp.Function("v")(t)
ORDER = 3

LINEAR = u.diff(t, 2) + w**2 * u + 2 * eps * mu * u.diff(t)
CUBIC = LINEAR + eps * (alpha3 * u**3 - f * sp.cos(Om * t))
QUADRATIC_CUBIC = LINEAR + eps * (alpha2 * u**2 - f * sp.cos(Om * t)) + eps**2 * alpha3 * u**3
HARD = LINEAR + eps * alpha3 * u**3 - f * sp.cos(Om * t)
COUPLED = (
    u.diff(t, 2) + w1**2 * u + eps * (2 * mu * u.diff(t) + 2 * alpha2 * u * v),
    v.diff(t, 2) + w2**2 * v + eps * (alpha2 * u**2 + alpha3 * v**3),
)


@dataclass(frozen=True)
class Form:
    """A relation, or None where `by_hand` is put into the equations; `exactly` writes the form's own symbols in those
    of the first form."""

    relation: Mapping[sp.Expr, sp.Expr] | None
    exactly: Mapping[sp.Symbol, sp.Expr]
    by_hand: Mapping[sp.Expr, sp.Expr] | None = None


def driven_forms(n: int) -> dict[str, Form]:
    """Ω near nω."""
    frequency = n * w + eps * sigma
    # (Ω² − n²ω²)/ε
    square = 2 * n * w * sigma + eps * sigma**2
    return {
        "drive": Form({Om: frequency}, {}),
        "natural": Form({w: (Om - eps * sigma) / n}, {Om: frequency}),
        "square of the natural": Form({w**2: Om**2 / n**2 + eps * delta}, {Om: frequency, delta: -square / n**2}),
        "square of the drive": Form({Om**2: n**2 * w**2 + eps * delta}, {delta: square}),
        "frequency by hand": Form(None, {}, {Om: frequency}),
        "square by hand": Form(None, {Om: frequency, delta: -square / n**2}, {w**2: Om**2 / n**2 + eps * delta}),
    }


def coupled_forms() -> dict[str, Form]:
    """ω_2 near 2ω_1."""
    second = 2 * w1 + eps * sigma
    square = 4 * w1 * sigma + eps * sigma**2
    return {
        "second": Form({w2: second}, {}),
        "first": Form({w1: w2 / 2 - eps * sigma / 2}, {w2: second}),
        "square of the second": Form({w2**2: 4 * w1**2 + eps * delta}, {delta: square}),
        "square of the first": Form({w1**2: w2**2 / 4 + eps * delta}, {w2: second, delta: -square / 4}),
        "square by hand": Form(None, {delta: square}, {w2**2: 4 * w1**2 + eps * delta}),
    }


FAMILIES = {
    "cubic, primary": ((CUBIC,), driven_forms(1)),
    "quadratic and cubic, primary": ((QUADRATIC_CUBIC,), driven_forms(1)),
    "cubic, subharmonic": ((HARD,), driven_forms(3)),
    "coupled, one to two": (COUPLED, coupled_forms()),
}
OTHERS = [(family, name) for family, (_, forms) in FAMILIES.items() for name in list(forms)[1:]]


def first_form(family: str) -> str:
    return next(iter(FAMILIES[family][1]))


def expanded(family: str, name: str, order: int = ORDER) -> ms.Expansion:
    equations, forms = FAMILIES[family]
    form = forms[name]
    if form.by_hand is not None:
        equations = tuple(x.subs(form.by_hand) for x in equations)
    resonances = {} if form.relation is None else form.relation
    unknowns = (u, v)[: len(equations)]
    return ms.expand(ms.Problem(equations, unknowns, small=eps, resonances=resonances), order)


def series(x: sp.Expr, order: int) -> list[sp.Expr]:
    """Taylor coefficients in ε through ε^order."""
    result, factorial = [], 1
    for k in range(order + 1):
        result.append(x.subs(eps, 0) / factorial)
        x, factorial = sp.diff(x, eps), factorial * (k + 1)
    return result


def plain(x: sp.Expr, e: ms.Expansion) -> sp.Expr:
    """Conjugate amplitudes as symbols."""
    return x.subs({sp.conjugate(A): sp.Symbol(f"{A.name}bar") for A in e.symbols.A})


def flow_series(
    e: ms.Expansion, exactly: Mapping[sp.Symbol, sp.Expr], first: ms.Expansion, order: int = ORDER
) -> list[sp.Expr]:
    """The slow flow of every mode in the frame of `first`, power by power of ε."""
    result = []
    for (A, rate), turning in zip(e.slow_flow.complex.items(), _frame_rates(first), strict=True):
        own = e.slow_flow.frame[A].diff(t).subs(_eliminated(e)).subs(exactly) - turning
        result += series(sp.expand(plain(rate + sp.I * own * A, e)).subs(exactly), order)[1:]
    return result


def _frame_rates(e: ms.Expansion) -> list[sp.Expr]:
    """The rates at which the frames turn, with Ω written in the symbols that remain."""
    return [angle.diff(t).subs(_eliminated(e)) for angle in e.slow_flow.frame.values()]


def _eliminated(e: ms.Expansion) -> dict[sp.Expr, sp.Expr]:
    found = {}
    for key, value in e.problem.resonances:
        found[key if key.is_Symbol else key.base] = value if key.is_Symbol else sp.sqrt(value)
    return found


def field_series(e: ms.Expansion, exactly: Mapping[sp.Symbol, sp.Expr], order: int) -> list[sp.Expr]:
    """U_0 + εU_1 + … as a function of A and of the angle θ through which the frame of the first mode has turned."""
    rate = e.slow_flow.frame[e.symbols.A[0]].diff(t)
    result = []
    for x in e.problem.unknowns:
        total = sp.Add(*(eps**n * e.levels[n].corrections[x] for n in range(order + 1)))
        by_angle = plain(total, e).subs(e.symbols.T[0], theta / rate).replace(sp.exp, _settled)
        result += series(sp.expand(by_angle).subs(exactly), order)
    return result


def _settled(x: sp.Expr) -> sp.Expr:
    return sp.exp(sp.cancel(x))


@pytest.fixture(scope="module")
def first() -> dict[str, ms.Expansion]:
    return {family: expanded(family, first_form(family)) for family in FAMILIES}


@pytest.mark.parametrize(("family", "name"), OTHERS)
def test_slow_flow_agrees(first, family: str, name: str):
    e, exactly = expanded(family, name), FAMILIES[family][1][name].exactly
    assert difference(flow_series(e, exactly, first[family]), flow_series(first[family], {}, first[family])) == []


@pytest.mark.parametrize(("family", "name"), OTHERS)
def test_field_agrees(first, family: str, name: str):
    e, exactly = expanded(family, name, 2), FAMILIES[family][1][name].exactly
    assert difference(field_series(e, exactly, 2), field_series(first[family], {}, 2)) == []


@pytest.mark.parametrize(("family", "name"), [(x, n) for x, n in OTHERS if "square" in n])
def test_the_square_of_the_detuning_is_seen(first, family: str, name: str):
    """δ = ±2ωσ without its part εσ² makes the flows differ above the first level."""
    e, exactly = expanded(family, name), dict(FAMILIES[family][1][name].exactly)
    exactly[delta] = exactly[delta].subs(eps, 0)
    pairs = zip(flow_series(e, exactly, first[family]), flow_series(first[family], {}, first[family]), strict=True)
    agree = [difference(*pair) == [] for pair in pairs]
    assert agree[0::ORDER] == [True] * len(e.symbols.A)
    assert not all(agree)


@pytest.mark.parametrize("family", FAMILIES)
def test_the_detuning_reaches_every_level(first, family: str):
    """Otherwise agreement of the forms would say little."""
    levels = flow_series(first[family], {}, first[family])
    assert all(any(x.has(sigma) for x in levels[n::ORDER]) for n in range(ORDER))
