"""Small texts that would exhaust time or memory, and numbers that Python does not print, are refused at once."""

from __future__ import annotations

import copy
import json
import random
import time

import pytest
import sympy as sp

import multiscale as ms
from multiscale.storage.document import _digest

t = sp.Symbol("t", real=True)
eps, k, w = sp.symbols("epsilon k omega", positive=True)
u = sp.Function("u")(t)
SECONDS = 5.0
"""What a refusal may take on a busy machine; all of these took more than 12 s, or raised something else."""


@pytest.fixture(scope="module")
def document():
    result = ms.expand(ms.Problem(u.diff(t, 2) + w**2 * u + eps * k * u**3, u, small=eps), 1)
    return json.loads(ms.to_json(result))


def renewed(document):
    changed = {name: x for name, x in document.items() if name != "digest"}
    return json.dumps(changed | {"digest": _digest(changed)})


LONG = "0x" + "f" * 20_000
BITS = "0x1" + "3" * 60_000
FLOAT = ["float", 0, 5, 90_000, 53]
NODES = {
    "square root": [["int", BITS], ["rat", 1, 2], ["pow", 0, 1]],
    "seventh root": [["int", "0x1" + "3" * 3000], ["rat", 1, 7], ["pow", 0, 1]],
    "power of floats": [FLOAT, ["pow", 0, 0]],
    "power with a float": [["int", 3], FLOAT, ["pow", 0, 1]],
    "Bessel function of a float": [["int", 1], FLOAT, ["call", "besselj", 0, 1]],
    "many digits": [["float", 0, 5, -3, 900_000], ["call", "gamma", 0]],
    "maximum of many": [*(["sym", f"s{j}", {}] for j in range(400)), ["call", "Max", *range(400)]],
    "real part of a product": [
        *(["sym", f"s{j}", {}] for j in range(24)),
        *(["add", 2 * j, 2 * j + 1] for j in range(12)),
        ["mul", *range(24, 36)],
        ["call", "re", 36],
    ],
    "power of a sum": [["sym", "q", {}], ["int", 1], ["add", 0, 1], ["int", 10_000], ["pow", 2, 3]],
    "sums of sums": [
        *(["sym", f"s{j}", {}] for j in range(6)),
        ["add", *range(6)],
        ["int", 200],
        ["pow", 6, 7],
    ],
}


@pytest.mark.parametrize("name", NODES)
def test_expressions_that_would_take_long(document, name):
    start = time.perf_counter()
    with pytest.raises(ms.StorageError):
        ms.from_json(renewed(document | {"expressions": NODES[name]}))
    assert time.perf_counter() - start < SECONDS


def test_shared_parts_are_looked_at_once(document):
    """Each of these is long when written out, and there are hundreds of them."""
    nodes = [["sym", "q", {}], *(["fun", f"f{j}", {}, j, j] for j in range(15))]
    nodes += [["fun", f"g{j}", {}, 15] for j in range(400)]
    start = time.perf_counter()
    with pytest.raises(ms.StorageError):
        ms.from_json(renewed(document | {"expressions": nodes}))
    assert time.perf_counter() - start < SECONDS


def numbers(document):
    changed = copy.deepcopy(document)
    yield changed | {"order": LONG}
    yield changed | {"version": LONG}
    yield changed | {"order": 9999, "changes": document["changes"] * 9999, "fields": document["fields"][:1] * 10_000}
    exponent, denominator = copy.deepcopy(document), copy.deepcopy(document)
    exponent["fields"][0][0][0][-1] = LONG
    denominator["fields"][0][0][0][1] = f"-{LONG}"
    yield exponent
    yield denominator


def test_numbers_that_python_does_not_print(document):
    start = time.perf_counter()
    for changed in numbers(document):
        with pytest.raises(ms.StorageError, match=r"bits|outside|version|levels"):
            ms.from_json(renewed(changed))
    assert time.perf_counter() - start < SECONDS


def places(x, path=()):
    yield path
    if isinstance(x, dict | list):
        for key in x if isinstance(x, dict) else range(len(x)):
            yield from places(x[key], (*path, key))


STRANGE = [
    *(None, True, -1, 0, 1, 2, 7, 10**30, "x", "-5", "", [], [[]], {}, 2.5, 1e300, "@z0", "0xff", LONG, [1, 2, 3]),
    *("lambda", "\ud800", "0x1p9999", [[[[[]]]]], ["int", 3], ["sym", "u", {}], ["pow", 0, 1], ["mul", 0, 0]),
]


def mutated(document, rng):
    """Up to four parts replaced, removed, doubled or exchanged."""
    changed = copy.deepcopy({name: x for name, x in document.items() if name != "digest"})
    for _ in range(rng.randint(1, 4)):
        found = [p for p in places(changed) if p]
        if not found:
            break
        path = rng.choice(found)
        place = changed
        for key in path[:-1]:
            place = place[key]
        kind = rng.randrange(5)
        if kind == 0 and isinstance(place, list):
            place.insert(path[-1], copy.deepcopy(place[path[-1]]))
        elif kind == 1:
            del place[path[-1]]
        elif kind == 2:
            other = changed
            for key in rng.choice(found):
                if isinstance(other, dict | list) and (isinstance(other, list) or key in other):
                    other = other[key] if isinstance(other, dict) or key < len(other) else other
            place[path[-1]] = copy.deepcopy(other)
        else:
            place[path[-1]] = copy.deepcopy(rng.choice(STRANGE))
    return changed


@pytest.mark.parametrize("seed", range(4))
def test_several_changes_at_once(document, seed):
    """An expansion or a `StorageError`, nothing else, and soon."""
    rng = random.Random(seed)
    read = 0
    for _ in range(150):
        text = renewed(mutated(document, rng))
        start = time.perf_counter()
        try:
            assert isinstance(ms.from_json(text), ms.Expansion)
            read += 1
        except ms.StorageError:
            pass
        assert time.perf_counter() - start < SECONDS
    assert read < 150
