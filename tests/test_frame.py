"""The rotating frame and its resonant phases."""

from __future__ import annotations

from fractions import Fraction

import pytest
import sympy as sp

from multiscale.frame import frame_of, turns
from multiscale.problem.lattice import lattice_basis

UNDRIVEN = {
    "none": ([(0, 0)], 2, (), (0, 1)),
    "one to two": ([(-2, 1), (2, -1)], 2, ((-2, 1),), (0,)),
    "saturated": ([(-2, 2)], 2, ((-1, 1),), (0,)),
    "third mode apart": ([(-3, 1, 0)], 3, ((-3, 1, 0),), (0, 2)),
    "only the last two": ([(0, -1, 1)], 3, ((0, -1, 1),), (0, 1)),
}


@pytest.mark.parametrize("name", UNDRIVEN)
def test_internal_resonance(name):
    found, modes, resonant, cyclic = UNDRIVEN[name]
    frame = frame_of(found, modes, 0)
    assert (frame.resonant, frame.cyclic) == (resonant, cyclic)


DRIVEN = {
    "primary": ([(-1, 1)], 1, 1, [(0, 1)], ((-1,),), ()),
    "order three": ([(-3, 1)], 1, 1, [(0, Fraction(1, 3))], ((-1,),), ()),
    "parametric": ([(-2, 1)], 1, 1, [(0, Fraction(1, 2))], ((-1,),), ()),
    "drive and one to two": ([(-1, 0, 1), (-2, 1, 0)], 2, 1, [(0, 0, 1), (0, 0, 2)], ((-1, 0), (0, -1)), ()),
    "sum of two modes": ([(-1, -1, 1)], 2, 1, [(1, 0, 0), (-1, 0, 1)], ((-1, -1),), (0,)),
}


@pytest.mark.parametrize("name", DRIVEN)
def test_driven_modes_are_measured_by_their_lag(name):
    found, modes, drives, angles, resonant, cyclic = DRIVEN[name]
    frame = frame_of(found, modes, drives)
    assert frame.angles == tuple(tuple(map(Fraction, row)) for row in angles)
    assert (frame.resonant, frame.cyclic) == (resonant, cyclic)
    assert not any(x for k in found for x in frame.fast(k))


def test_two_drives_near_one_mode_leave_their_difference():
    frame = frame_of([(-1, 1, 0), (-1, 0, 1)], 1, 2)
    left = {frame.fast(k) for k in [(-1, 1, 0), (-1, 0, 1)]}
    assert any(any(x) for x in left)


LATTICES = [[(-2, 1, 0), (0, -1, 2)], [(1, 1, -1), (2, -1, 0)], [(4, -2, 0, 0), (0, 3, -3, 0), (1, 1, 1, -3)]]


@pytest.mark.parametrize("found", LATTICES, ids=str)
def test_every_combination_has_integer_coordinates(found):
    frame = frame_of(found, len(found[0]), 0)
    for combination in found:
        n = frame.coordinates(combination)
        rebuilt = tuple(
            sum(c * row[j] for c, row in zip(n, frame.resonant, strict=True)) for j in range(len(combination))
        )
        assert rebuilt == combination
    assert len(frame.resonant) + len(frame.cyclic) == len(found[0])


def test_deviations_invert_the_resonant_phases():
    frame = frame_of([(-2, 1, 0), (0, -3, 1)], 3, 0)
    gamma, beta = sp.symbols("g:2"), sp.symbols("b:3")
    deviations = frame.deviations(gamma, beta)
    for g, row in zip(gamma, frame.resonant, strict=True):
        assert sp.expand(sum(n * d for n, d in zip(row, deviations, strict=True)) - g) == 0
    assert [deviations[j] for j in frame.cyclic] == [beta[j] for j in frame.cyclic]


def test_turns_are_net_exponents():
    assert turns((2, 1, 0, 3)) == (1, -3)


@pytest.mark.parametrize("rows", [[(4,), (6,)], [(1, 1), (2, 0), (0, 2)], [(2, 4), (3, 6)]], ids=str)
def test_lattice_basis_represents_every_row(rows):
    basis, coordinates = lattice_basis(rows)
    for row, numbers in zip(rows, coordinates, strict=True):
        assert tuple(sum(n * b[k] for n, b in zip(numbers, basis, strict=True)) for k in range(len(row))) == row
    assert len(basis) <= len(rows[0])
