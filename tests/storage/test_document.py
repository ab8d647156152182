"""Expansions as text: the way back is exact, and nothing but such a text is read."""

from __future__ import annotations

import contextlib
import json
import random

import numpy as np
import pytest
import sympy as sp
from hypothesis import given, settings
from hypothesis import strategies as st

import multiscale as ms
from multiscale.storage.document import _digest
from multiscale.storage.expressions import Reader, Writer

t = sp.Symbol("t", real=True)
eps, w0, mu, alpha, f, Omega = sp.symbols("epsilon omega_0 mu alpha f Omega", positive=True)
sigma = sp.Symbol("sigma", real=True)
u, v, F = sp.Function("u")(t), sp.Function("v")(t), sp.Function("F")
oscillator = u.diff(t, 2) + w0**2 * u

PROBLEMS = {
    "symbolic": lambda: ms.Problem(oscillator + 2 * eps * mu * u.diff(t) + eps * alpha * u**3, u, small=eps),
    "driven": lambda: ms.Problem(
        oscillator + eps * u**2 / 3 - eps * f * sp.cos(Omega * t), u, small=eps, resonances={Omega: w0 + eps * sigma}
    ),
    "by square": lambda: ms.Problem(
        oscillator - eps * f * sp.cos(Omega * t + sp.pi / 7), u, small=eps, resonances={Omega**2: w0**2 + eps * sigma}
    ),
    "ordering": lambda: ms.Problem(u.diff(t, 2) + 2 * u + mu * u.diff(t) + u**3, u, ordering={u: 1, mu: 2}),
    "pair": lambda: ms.Problem(
        [u.diff(t, 2) + u + 2 * eps * u * v, v.diff(t, 2) + w0**2 * v + eps * u**2],
        [u, v],
        small=eps,
        resonances={v: 2 + eps * sigma},
    ),
    "floats": lambda: ms.Problem(u.diff(t, 2) + 1.7 * u + eps * 0.1 * u**3, u, small=eps),
    "slow": lambda: ms.Problem(oscillator + eps * sp.exp(-eps * t) * u**3, u, small=eps),
    "parametric": lambda: ms.Problem(u.diff(t, 2) + u + eps * sp.cos(2 * t) * u + eps * alpha * u**3, u, small=eps),
    "coupled": lambda: ms.Problem(
        [u.diff(t, 2) + 3 * u - v + eps * u**2, v.diff(t, 2) + 2 * v - u + eps * mu * v.diff(t)],
        [u, v],
        small=eps,
        modes=[1],
        references={1: v},
    ),
    "floating-point modes": lambda: ms.Problem.from_matrices(
        np.eye(3), K=[[3.1, -1.0, 0.2], [-1.0, 2.7, 0.1], [0.2, 0.1, 5.0]], cubic={(0, 0, 0, 0): 1}
    ),
    "first order": lambda: ms.Problem(
        [u.diff(t) - v, v.diff(t) + 4 * u - mu * v + u**2 * v], [u, v], ordering={u: 1, v: 1, mu: 2}
    ),
    "about a state of rest": lambda: ms.Problem(
        u.diff(t, 2) + mu * u - f / (alpha - u) ** 2, u, ordering={u: 1}, about={u: sigma}
    ),
    "pendulum": lambda: ms.Problem(u.diff(t, 2) + sp.sin(u), u, ordering={u: 1}),
    "drag": lambda: ms.Problem(oscillator + eps * sp.Abs(u.diff(t)) * u.diff(t), u, small=eps, harmonics=5),
    "measured law": lambda: ms.Problem(
        oscillator + eps * F(u), u, small=eps, laws={F: ([-2.0, 0.1, 2.0], [-1.0, 0.3, 1.5])}
    ),
}
FIRST = {"measured law"}
"""Problems that have no second order."""


@pytest.fixture(scope="module", params=PROBLEMS)
def expansion(request):
    return ms.expand(PROBLEMS[request.param](), 1 if request.param in FIRST else 2)


def test_the_way_back_is_exact(expansion):
    text = ms.to_json(expansion)
    again = ms.from_json(text)
    assert again == expansion
    assert again.problem == expansion.problem
    assert again.slow_flow.polar == expansion.slow_flow.polar
    assert ms.to_json(again) == text


@pytest.mark.parametrize("name", [name for name in PROBLEMS if name not in {*FIRST, "drag"}])
def test_a_stored_expansion_extends(name):
    expansion = ms.expand(PROBLEMS[name](), 2)
    assert ms.extend(ms.from_json(ms.to_json(expansion)), 3) == ms.extend(expansion, 3)


def test_long_integers_are_kept():
    tall = sp.Integer(7) ** 6000
    result = ms.expand(ms.Problem(u.diff(t, 2) + u + eps * u**3 / tall, u, small=eps), 2)
    assert ms.from_json(ms.to_json(result)) == result


@pytest.mark.parametrize(
    "x",
    [
        sp.Float("1.25", 40) * t,
        sp.sin(w0) / sp.cos(mu) + sp.exp(-mu) * sp.log(w0),
        sp.Piecewise((u, u > 1), (0, True)),
        sp.Abs(u.diff(t)) * sp.sign(u.diff(t)),
        sp.sqrt(2) * sp.pi + sp.I * sp.E,
        sp.Derivative(sp.Function("k")(eps * t), t),
        sp.Max(u - 1, 0) + sp.Heaviside(u) + sp.atan2(u, v),
        sp.Integral(sp.Function("k")(sigma), (sigma, 0, t)),
    ],
    ids=str,
)
def test_expressions_come_back(x):
    writer = Writer()
    place = writer.node(x)
    assert Reader(json.loads(json.dumps(writer.nodes))).expression(place) == x


def test_fifty_digits_are_kept():
    result = ms.expand(PROBLEMS["floating-point modes"](), 2, representation="mpmath")
    again = ms.from_json(ms.to_json(result))
    assert again == result
    assert again.representation == "mpmath"
    assert ms.extend(again, 3) == ms.extend(result, 3)


def test_what_has_no_text_is_named():
    odd = sp.Symbol("import os; x()", positive=True)
    with pytest.raises(ms.StorageError, match="import os"):
        ms.to_json(ms.expand(ms.Problem(u.diff(t, 2) + odd**2 * u + eps * u**3, u, small=eps), 1))
    law = ms.Problem(oscillator + eps * F(u), u, small=eps, laws={F: np.tanh})
    with pytest.raises(ms.StorageError, match="F is a Python function"):
        ms.to_json(ms.expand(law, 1))
    with pytest.raises(ms.StorageError, match="LambertW"):
        Writer().node(sp.LambertW(w0))


@pytest.fixture(scope="module")
def document():
    return json.loads(ms.to_json(ms.expand(PROBLEMS["driven"](), 2)))


def _renewed(document, **changes):
    changed = {name: x for name, x in (document | changes).items() if name != "digest" and x is not ...}
    return json.dumps(changed | {"digest": _digest(changed)})


_POWER = [["add", *range(7)], ["int", 60], ["pow", 7, 8]]


def _product_of_sums(name):
    """(x_0 + i y_0)(x_1 + i y_1)…: few letters, 2^12 terms."""
    rows = [["const", "i"]]
    for k in range(12):
        n = len(rows)
        rows += [["sym", f"x{k}", {}], ["sym", f"y{k}", {}], ["mul", 0, n + 1], ["add", n, n + 2]]
    return [*rows, ["mul", *range(4, len(rows), 4)], ["call", name, len(rows)]]


@pytest.mark.parametrize(
    ("changes", "words"),
    [
        ({"version": 2}, "version 2"),
        ({"version": "x"}, "version"),
        ({"version": True}, "version"),
        ({"format": "other"}, "format"),
        ({"order": 7}, "order 7"),
        ({"order": ...}, "order"),
        ({"amplitude": "rms"}, "amplitude"),
        ({"tolerance": "nan"}, "tolerance"),
        ({"generators": ["a", "a"]}, "distinct"),
        ({"generators": []}, "generator"),
        ({"expressions": [["eval", "1"]]}, "unknown kind"),
        ({"expressions": [["call", "system", 0]]}, "reference"),
        ({"expressions": [["int", 1], ["call", "__import__", 0]]}, "cannot be made"),
        ({"expressions": [["sym", "__import__('os')", {}]]}, "characters"),
        ({"expressions": [["sym", "x", {"real": 1}]]}, "assumptions"),
        ({"expressions": [["sym", "x", {"wise": True}]]}, "assumption"),
        ({"expressions": [["fun", "f();g", {}]]}, "characters"),
        ({"expressions": [["int", "9" * 5000]]}, "integer"),
        ({"expressions": [["int", "0x"]]}, "integer"),
        ({"expressions": [["rat", 1, 0]]}, "denominator"),
        ({"expressions": [["add", 0]]}, "later"),
        ({"expressions": [["int", 2], ["int", 10**9], ["pow", 0, 1]]}, "excessive"),
        ({"expressions": [["int", 10**9], ["call", "gamma", 0]]}, "gamma"),
        ({"expressions": [["int", 3], *[["mul", k, k] for k in range(60)]]}, "excessive|length"),
        ({"expressions": [["sym", "x", {}], *[["call", "sin", k] for k in range(300)]]}, "depth"),
        ({"expressions": [["sym", "x", {}], *[["add", k, k, 0] for k in range(60)]]}, "length|multiplied out"),
        ({"expressions": [["int", 1], ["int", 0], ["int", -1], ["pow", 1, 2]]}, "no value"),
        ({"expressions": _product_of_sums("re")}, "re of a sum of more than 128 terms"),
        ({"expressions": _product_of_sums("im")}, "im of a sum of more than 128 terms"),
        ({"expressions": [*(["sym", f"x{k}", {}] for k in range(7)), *_POWER]}, "multiplied out"),
        ({"expressions": [["sym", "x", {}], ["call", "Max", *[0] * 65]]}, "Max of 65 expressions, more than 64"),
        ({"expressions": [["int", hex(2**20000 - 1)], ["rat", 1, 3], ["pow", 0, 1]]}, "a root of a number"),
        ({"expressions": [["float", 0, 1, 0, 10**6], ["call", "sin", 0]]}, "precision"),
        ({"expressions": {}}, "array"),
        ({"representation": "sparse"}, "representation is 'sparse'"),
        ({"reciprocals": [[3, []]]}, "name of a reciprocal"),
        ({"tolerance": (-1.0).hex()}, "the tolerance is -1.0"),
        ({"problem": []}, "unknowns"),
    ],
    ids=lambda x: str(x)[:50],
)
def test_hostile_texts_are_refused(document, changes, words):
    with pytest.raises(ms.StorageError, match=words):
        ms.from_json(_renewed(document, **changes))


@pytest.mark.parametrize("text", ["", "[", "[]", "null", "3", "NaN", "[" * 100_000, '{"format": NaN}'])
def test_what_is_not_such_json_is_refused(text):
    with pytest.raises(ms.StorageError):
        ms.from_json(text)


@pytest.mark.parametrize("given", [None, b"{}", 3, {}])
def test_only_text_is_read(given):
    with pytest.raises(ms.StorageError, match="text"):
        ms.from_json(given)


def test_a_formal_expansion_comes_back():
    force = sp.Abs(u) * u**2
    stated = ms.Problem(u.diff(t, 2) + u + eps * force, u, small=eps, formal=True)
    result = ms.expand(stated, 1)
    stored = json.loads(ms.to_json(result))
    assert stored["problem"]["formal"] is True
    assert ms.from_json(ms.to_json(result)) == result
    with pytest.raises(ms.StorageError, match="formal is '1'"):
        ms.from_json(_renewed(stored, problem=stored["problem"] | {"formal": 1}))


def test_damage_is_told(document):
    damaged = json.dumps(document | {"tolerance": (0.25).hex()})
    with pytest.raises(ms.StorageError, match="digest"):
        ms.from_json(damaged)


def _places(x, path=()):
    yield path
    if isinstance(x, dict | list):
        for key in x if isinstance(x, dict) else range(len(x)):
            yield from _places(x[key], (*path, key))


STRANGE = [None, True, -1, 10**30, "x", "-5", [], [[]], {}, 0, 1, 2.5, "@z0", "0xff", [1, 2, 3]]


@settings(max_examples=300, deadline=None, derandomize=True)
@given(seed=st.integers(0, 10**9))
def test_fuzzed_texts_are_read_or_refused(document, seed):
    """One part of the text replaced and the digest renewed: an expansion or a `StorageError`, nothing else."""
    random_ = random.Random(seed)
    changed = json.loads(json.dumps({name: x for name, x in document.items() if name != "digest"}))
    path = random_.choice([p for p in _places(changed) if p])
    place = changed
    for key in path[:-1]:
        place = place[key]
    place[path[-1]] = random_.choice(STRANGE)
    with contextlib.suppress(ms.StorageError):
        assert isinstance(ms.from_json(_renewed(changed)), ms.Expansion)


@settings(max_examples=100, deadline=None, derandomize=True)
@given(position=st.integers(0, 10**6), letter=st.characters())
def test_altered_letters_are_told(document, position, letter):
    text = json.dumps(document, separators=(",", ":"))
    position %= len(text)
    altered = text[:position] + letter + text[position + 1 :]
    if altered != text:
        with pytest.raises(ms.StorageError):
            ms.from_json(altered)
