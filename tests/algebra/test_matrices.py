"""A adj(A) = det(A) 1 over rings, and the blocks of kernels."""

from __future__ import annotations

import random
from fractions import Fraction

import pytest
import sympy as sp

from multiscale.algebra.choice import make_ring
from multiscale.algebra.matrices import adjugate, applied, minor, product, trace_of_product
from multiscale.algebra.ring import RingSpec
from multiscale.linear_part.kernel import block_of, covectors, scaled_shapes

RING = make_ring(RingSpec(pairs=(("z", "z~"),), reals=("a", "b")), "sympy")
LEAVES = [RING.generators[0], *RING.generators[3:], RING.one]


def matrix(size: int, seed: int) -> list[list[object]]:
    numbers = random.Random(seed)

    def entry() -> object:
        return RING.constant(numbers.randint(-3, 3)) * numbers.choice(LEAVES) + RING.constant(numbers.randint(-2, 2))

    return [[entry() for _ in range(size)] for _ in range(size)]


@pytest.mark.parametrize("size", [1, 2, 3, 4, 5])
def test_adjugate(size):
    a = matrix(size, size)
    determinant, adjoint = adjugate(RING, a)
    for i, row in enumerate(product(RING, a, adjoint)):
        for j, x in enumerate(row):
            assert not RING.normal(x - (determinant if i == j else RING.zero))


def test_determinant_of_numbers():
    numbers = [[2, -1, 3], [0, 4, 1], [5, 5, -2]]
    a = [[RING.constant(x) for x in row] for row in numbers]
    assert RING.rational(adjugate(RING, a)[0]) == Fraction(int(sp.Matrix(numbers).det()))
    assert adjugate(RING, []) == (RING.one, [])


def test_derivative_of_the_determinant():
    """d det(A + sB)/ds = tr(adj(A) B) at s = 0, by a difference of exact values."""
    a, b = matrix(3, 7), [[RING.constant(i - 2 * j) for j in range(3)] for i in range(3)]

    def determinant(s: Fraction) -> object:
        moved = [[x + RING.constant(s) * y for x, y in zip(p, q, strict=True)] for p, q in zip(a, b, strict=True)]
        return adjugate(RING, moved)[0]

    # A cubic in s: its slope at 0 from the values at ±1, ±2.
    near = determinant(Fraction(1)) - determinant(Fraction(-1))
    far = determinant(Fraction(2)) - determinant(Fraction(-2))
    slope = near * RING.constant(Fraction(2, 3)) - far * RING.constant(Fraction(1, 12))
    assert not RING.normal(slope - trace_of_product(RING, adjugate(RING, a)[1], b))


@pytest.mark.parametrize(("size", "rank"), [(2, 1), (3, 2), (3, 1), (4, 2)])
def test_kernel_of_a_product(size, rank):
    left, right = matrix(size, 11), matrix(size, 12)
    singular = product(RING, [row[:rank] for row in left], right[:rank])
    block = block_of(RING, singular, size - rank, list(range(size)))
    assert block is not None
    assert len(minor(singular, block.rows, block.references)) == rank
    for shape in scaled_shapes(RING, singular, block):
        assert not any(applied(RING, singular, shape))
    for row in covectors(RING, singular, left, block).rows:
        assert not any(applied(RING, list(zip(*singular, strict=True)), row))
    assert block_of(RING, singular, size - rank - 1, list(range(size))) is None or size - rank == 1
    assert block_of(RING, singular, size - rank + 1, list(range(size))) is None or rank == 1
