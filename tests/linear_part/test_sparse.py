"""The law of linear parts for sparse matrices: L_0(ir) solve + Σ L_0'(ir) φ_a project + part = 0."""

from fractions import Fraction

import numpy as np
import pytest
import scipy.sparse as sparse

from multiscale.algebra.ring import RingSpec
from multiscale.algebra.vector_ring import VectorRing
from multiscale.large.eigenmodes import eigenmodes
from multiscale.linear_part.bordered import Bordered, combination
from multiscale.linear_part.sparse import Sparse

N = 6
RNG = np.random.default_rng(5)
STIFFNESS = sparse.csr_matrix(np.diag(RNG.uniform(1, 4, N)) + 0.3 * (np.eye(N, k=1) + np.eye(N, k=-1)))
MASS = sparse.diags(RNG.uniform(0.8, 1.2, N)).tocsr()
TURNING = sparse.csr_matrix(0.2 * (np.eye(N, k=2) - np.eye(N, k=-2)))
CIRCULATORY = STIFFNESS + sparse.csr_matrix(0.05 * (np.eye(N, k=1) - np.eye(N, k=-1)))


def linear(case):
    """(linear part, ring): two carried modes, the second at twice the first in the detuned case."""
    gyroscopic = TURNING if case == "gyroscopic" else None
    stiffness = CIRCULATORY if case == "circulatory" else STIFFNESS
    modes = eigenmodes(MASS, gyroscopic, stiffness, [0, 3], {})
    own = tuple(m.frequency for m in modes)
    detuned = case == "detuned"
    rates, values = ([(1,), (2,)], own[:1]) if detuned else ([(1, 0), (0, 1)], own)
    names = [f"w{k + 1}" for k in range(len(values))]
    ring = VectorRing(
        RingSpec(pairs=(("z", "z~"), ("y", "y~")), reals=tuple(names)), dict(zip(names, values, strict=True))
    )
    leading = (own[0], 2 * own[0]) if detuned else own
    symmetric = case in ("symmetric", "detuned")
    shapes = np.stack([m.shape for m in modes], axis=1)
    references = tuple(m.reference for m in modes)
    bordered = Bordered(MASS, gyroscopic, stiffness, shapes, references, own, leading, symmetric)
    bases = [{((name, 1),): Fraction(1)} for name in names]
    return Sparse(bordered, rates, bases, 1, ["omega_1", "omega_2"], 0.0, ring), ring


def part(ring):
    rng = np.random.default_rng(0)
    z = ring.generators[ring.spec.first_pair]
    zbar = ring.generators[ring.spec.first_pair + 1]
    real, both = ring.constant(rng.normal(size=N)), ring.constant(rng.normal(size=N) + 1j * rng.normal(size=N))
    return {0: real * z * z + both * z * zbar + ring.constant(rng.normal(size=N))}


CASES = ["symmetric", "detuned", "gyroscopic", "circulatory"]
COUNTS = [(1, 0), (2, 0), (3, 0), (1, 1), (0, 0), (2, -1), (0, 1)]


def rate_of(linear_part, counts):
    first, second = linear_part.modes
    return tuple(counts[0] * a + counts[1] * b for a, b in zip(first.rate, second.rate, strict=True))


@pytest.mark.parametrize("case", CASES)
@pytest.mark.parametrize("counts", COUNTS, ids=str)
def test_solve_and_project_leave_nothing(case, counts):
    linear_part, ring = linear(case)
    rate = rate_of(linear_part, counts)
    given = part(ring)
    changes = linear_part.project(given, rate)
    assert set(changes) == set(linear_part.modes_at(rate))
    solved = linear_part.solve(given, rate)
    left = linear_part.act(solved, rate)[0] + linear_part.bracket(changes).get(0, ring.zero) + given[0]
    assert max((np.max(abs(c)) for c in left.terms.values()), default=0) < 1e-11
    for a in linear_part.modes_at(rate):
        place = linear_part.bordered.references[a]
        assert all(abs(c[place]) < 1e-12 for c in solved[0].terms.values())


@pytest.mark.parametrize("case", CASES)
def test_shapes_span_the_kernel(case):
    linear_part, ring = linear(case)
    for mode in linear_part.modes:
        shape = ring.read(dict(mode.shape[0]))
        (left,) = linear_part.act({0: shape}, mode.rate)[0].terms.values()
        assert np.max(abs(left)) < 1e-12


def test_one_factorisation_serves_a_rate_and_its_mirror():
    linear_part, ring = linear("symmetric")
    for rate in [(3, 0), (-3, 0), (3, 0)]:
        linear_part.solve(part(ring), rate)
    assert linear_part.bordered.watch.factorisations == 1


def test_a_combination_in_words():
    assert combination((2, 0, 0, 1, 0, 3), ["omega_1", "omega_2", "Omega"]) == "2*omega_1 - omega_2 - 3*Omega"
    assert combination((0, 1, 2, 0), ["omega_1", "omega_2"]) == "2*omega_2 - omega_1"
    assert combination((0, 1, 2, 0), ["omega_1", ""], -1) == "omega_1"
    assert combination((1, 1), ["omega_1"]) == "0"
