"""The periodic orbit of one undriven oscillator alone, as power series in ε to very high order.

    u = Σ_k (c_k(ε) cos kθ + s_k(ε) sin kθ),   dθ/dt = ω = Σ εⁿ ω_n,   c_1 = a = Σ εⁿ a_n,   s_1 = 0

The frequency and the fundamental amplitude a are those of the general expansion on a periodic motion. The recursion
stands in `lindstedt`; this module chooses the field of numbers for it and writes the result.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, replace
from fractions import Fraction
from functools import cached_property
from importlib.util import find_spec
from typing import Any

import sympy as sp

from multiscale.errors import ProblemError, UnsupportedTermError
from multiscale.problem import Problem
from multiscale.response.orbits.lindstedt import periodic_orbit
from multiscale.response.orbits.orbit_numbers import (
    Numbers,
    PrecisionError,
    ball_numbers,
    exact_numbers,
    plain_numbers,
    ring_numbers,
)
from multiscale.response.orbits.orbit_statement import Statement, read_statement
from multiscale.response.orbits.singularities import Singularities, nearest_singularities

__all__ = ["PeriodicSeries", "periodic_series"]

Harmonics = Mapping[int, tuple[sp.Expr, sp.Expr]]


@dataclass(frozen=True, repr=False)
class PeriodicSeries:
    """A periodic orbit as power series in the small parameter; made by `periodic_series`.

    Attributes
    ----------
    small : Symbol
        ε.
    frequency_coefficients : tuple of Expr
        ω_n, index = power of ε.
    amplitude_coefficients : tuple of Expr
        a_n, index = power of ε; a is the amplitude of the fundamental harmonic.
    harmonics : tuple of mappings
        For each power of ε, {k: (coefficient of cos kθ, coefficient of sin kθ)}, as far as `shape` was asked for.
    """

    small: sp.Symbol
    frequency_coefficients: tuple[sp.Expr, ...]
    amplitude_coefficients: tuple[sp.Expr, ...]
    harmonics: tuple[Harmonics, ...]

    def _series(self, coefficients: Sequence[sp.Expr]) -> sp.Expr:
        return sp.Add(*(c * self.small**n for n, c in enumerate(coefficients)))

    @property
    def frequency(self) -> sp.Expr:
        """ω as a series in ε."""
        return self._series(self.frequency_coefficients)

    @property
    def amplitude(self) -> sp.Expr:
        """a as a series in ε."""
        return self._series(self.amplitude_coefficients)

    def displacement(self, angle: sp.Expr) -> sp.Expr:
        """u(θ) as a series in ε, through the powers for which the harmonics are known."""
        levels = [
            sp.Add(*(c * sp.cos(k * angle) + s * sp.sin(k * angle) for k, (c, s) in found.items()))
            for found in self.harmonics
        ]
        return self._series(levels)

    def at(self, values: Mapping[Any, Any]) -> PeriodicSeries:
        """The same series with values put in for symbols (not for ε)."""

        def put(x: sp.Expr) -> sp.Expr:
            return sp.S(x).subs(values)

        levels = tuple({k: (put(c), put(s)) for k, (c, s) in found.items()} for found in self.harmonics)
        return replace(
            self,
            frequency_coefficients=tuple(map(put, self.frequency_coefficients)),
            amplitude_coefficients=tuple(map(put, self.amplitude_coefficients)),
            harmonics=levels,
        )

    @cached_property
    def singularities(self) -> Singularities | None:
        """The singularities of ω nearest to ε = 0, estimated from ratios of coefficients; see `Singularities`.

        None for fewer than eight non-zero coefficients, and where they show no consistent ratio.
        """
        self._check_numeric()
        return nearest_singularities(self.frequency_coefficients)

    @property
    def radius(self) -> float | None:
        """Estimate of the radius of convergence of ω in ε: the distance of `singularities`."""
        found = self.singularities
        return None if found is None else found.radius

    def _check_numeric(self) -> None:
        symbols = set().union(*(c.free_symbols for c in self.frequency_coefficients))
        if symbols:
            names = ", ".join(sorted(map(str, symbols)))
            raise ProblemError(f"the coefficients contain {names}: put in numbers by `at` first")

    def __repr__(self) -> str:
        return f"PeriodicSeries to order {len(self.frequency_coefficients) - 1} in {self.small}"

    def __hash__(self) -> int:
        return hash((self.small, self.frequency_coefficients, self.amplitude_coefficients))


def periodic_series(
    problem: Problem,
    order: int,
    *,
    amplitude: Any = None,
    root: int | None = None,
    digits: int | None = None,
    shape: int | None = None,
    representation: str = "auto",
) -> PeriodicSeries:
    """The periodic orbit of one undriven oscillator alone, exact and to very high order.

    It agrees with `expand` on periodic motions, and costs much less: one orbit, not all motions near it.

    Parameters
    ----------
    problem : Problem
        One oscillator without drives. With damping of both signs (self-excited) the orbit is isolated and its amplitude
        part of the result; where every motion is periodic the amplitude is free.
    order : int ≥ 1
        The highest power of ε of the frequency. An isolated orbit has its amplitude through ε^{order−1}.
    amplitude : number or Symbol, optional
        Free amplitude of the fundamental; a symbol of the library's by default. Refused where motions of that amplitude
        are not periodic.
    root : int, optional
        Which limit cycle, by increasing leading amplitude, where there are several.
    digits : int, optional
        Calculate with numbers of so many correct digits, not with exact ones: faster at the highest orders, and open to
        irrational coefficients.
    shape : int, optional
        The highest power of ε for which all harmonics are given; half the order by default, which costs nothing.
    representation : "auto", "flint" or "sympy"
        "auto" takes FLINT when python-flint is installed.

    Returns
    -------
    PeriodicSeries

    Raises
    ------
    ProblemError
        No limit cycle, several without a choice, a repeated leading root, an amplitude that is not that of a periodic
        motion.
    UnsupportedTermError
        Several unknowns, drives, slow parameters; symbolic parameters where the leading amplitude is no root of a
        rational function of them; irrational coefficients without `digits`.

    Examples
    --------
    >>> import sympy as sp, multiscale as ms
    >>> t = sp.Symbol("t", real=True)
    >>> eps = sp.Symbol("epsilon", positive=True)
    >>> u = sp.Function("u")(t)
    >>> orbit = ms.periodic_series(ms.Problem(u.diff(t, 2) + u + eps*(u**2 - 1)*u.diff(t), u, small=eps), 6)
    >>> orbit.frequency
    35*epsilon**6/884736 + 17*epsilon**4/3072 - epsilon**2/16 + 1
    >>> orbit.amplitude_coefficients
    (2, 0, 1/64, 0, -23/49152, 0)

    With python-flint the series to ε⁸⁰ takes less than a second, and its nearest singularities can be estimated:

    >>> len(ms.periodic_series(ms.Problem(u.diff(t, 2) + u + eps*u**3, u, small=eps), 20).frequency_coefficients)
    21
    """
    if not isinstance(problem, Problem):
        raise ProblemError(f"periodic_series was given a {type(problem).__name__}: state a multiscale.Problem first")
    order = _integer("order", order, 1)
    shape = order // 2 if shape is None else min(_integer("shape", shape, 0), order)
    if representation not in ("auto", "flint", "sympy"):
        raise ProblemError(f"representation is {representation!r}: expected 'auto', 'sympy' or 'flint'")
    flint = representation == "flint" or (representation == "auto" and find_spec("flint") is not None)
    statement = read_statement(problem, order, amplitude, root)
    if digits is None:
        numbers, scaling = _numbers(statement, flint, representation)
        found = _run(statement, numbers, order, shape)
    else:
        numeric, scaling = _with_number(statement)
        found = _in_digits(numeric, order, _integer("digits", digits, 1), shape, flint)
        start = statement.start if scaling is not None else sp.N(statement.start, digits)
        statement = replace(statement, start=start, natural=sp.N(statement.natural, digits))
    return _written(statement, found, scaling)


def _integer(name: str, value: Any, least: int) -> int:
    if isinstance(value, bool) or not isinstance(value, int) or value < least:
        raise ProblemError(f"{name}={value!r}: expected an integer ≥ {least}")
    return value


@dataclass(frozen=True)
class _Found:
    """w, h and the tables of Y, written, and √d."""

    frequency: list[sp.Expr]
    amplitude: list[sp.Expr]
    tables: list[dict[int, tuple[sp.Expr, sp.Expr]]]
    radical: sp.Expr


def _run(statement: Statement, numbers: Numbers, order: int, shape: int) -> _Found:
    depth = statement.depth(order)
    orbit = periodic_orbit(
        numbers.waves, numbers.force, depth, square=numbers.square, damping=statement.damping, shape=shape
    )
    write = numbers.write
    known = min(shape, len(orbit.amplitude) - 1)
    tables = [
        {k: (write(a), write(b)) for k, (a, b) in numbers.waves.table(x).items()} for x in orbit.fields[: known + 1]
    ]
    return _Found(
        [*map(write, orbit.frequency[: order + 1])], [*map(write, orbit.amplitude)], tables, sp.sqrt(numbers.square)
    )


def _scaling(statement: Statement) -> Fraction | None:
    """κ, where the amplitude is a symbol, the parameters are numbers, and the symbol enters as a_0^{κn} alone."""
    free = statement.leading is None and statement.start.free_symbols and not statement.symbols
    return statement.homogeneity if free else None


def _numbers(statement: Statement, flint: bool, representation: str) -> tuple[Numbers, Fraction | None]:
    """Rationals where possible, else a ring; κ if the orbit was scaled to a_0 = 2."""
    scaling = _scaling(statement)
    if scaling is not None:
        found = exact_numbers(replace(statement, start=sp.Integer(2)), flint)
        if found is not None:
            return found, scaling
    if statement.is_numeric and (found := exact_numbers(statement, flint)) is not None:
        return found, None
    return ring_numbers(statement, representation), None


def _with_number(statement: Statement) -> tuple[Statement, Fraction | None]:
    """The statement with numbers only, which digits need; κ if the amplitude was scaled away."""
    if statement.is_numeric:
        return statement, None
    scaling = _scaling(statement)
    if scaling is not None:
        return replace(statement, start=sp.Integer(2)), scaling
    symbols = ", ".join(sorted(map(str, statement.symbols))) or "the amplitude (by `amplitude`)"
    raise UnsupportedTermError(f"`digits` needs numbers: substitute them for {symbols}, or leave out `digits`")


def _in_digits(statement: Statement, order: int, digits: int, shape: int, flint: bool) -> _Found:
    """With so much working precision that every coefficient has `digits` correct digits."""
    bits = int(3.33 * digits) + 40 + 2 * order
    for _ in range(8):
        try:
            if flint:
                with ball_numbers(statement, bits, digits) as numbers:
                    return _run(statement, numbers, order, shape)
            with plain_numbers(statement, bits, digits) as numbers:
                first = _run(statement, numbers, order, shape)
            with plain_numbers(statement, bits + bits // 4, digits) as numbers:
                second = _run(statement, numbers, order, shape)
            if first == second:
                return first
        except PrecisionError:
            pass
        bits *= 2
    raise ProblemError(f"digits={digits}: not reached with {bits // 2} bits; calculate exactly, without `digits`")


def _written(statement: Statement, found: _Found, scaling: Fraction | None) -> PeriodicSeries:
    start = statement.start

    def level(n: int, x: sp.Expr) -> sp.Expr:
        if scaling is None or x == 0:
            return x
        power = scaling * n
        return x * (start / 2) ** sp.Rational(power.numerator, power.denominator)

    in_sines = -start * found.radical
    harmonics = []
    for n, table in enumerate(found.tables):
        pairs = {
            k: ((start if k else start / 2) * level(n, a), in_sines * level(n, b) if b != 0 else b)
            for k, (a, b) in table.items()
        }
        harmonics.append({k: pair for k, pair in pairs.items() if any(x != 0 for x in pair)})
    return PeriodicSeries(
        statement.small,
        tuple(statement.natural * level(n, x) for n, x in enumerate(found.frequency)),
        tuple(start * x for x in found.amplitude),
        tuple(harmonics),
    )
