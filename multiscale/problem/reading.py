"""From SymPy expressions to polynomials by name: every leaf of an expression becomes a generator, or an error names it.

    symbols, constants such as pi, functions of parameters       opaque generators, meaning = the expression itself
    sqrt(n)                                                      product of sqrt(prime), with the relation g**2 = prime
    sin(x) beside cos(x), cosh(x) beside sinh(x)                 with sin**2 = 1 - cos**2, cosh**2 = 1 + sinh**2
    floats                                                       opaque generators, put back on output
    1/p, p free of unknowns and of the small parameter           reciprocal generators of the irreducible factors of p

Nothing is rounded and nothing dropped: anything else raises `UnsupportedTermError` with the term and the remedy.
"""

from __future__ import annotations

from collections.abc import Iterable, Mapping, Sequence
from dataclasses import replace
from fractions import Fraction
from math import isqrt, prod
from numbers import Rational, Real
from typing import Any

import sympy as sp

from multiscale.algebra.polynomial import Frozen, freeze
from multiscale.algebra.quotient import Quotient, reduced
from multiscale.algebra.reciprocals import inverse, missing
from multiscale.algebra.ring import IMAGINARY, RingSpec
from multiscale.algebra.sympy_ring import SympyRing
from multiscale.errors import ProblemError, UnsupportedTermError

__all__ = ["IMAGINARY_UNIT", "Reader", "decimals", "given_expression", "unsupported"]

IMAGINARY_UNIT = sp.Symbol(IMAGINARY)
"""Stands for i inside expressions that are known to be real as a whole, such as phasor forms of drives."""


def unsupported(term: object, reason: str, remedy: str) -> UnsupportedTermError:
    """The one form of an error about a term."""
    return UnsupportedTermError(f"term {term}: {reason}. {remedy}")


def given_expression(x: Any) -> sp.Expr | None:
    """A value that a user gave, a SymPy expression or a number; None for anything else, since text is never read."""
    if isinstance(x, sp.Expr):
        return x
    if isinstance(x, bool) or not isinstance(x, Real):
        return None
    if isinstance(x, Rational):
        return sp.Rational(int(x.numerator), int(x.denominator))
    return sp.Float(x)


def decimals(x: sp.Expr) -> sp.Expr:
    """x with every float as the decimal it prints as: where resonance is decided, numbers are exact."""
    exact = {f: sp.Rational(repr(float(f)) if f._prec <= 53 else str(f)) for f in x.atoms(sp.Float)}
    return x.xreplace(exact) if exact else x


def _prime_roots(n: int) -> tuple[int, list[int]]:
    """(m, primes) with sqrt(n) = m·Π sqrt(prime); a factor beyond easy reach counts as a prime."""
    primes = sorted(int(p) for p, e in sp.factorint(n, limit=10**5).items() if e % 2)
    return isqrt(n // prod(primes)), primes


def _base_and_power(x: sp.Expr) -> tuple[sp.Expr, int]:
    """(leaf, power) with an integer power: k**(3/2) = sqrt(k)**3, so that all powers of a root share one leaf."""
    if isinstance(x, sp.Pow) and x.exp.is_Rational:
        return x.base ** sp.Rational(1, x.exp.q), int(x.exp.p)
    return x, 1


def _is_root(x: sp.Expr) -> bool:
    return isinstance(x, sp.Pow) and x.exp == sp.Rational(1, 2) and bool(x.base.is_Integer) and bool(x.base.is_positive)


class Reader:
    """Reads expressions over one fixed set of leaves.

    Parameters: `dynamic`, the symbols of jets and of the small parameter, which may appear polynomially only; `shown`,
    how each of them is spelled in messages; `expressions`, everything that is going to be read; `relations`, symbols
    with their squares (polynomials), a symbol before those in its square.
    """

    def __init__(
        self,
        expressions: Iterable[sp.Expr],
        dynamic: Iterable[sp.Symbol],
        shown: Mapping[sp.Symbol, sp.Expr],
        relations: Sequence[tuple[sp.Symbol, sp.Expr]] = (),
    ) -> None:
        self.dynamic = tuple(dynamic)
        self._shown = dict(shown)
        self.meanings: dict[str, sp.Expr] = {}
        self.numbers: dict[sp.Symbol, sp.Expr] = {}
        """Values of symbols that stand for numbers without a closed form, where there are any."""
        roots: dict[str, int] = {}
        denominators: list[sp.Expr] = []
        for expression in (*expressions, *(x for relation in relations for x in relation)):
            self._collect(expression, roots, denominators)
        pairs = self._pythagorean()
        taken = {*roots, *pairs, *(s.name for s, _ in relations)}
        names = tuple(name for name in sorted(self.meanings) if name not in taken)
        root_relations = tuple(
            (name, freeze({(): Fraction(roots[name])})) for name in sorted(roots, key=lambda g: roots[g])
        ) + tuple(sorted(pairs.items()))
        reals = (*(s.name for s in self.dynamic), *names)
        self.ring = SympyRing(RingSpec(pairs=(), reals=reals, roots=root_relations))
        for symbol, square in reversed(relations):
            value = freeze(self.ring.write(self.ring.normal(self.read(square))))
            self.ring = SympyRing(replace(self.ring.spec, roots=((symbol.name, value), *self.ring.spec.roots)))
        for base in denominators:
            # Innermost first: `_collect` appends a denominator after those inside it.
            value = self.read(base)
            if not value:
                raise ProblemError(f"the denominator {base} is identically zero: write a non-zero one")
            more = missing(self.ring, [value])
            if more:
                self.ring = self.ring.extended(more)

    def show(self, expression: sp.Expr) -> sp.Expr:
        """The expression as the user wrote it, derivatives and all."""
        return expression.xreplace(self._shown)

    def _pythagorean(self) -> dict[str, Frozen]:
        """{name of sin(x): 1 - cos(x)**2, name of cosh(x): 1 + sinh(x)**2} where both of a pair are leaves."""
        found = {}
        for name, leaf in self.meanings.items():
            for function, partner, sign in ((sp.sin, sp.cos, -1), (sp.cosh, sp.sinh, 1)):
                other = str(partner(leaf.args[0])) if isinstance(leaf, function) else ""
                if other in self.meanings:
                    found[name] = freeze({(): Fraction(1), ((other, 2),): Fraction(sign)})
        return found

    def _name(self, leaf: sp.Expr) -> str:
        name = repr(float(leaf)) if isinstance(leaf, sp.Float) and leaf._prec <= 53 else str(leaf)
        known = self.meanings.setdefault(name, leaf)
        if known != leaf:
            raise ProblemError(
                f"two different symbols are both called {name!r}: rename one, or give both the same assumptions"
            )
        return name

    def _collect(self, x: sp.Expr, roots: dict[str, int], denominators: list[sp.Expr]) -> None:
        base, power = _base_and_power(x)
        if base in self.dynamic or base == IMAGINARY_UNIT or isinstance(base, sp.Rational):
            pass
        elif isinstance(base, sp.Add | sp.Mul):
            for arg in base.args:
                self._collect(arg, roots, denominators)
        elif _is_root(base):
            for p in _prime_roots(int(base.base))[1]:
                roots[f"sqrt({p})"] = p
                self.meanings[f"sqrt({p})"] = sp.sqrt(p)
        else:
            self._check_leaf(base)
            self._name(base)
        if power < 0:
            self._check_denominator(x)
            if base not in denominators:
                denominators.append(base)

    def _check_denominator(self, x: sp.Expr) -> None:
        if not isinstance(x.base, sp.Symbol):
            self._check_drive(x)
        if found := x.free_symbols & set(self.dynamic):
            which = self.show(min(found, key=str))
            raise unsupported(
                self.show(x),
                f"{which} stands in a denominator",
                "Multiply the equation by the denominator, or expand the quotient in powers of it",
            )

    def _check_leaf(self, x: sp.Expr) -> None:
        shown = self.show(x)
        if x.has(sp.nan, sp.oo, -sp.oo, sp.zoo):
            raise ProblemError(f"the equations contain {shown}: every coefficient must be finite")
        if not isinstance(x, sp.Symbol):
            self._check_drive(x)
        if x.has(sp.I):
            raise ProblemError(
                f"the equations contain the imaginary unit in {shown}: state real equations for real unknowns"
            )
        if isinstance(x, sp.Derivative):
            raise unsupported(
                shown,
                "only first and second time derivatives of the unknowns are accepted",
                "Rewrite the equation as a system of second order",
            )
        if found := x.free_symbols & set(self.dynamic):
            which = self.show(min(found, key=str))
            raise unsupported(
                shown,
                f"it is not a polynomial in {which}",
                f"Replace it by the terms of its expansion in powers of {which} that matter at the order wanted",
            )

    def _check_drive(self, x: sp.Expr) -> None:
        if any(s.name.startswith(("@e", "@h", IMAGINARY)) for s in x.free_symbols):
            raise unsupported(
                self.show(x), "a drive stands inside it, and it is no polynomial of that drive", "Write its Fourier sum"
            )

    def read(self, x: sp.Expr) -> Any:
        """The ring element of an expression whose leaves were all collected."""
        ring = self.ring
        base, power = _base_and_power(x)
        if isinstance(base, sp.Rational):
            value = ring.constant(Fraction(int(base.p), int(base.q)))
        elif base == IMAGINARY_UNIT:
            value = ring.generators[0]
        elif base in self.dynamic:
            value = ring.generators[ring.spec.index[base.name]]
        elif isinstance(base, sp.Add):
            value = ring.zero
            for arg in base.args:
                value = value + self.read(arg)
        elif isinstance(base, sp.Mul):
            value = ring.one
            for arg in base.args:
                value = ring.normal(value * self.read(arg))
        elif _is_root(base):
            square, primes = _prime_roots(int(base.base))
            value = ring.constant(square)
            for p in primes:
                value = value * ring.generators[ring.spec.index[f"sqrt({p})"]]
        else:
            value = ring.generators[ring.spec.index[self._name(base)]]
        return self._power(value, power) if power > 0 else self._power(inverse(ring, value), -power)

    def _power(self, x: Any, power: int) -> Any:
        result = self.ring.one
        for _ in range(power):
            result = self.ring.normal(result * x)
        return result

    def reduced(self, x: Any) -> dict[tuple[tuple[str, int], ...], Fraction]:
        """A coefficient in reduced form, written by name with reciprocal generators."""
        quotient = reduced(self.ring, self.ring.normal(x))
        return self.ring.write(self.ring.normal(self.ring.read(self.named(quotient))))

    def named(self, quotient: Quotient) -> dict[tuple[tuple[str, int], ...], Fraction]:
        """A finished coefficient as a polynomial by name, reciprocals as generators."""
        names = self.ring.spec.reciprocal_of
        below = tuple((names[p], e) for p, e in quotient.denominator)
        return {tuple(sorted((*m, *below))): c for m, c in quotient.numerator}

    def expression(self, polynomial: Iterable[tuple[tuple[tuple[str, int], ...], Fraction]]) -> sp.Expr:
        """A polynomial by name as SymPy expression in the user's symbols."""
        terms = [
            sp.Mul(sp.Rational(c.numerator, c.denominator), *(self._meaning(g) ** e for g, e in m))
            for m, c in polynomial
        ]
        return sp.Add(*terms)

    def _meaning(self, generator: str) -> sp.Expr:
        if generator in self.meanings:
            return self.meanings[generator]
        for s in self.dynamic:
            if s.name == generator:
                return s
        return 1 / self.expression(next(p for h, p in self.ring.spec.reciprocals if h == generator))
