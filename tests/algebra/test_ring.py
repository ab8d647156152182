"""The laws of `multiscale.algebra.ring`, for every representation, on seeded random elements."""

from __future__ import annotations

from fractions import Fraction
from importlib.util import find_spec

import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from multiscale.algebra.choice import make_ring
from multiscale.algebra.derivation import Derivation
from multiscale.algebra.polynomial import freeze, primitive
from multiscale.algebra.reciprocals import inverse, missing
from multiscale.algebra.ring import RingSpec
from multiscale.errors import MultiscaleError

SPEC = RingSpec(
    pairs=(("z", "z~"), ("y", "y~"), ("e", "e~")),
    units=frozenset({"e"}),
    reals=("a", "w"),
    roots=(
        ("q", freeze({(("a", 1),): Fraction(1), (("r", 1),): Fraction(2), (("sqrt(2)", 1),): Fraction(1)})),
        ("sqrt(2)", freeze({(): Fraction(2)})),
        ("r", freeze({(("a", 1),): Fraction(1), (): Fraction(3)})),
    ),
    reciprocals=(("1/w", freeze({(("w", 1),): Fraction(1)})),),
)
REPRESENTATIONS = [
    "sympy",
    pytest.param("flint", marks=pytest.mark.skipif(not find_spec("flint"), reason="no python-flint")),
]
FIXED = settings(derandomize=True, deadline=None, max_examples=25)

rationals = st.fractions(-9, 9, max_denominator=7)
polynomials = st.dictionaries(
    st.lists(st.tuples(st.sampled_from(SPEC.names), st.integers(1, 3)), max_size=4, unique_by=lambda x: x[0]).map(
        lambda x: tuple(sorted(x))
    ),
    rationals.filter(bool),
    max_size=5,
)


@pytest.fixture(params=REPRESENTATIONS, scope="module")
def ring(request):
    return make_ring(SPEC, request.param)


def law(*strategies):
    """Hypothesis over named polynomials, the ring coming from the fixture."""

    def decorate(check):
        def run(ring):
            @FIXED
            @given(st.tuples(*strategies))
            def inner(named):
                check(ring, *(ring.read(p) for p in named))

            inner()

        run.__name__ = check.__name__
        run.__doc__ = check.__doc__
        return run

    return decorate


@law(polynomials)
def test_write_inverts_read(ring, x):
    assert ring.read(ring.write(x)) == x


@law(polynomials, polynomials, polynomials)
def test_ring_axioms(ring, x, y, z):
    assert x * (y + z) == x * y + x * z
    assert x * y == y * x
    assert not (x - y) + (y - x)


@law(polynomials, polynomials)
def test_normal_is_a_homomorphism(ring, x, y):
    assert ring.normal(x * y) == ring.normal(ring.normal(x) * ring.normal(y))


@law(polynomials)
def test_normal_elements_are_reduced(ring, x):
    index = SPEC.index
    for m, _ in ring.terms(ring.normal(x)):
        assert m[0] < 2
        assert m[index["sqrt(2)"]] < 2
        assert m[index["r"]] < 2
        assert not (m[index["w"]] and m[index["1/w"]])
        assert not (m[index["e"]] and m[index["e~"]])


@law(polynomials, polynomials)
def test_conjugation_is_an_involution_and_a_homomorphism(ring, x, y):
    assert ring.conjugate(ring.conjugate(x)) == x
    assert ring.conjugate(x * y) == ring.conjugate(x) * ring.conjugate(y)


def test_conjugation_negates_i_and_exchanges_partners(ring):
    i, z = ring.generators[0], ring.generators[SPEC.index["z"]]
    assert ring.conjugate(i * z) == -(i * ring.generators[SPEC.index["z~"]])


@law(polynomials, polynomials)
def test_product_rule(ring, x, y):
    images = {"z": x, "y": ring.generators[0] * ring.generators[SPEC.index["a"]]}
    d = Derivation(images)
    assert not ring.normal(d(ring, x * y) - d(ring, x) * y - x * d(ring, y))


@law(polynomials, polynomials)
def test_derivations_commute_with_conjugation(ring, x, y):
    d = Derivation({"z": y}, {"a": y * ring.conjugate(y)})
    assert not ring.normal(d(ring, ring.conjugate(x)) - ring.conjugate(d(ring, x)))


@law(polynomials)
def test_derivative_of_a_real_element_is_the_derivative(ring, x):
    real = x + ring.conjugate(x)
    d = Derivation({"z": x}, {"w": real})
    assert not ring.normal(d.of_real(ring, real) - d(ring, real))


class _ByFirst(dict):
    def __missing__(self, key):
        return key[0] if key[1] < 2 else None


@law(polynomials)
def test_split_loses_only_what_the_key_drops(ring, x):
    indices = (SPEC.index["z"], SPEC.index["z~"])
    parts = ring.split(x, indices, _ByFirst())
    total = ring.zero
    for degree, part in parts.items():
        assert {m[indices[0]] for m, _ in ring.terms(part)} == {degree}
        total = total + part
    assert all(m[indices[1]] >= 2 for m, _ in ring.terms(x - total))


@law(polynomials, polynomials)
def test_quotient_undoes_a_product(ring, x, y):
    if y:
        assert ring.quotient(x * y, y) == x
        assert ring.quotient(y * y + ring.one, y) is None or len(y) == 1


@law(polynomials)
def test_factors_multiply_to_the_element(ring, x):
    if x:
        content, factors = ring.factor(x)
        product = ring.constant(content)
        for p, e in factors:
            for _ in range(e):
                product = product * p
        assert product == x


@law(polynomials, polynomials)
def test_lifting_is_a_homomorphism(ring, x, y):
    bigger = ring.extended([("1/(a + w)", freeze({(("a", 1),): Fraction(1), (("w", 1),): Fraction(1)}))])
    assert bigger.lift(x * y) == bigger.lift(x) * bigger.lift(y)
    assert bigger.write(bigger.lift(x)) == ring.write(x)


DIVISORS = {
    "rational": {(): Fraction(3, 7)},
    "generator": {(("w", 2),): Fraction(2)},
    "with a root": {(): Fraction(1), (("sqrt(2)", 1),): Fraction(-2)},
    "with a nested root": {(("q", 1),): Fraction(1), (("w", 1),): Fraction(2)},
    "with two roots": {(("w", 1),): Fraction(1), (("r", 1), ("sqrt(2)", 1)): Fraction(1)},
    "linear form": {(("w", 1),): Fraction(2), (("a", 1),): Fraction(-4)},
    "square": {(("w", 2),): Fraction(1), (("a", 1), ("w", 1)): Fraction(-2), (("a", 2),): Fraction(1)},
}


@pytest.mark.parametrize("name", DIVISORS)
def test_inverse(ring, name):
    x = ring.read(DIVISORS[name])
    bigger = ring.extended(missing(ring, [x]))
    product = bigger.lift(x) * inverse(bigger, bigger.lift(x))
    # 1/p is not reduced against p during the work, so p·(1/p) is cleared by hand here.
    for h, p in ((h, p) for h, p in bigger.spec.reciprocals if len(p) > 1):
        polynomial = bigger.read(dict(p))
        for _ in range(2):
            if any(m[bigger.spec.index[h]] for m, _ in bigger.terms(product)):
                product = _cleared(bigger, bigger.normal(product), bigger.spec.index[h], polynomial)
    assert bigger.normal(product) == bigger.one


def _cleared(ring, x, k, p):
    """x with one power of generator k times p taken out where the division is exact."""
    lowered = ring.from_terms({(*m[:k], m[k] - 1, *m[k + 1 :]): c for m, c in ring.terms(x)})
    return ring.quotient(lowered, p)


def test_inverse_of_zero(ring):
    with pytest.raises(ZeroDivisionError):
        inverse(ring, ring.zero)


def test_primitive_has_a_positive_first_coefficient_and_no_content():
    content, p = primitive({(("a", 1),): Fraction(-4, 3), (): Fraction(2)})
    assert content == Fraction(-2, 3)
    assert p == {(("a", 1),): 2, (): -3}


def test_unknown_representation():
    with pytest.raises(MultiscaleError, match="expected 'auto', 'sympy' or 'flint'"):
        make_ring(SPEC, "dense")
