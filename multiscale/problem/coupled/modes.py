"""Modes: the purely imaginary roots of L_0 with their shapes, numbered, normalised, and carried or not.

Modes are numbered from 0 by increasing frequency where the parameters do not decide the order, else by their first
unknown. The shape of a mode is 1 in its *reference* (the first unknown that takes part in it, or the user's choice).
"""

from __future__ import annotations

from collections.abc import Iterable, Mapping, Sequence
from dataclasses import dataclass, replace
from fractions import Fraction
from operator import index
from typing import Any, SupportsIndex

import sympy as sp

from multiscale.algebra.matrices import adjugate
from multiscale.algebra.polynomial import Monomial, freeze
from multiscale.algebra.quotient import vanishes
from multiscale.algebra.reciprocals import inverse, missing
from multiscale.algebra.ring import Exponents
from multiscale.errors import ProblemError
from multiscale.linear_part.general import General
from multiscale.linear_part.general import Root as ImaginaryRoot
from multiscale.linear_part.kernel import block_of, covectors, scaled_shapes
from multiscale.problem.coupled.given_shapes import GivenShape
from multiscale.problem.coupled.numeric import Kernel, defective, numeric_kernel
from multiscale.problem.coupled.spectrum import Found
from multiscale.problem.frequencies import Bases
from multiscale.problem.reading import Reader

__all__ = ["Choice", "modes_given", "numbering", "positive", "references_given", "roots_of"]


@dataclass(frozen=True)
class Choice:
    """What the user says about modes: which are carried (None: all), the unknowns in which some are measured, and
    frequencies with their shapes where these are not to be found by machine."""

    carried: tuple[int, ...] | None = None
    references: tuple[tuple[int, int], ...] = ()
    shapes: tuple[GivenShape, ...] = ()

    def __bool__(self) -> bool:
        return self.carried is not None or bool(self.references) or bool(self.shapes)


def modes_given(given: Any) -> tuple[int, ...] | None:
    if given is None:
        return None
    modes = tuple(given) if isinstance(given, Iterable) and not isinstance(given, str) else (given,)
    if not all(isinstance(a, SupportsIndex) and not isinstance(a, bool) for a in modes):
        raise ProblemError(
            f"modes={given!r}: expected the numbers of the modes to carry, by increasing frequency from 0"
        )
    return tuple(sorted({index(a) for a in modes}))


def references_given(given: Any, unknowns: tuple[sp.Expr, ...]) -> dict[int, sp.Expr]:
    result = {}
    for a, u in dict(given or {}).items():
        if not isinstance(a, SupportsIndex) or isinstance(a, bool) or u not in unknowns:
            raise ProblemError(
                f"references has the entry {a!r}: {u!r}: expected {{number of a mode: unknown that measures it}}"
            )
        result[index(a)] = u
    return result


def _kernels(
    linear: General, bases: Bases, reader: Reader, found: Sequence[Found], frequencies: Sequence[sp.Expr]
) -> list[Kernel]:
    return [
        _kernel(linear, reader, rate, f, w, list(range(linear.size)))
        for rate, f, w in zip(bases.rates, found, frequencies, strict=False)
    ]


def numbering(
    linear: General, bases: Bases, reader: Reader, found: Sequence[Found], frequencies: Sequence[sp.Expr]
) -> list[int]:
    """The order in which frequencies are numbered."""
    return _by_frequency(frequencies, _kernels(linear, bases, reader, found, frequencies))


def roots_of(
    linear: General,
    bases: Bases,
    reader: Reader,
    found: Sequence[Found],
    frequencies: Sequence[sp.Expr],
    choice: Choice,
) -> list[ImaginaryRoot]:
    """The roots with their kernels, numbered by increasing frequency where that is decided."""
    first_of = list(range(linear.size))
    kernels = _kernels(linear, bases, reader, found, frequencies)
    order = _by_frequency(frequencies, kernels)
    count = sum(f.multiplicity for f in found)
    carried = range(count) if choice.carried is None else choice.carried
    _check_choice(choice, count, frequencies)
    number = taken = 0
    roots = []
    for k in order:
        own = range(number, number + found[k].multiplicity)
        wanted = {a: u for a, u in choice.references if a in own}
        kernel = kernels[k]
        if wanted:
            preferred = [*wanted.values(), *(u for u in first_of if u not in wanted.values())]
            kernel = _kernel(linear, reader, bases.rates[k], found[k], frequencies[k], preferred)
            kernel = kernel.arranged(number, wanted)
        inside = [a for a in own if a in carried]
        if inside and len(inside) < len(own):
            raise ProblemError(
                f"modes {list(own)} share the frequency {frequencies[k]}: carry all of them or none, not {inside}"
            )
        roots.append(
            ImaginaryRoot(
                bases.rates[k],
                kernel.rows,
                kernel.references,
                kernel.shapes,
                taken if inside else None,
                str(frequencies[k]),
            )
        )
        number += len(own)
        taken += len(inside)
    return roots


def _check_choice(choice: Choice, count: int, frequencies: Sequence[sp.Expr]) -> None:
    asked = [*(choice.carried or ()), *(a for a, _ in choice.references)]
    strange = [a for a in asked if a not in range(count)]
    if strange or choice.carried == ():
        listed = ", ".join(map(str, frequencies))
        raise ProblemError(
            f"mode {strange[0] if strange else '()'} was asked for: this problem has the modes 0 … {count - 1}, of "
            f"frequencies {listed}"
        )


def _kernel(
    linear: General, reader: Reader, rate: tuple[int, ...], root: Found, frequency: sp.Expr, preferred: list[int]
) -> Kernel:
    multiplicity = root.multiplicity
    if linear.operator.numeric:
        return numeric_kernel(linear.operator, reader, frequency, multiplicity, preferred)
    ring, linear = reader.ring, linear.in_ring(reader.ring)
    matrix, slope = linear.matrix(rate), linear.slope(rate)
    block = block_of(ring, matrix, multiplicity, preferred)
    if block is None and root.given:
        raise ProblemError(
            f"the frequency {frequency} has more shapes than the {multiplicity} given in `shapes`: give all of them, "
            "{frequency: [shape, shape, …]}"
        )
    if block is not None and (multiplicity > 1 or root.given):
        bracket = covectors(ring, matrix, slope, block).bracket
        block = None if vanishes(ring, adjugate(ring, bracket)[0]) else block
    if block is None:
        raise defective(frequency, multiplicity)
    if more := missing(ring, [block.determinant]):
        reader.ring = ring = ring.extended(more)
        linear = linear.in_ring(ring)
        matrix = linear.matrix(rate)
        block = type(block)(
            block.rows,
            block.references,
            [[ring.lift(x) for x in row] for row in block.adjugate],
            ring.lift(block.determinant),
        )
    factor = inverse(ring, block.determinant)
    shapes = [
        tuple(freeze(_complex_reduced(reader, ring.normal(factor * x))) for x in shape)
        for shape in scaled_shapes(ring, matrix, block)
    ]
    return Kernel(block.rows, block.references, tuple(shapes))


def _complex_reduced(reader: Reader, x: Any) -> dict[Monomial, Fraction]:
    """A complex coefficient in reduced form, by name."""
    ring = reader.ring
    parts: tuple[dict[Exponents, Fraction], dict[Exponents, Fraction]] = ({}, {})
    for m, c in ring.terms(x):
        parts[m[0]][(0, *m[1:])] = c
    real, imag = (reader.reduced(ring.from_terms(part)) if part else {} for part in parts)
    return real | {tuple(sorted((*m, ("@i", 1)))): c for m, c in imag.items()}


def _samples(x: sp.Expr) -> list[float]:
    """Values of a real expression for a few values of its symbols that agree with their assumptions."""
    symbols = sorted(x.free_symbols, key=str)
    values = []
    for n in range(1, 8):
        size = [sp.Rational(3 * n + (k * k + 2 * n * k) % 7, 2 + (n + k) % 5) for k in range(len(symbols))]
        at = {s: -v if s.is_negative else v for s, v in zip(symbols, size, strict=True)}
        value = sp.N(x.subs(at))
        if value.is_real:
            values.append(float(value))
    return values


def positive(found: Found, hidden: Mapping[sp.Symbol, sp.Expr]) -> Found:
    """The sign of a root is free where only its square was known: the one that is positive as a rule."""
    values = _samples(found.frequency.subs(hidden))
    negative = sum(v < 0 for v in values) > len(values) / 2
    return replace(found, frequency=-found.frequency) if negative else found


def _by_frequency(frequencies: Sequence[sp.Expr], kernels: Sequence[Kernel]) -> list[int]:
    """By increasing frequency; where parameters may decide otherwise, by the first reference and the order found."""
    order = sorted(range(len(frequencies)), key=lambda k: kernels[k].references)
    for i in range(1, len(order)):
        j = i
        while j and _is_below(frequencies[order[j]], frequencies[order[j - 1]]):
            order[j - 1], order[j] = order[j], order[j - 1]
            j -= 1
    return order


def _is_below(x: sp.Expr, y: sp.Expr) -> bool:
    values = _samples(y - x)
    return bool(values) and min(values) > 0
