"""The lattice of resonant phases."""

from __future__ import annotations

import pytest

from multiscale.phases import phase_basis

CASES = {
    "none": ([(0, 0)], 2, (), (0, 1)),
    "one to two": ([(-2, 1), (2, -1)], 2, ((-2, 1),), (0,)),
    "saturated": ([(-2, 2)], 2, ((-1, 1),), (0,)),
    "third mode apart": ([(-3, 1, 0)], 3, ((-3, 1, 0),), (0, 2)),
    "only the last two": ([(0, -1, 1)], 3, ((0, -1, 1),), (0, 1)),
}


@pytest.mark.parametrize("name", CASES)
def test_basis(name):
    found, size, resonant, cyclic = CASES[name]
    basis = phase_basis(found, size)
    assert (basis.resonant, basis.cyclic) == (resonant, cyclic)


LATTICES = [[(-2, 1, 0), (0, -1, 2)], [(1, 1, -1), (2, -1, 0)], [(4, -2, 0, 0), (0, 3, -3, 0), (1, 1, 1, -3)]]


@pytest.mark.parametrize("found", LATTICES, ids=str)
def test_every_combination_has_integer_coordinates(found):
    basis = phase_basis(found, len(found[0]))
    for combination in found:
        n = basis.coordinates(combination)
        rebuilt = tuple(
            sum(c * row[j] for c, row in zip(n, basis.resonant, strict=True)) for j in range(len(combination))
        )
        assert rebuilt == combination
    assert len(basis.resonant) + len(basis.cyclic) == len(found[0])
