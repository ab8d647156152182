"""Laws of the ring of vectors, and that half the products of real elements are enough."""

from fractions import Fraction

import numpy as np
import pytest

from multiscale.algebra.derivation import Derivation
from multiscale.algebra.ring import RingSpec
from multiscale.algebra.vector_ring import VectorElement, VectorRing, mapped

SPEC = RingSpec(
    pairs=(("z", "z~"), ("e", "e~")), units=frozenset({"e"}), reals=("s", "w"),
    reciprocals=(("1/(w)", (((("w", 1),), Fraction(1)),)),),
)  # fmt: skip
RING = VectorRing(SPEC, {"w": 2.0, "1/(w)": 0.5})
N = 4


def element(seed, vector=True):
    """A random element, numbers or vectors, real and complex coefficients mixed."""
    rng = np.random.default_rng(seed)
    terms = {}
    for _ in range(5):
        exponents = [0] * len(SPEC.names)
        for k in range(SPEC.first_pair, SPEC.first_pair + 5):
            exponents[k] = int(rng.integers(0, 3))
        size = N if vector else ()
        terms[tuple(exponents)] = rng.normal(size=size) + 1j * rng.normal(size=size) * rng.integers(0, 2)
    return RING.normal(VectorElement(terms))


def real(seed):
    x = element(seed)
    return x + RING.conjugate(x)


def close(x, y):
    left = x - y
    return max((np.max(abs(c)) for c in left.terms.values()), default=0) < 1e-12


@pytest.mark.parametrize("seed", range(4))
def test_it_is_a_ring(seed):
    x, y, number = element(seed), element(seed + 10), element(seed + 20, vector=False)
    assert close(x * y, y * x)
    assert close(x * (y + number), x * y + x * number)
    assert close(RING.normal(number * x), RING.normal(x * number))
    assert not (x - x)
    assert x == x + RING.zero
    assert x != y
    assert close(RING.normal(x * y), RING.normal(RING.normal(x) * RING.normal(y)))


@pytest.mark.parametrize("seed", range(4))
def test_conjugation_and_derivation(seed):
    x, number = element(seed), element(seed + 20, vector=False)
    assert close(RING.conjugate(RING.conjugate(x)), x)
    assert close(RING.conjugate(RING.normal(x * number)), RING.normal(RING.conjugate(x) * RING.conjugate(number)))
    images = {"z": element(seed + 30, vector=False), "e": RING.generators[SPEC.index["e"]] * RING.constant(1j)}
    d = Derivation(images)
    assert close(d(RING, RING.normal(number * x)), RING.normal(d(RING, number) * x + number * d(RING, x)))
    assert close(d(RING, RING.conjugate(x)), RING.conjugate(d(RING, x)))


@pytest.mark.parametrize("seed", range(4))
def test_half_the_products_of_real_elements_are_enough(seed):
    x, y = real(seed), real(seed + 10)
    assert close(RING.real_product(x, y), RING.normal(x * y))


def test_numbers_and_phases_are_reduced():
    w, inverse, e, ebar = (RING.generators[SPEC.index[name]] for name in ("w", "1/(w)", "e", "e~"))
    assert RING.rational(w) == 2.0
    assert RING.rational(w * inverse) == 1.0
    assert RING.rational(RING.normal(e * ebar)) == 1.0
    assert RING.rational(RING.generators[0]) == 1j


def test_rounding_is_removed_and_real_vectors_become_real():
    z = RING.generators[SPEC.index["z"]]
    x = RING.normal(z * RING.constant(np.ones(N)) + RING.constant(1e-17 * np.ones(N)))
    assert len(x) == 1
    (c,) = RING.normal(z * RING.constant(np.ones(N) + 1e-18j)).terms.values()
    assert c.dtype == float


def test_entries_and_maps():
    x = element(3)
    matrix = np.arange(float(N * N)).reshape(N, N)
    moved = mapped(lambda columns: matrix @ columns, x)
    for m, c in x.terms.items():
        np.testing.assert_allclose(moved.terms[m], matrix @ c)
    assert RING.entry(x, 2).terms == {m: c[2] for m, c in x.terms.items()}
    assert mapped(lambda columns: columns, RING.zero) is RING.zero


def test_it_lifts():
    longer = RING.extended([("1/(s)", (((("s", 1),), Fraction(1)),))])
    x = element(1)
    assert {m[:-1]: c for m, c in longer.lift(x).terms.items()}.keys() == x.terms.keys()
