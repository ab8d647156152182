"""The product of two runs of levels as few products of long FLINT polynomials (python-flint, optional).

A wave is written out over all its harmonics sr + o, negative ones too, and the levels of a run side by side:

    X(y) = Σ_i y^{Pi} Σ_r x_{i,r} y^{r + R + o},      r = −R − o, …, R

In X(y) Y(y) the harmonic s r + o of level m then stands at y^{Pm + Z + r}. The distance P is just so great that
nothing of the neighbours falls on the harmonics that are kept, r = 0, …, K:

    Z = R_x + o_x + R_y + o_y − l,   P = Z + K + 1,      l = 1 if o_x = o_y = 1, else 0

what they overlap in is not looked at. All coefficients of a run stand over one common denominator.

*Grades.* Cosines and sines are even and odd powers of J, J² = −d. Where the even levels are cosines and the odd ones
sines (van der Pol: the orbit goes over into itself when time and ε change sign), level i is counted as J^i instead of
J⁰, and the run is of one grade: with e = (g + i) mod 2 the power of J in level i,

    J^e = J^{g+i} (−d)^{−⌊(g+i)/2⌋}

so that one product does where four would be needed. Of the two ways of counting the one with fewer grades is taken.
"""

from __future__ import annotations

from collections.abc import Sequence
from typing import Any, Protocol, TypeAlias

from multiscale.response.orbits.waves.parts import Parts

__all__ = ["products_of_runs"]

Level: TypeAlias = dict[int, Any]
"""{sign: part} of the parts that are not zero: +1 cosines, −1 sines."""


class Half(Protocol):
    """A wave as products need it: its offset and its parts by sign."""

    offset: int

    @property
    def parts(self) -> tuple[tuple[int, Any], ...]: ...


Entry: TypeAlias = tuple[int, int, Any]
"""(level in the run, sign, part)."""


def products_of_runs(
    parts: Parts, step: int, square: Any, x: Sequence[Half], y: Sequence[Half], limits: Sequence[int]
) -> tuple[int, list[dict[int, list[tuple[Any, Any]]]]]:
    """The offset of the product, and for each level {sign: [(scalar, part), …]}; `square` is −d, `limits` the
    highest harmonics kept."""
    found: list[dict[int, list[tuple[Any, Any]]]] = [{} for _ in limits]
    present = [[w.offset for w in run if w.parts] for run in (x, y)]
    if not all(present):
        return 0, found
    offsets = present[0][0], present[1][0]
    offset = sum(offsets) % step
    counts = [max(0, (limit - offset) // step + 1) for limit in limits]
    turn, first, second = min((_graded(x, y, turn) for turn in (0, 1)), key=lambda way: len(way[1]) * len(way[2]))
    for g, a in first.items():
        for h, b in second.items():
            lines, below = _multiplied(parts, (square, step, offsets), (g, h, turn), a, b, counts)
            for m, line in enumerate(lines):
                sign = -1 if (g + h + turn * m) % 2 else 1
                part = parts.with_half_mean(line, below) if sign > 0 and not offset else parts.joined(line, below)
                found[m].setdefault(sign, []).append((square ** ((g + h + turn * m) // 2), part))
    return offset, found


def _graded(
    x: Sequence[Half], y: Sequence[Half], turn: int
) -> tuple[int, dict[int, list[Entry]], dict[int, list[Entry]]]:
    def graded(run: Sequence[Half]) -> dict[int, list[Entry]]:
        grades: dict[int, list[Entry]] = {}
        for i, wave in enumerate(run):
            for sign, part in wave.parts:
                grades.setdefault(((sign < 0) + turn * i) % 2, []).append((i, sign, part))
        return grades

    return turn, graded(x), graded(y)


def _multiplied(
    parts: Parts,
    kind: tuple[Any, int, tuple[int, int]],
    grades: tuple[int, int, int],
    a: list[Entry],
    b: list[Entry],
    counts: Sequence[int],
) -> tuple[list[list[Any]], Any]:
    """For each level the coefficients r = 0, 1, … of the product of two grades, and their common denominator."""
    square, step, (o_x, o_y) = kind
    g, h, turn = grades
    lift = (o_x + o_y) // step
    count = max(counts)
    top_x, top_y = (max(part[0].length() for _, _, part in run) - 1 for run in (a, b))
    # What no coefficient of the other factor brings within the limit is left out.
    top_x = min(top_x, count - 1 + top_y + o_y - lift)
    top_y = min(top_y, count - 1 + top_x + o_x - lift)
    centre = top_x + o_x + top_y + o_y - lift
    distance = centre + count
    flat = []
    for run, top, offset, grade in ((a, top_x, o_x, g), (b, top_y, o_y, h)):
        terms = [(square ** -((grade + turn * i) // 2), parts.cut(part, 0, top + 1)) for i, _, part in run]
        lines, below = parts.numerators(terms)
        places = [(i, sign, line) for (i, sign, _), line in zip(run, lines, strict=True)]
        flat.append(parts.joined(_side_by_side(places, top, offset, distance), below))
    polynomial, below = parts.product(flat[0], flat[1], (len(counts) - 1) * distance + centre + count)
    line = polynomial.coeffs()
    return [line[m * distance + centre : m * distance + centre + n] for m, n in enumerate(counts)], below


def _side_by_side(places: list[tuple[int, int, list[Any]]], top: int, offset: int, distance: int) -> list[Any]:
    flat: list[Any] = [0] * (distance * (1 + max(i for i, _, _ in places)))
    for i, sign, line in places:
        zero = i * distance + top
        mirrored = line[::-1] if sign > 0 else [-c for c in reversed(line)]
        flat[zero + 1 - len(line) : zero + 1] = mirrored
        flat[zero + offset : zero + offset + len(line)] = line
        if not offset and line:
            # The coefficient of harmonic 0 is half the mean.
            flat[zero] = line[0] + sign * line[0]
    return flat
