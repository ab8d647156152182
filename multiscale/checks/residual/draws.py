"""Where a claim is looked at: exact rational parameters, amplitudes and an instant, drawn at random.

Symbols keep their assumptions, natural frequencies and eliminated symbols come out real and positive where they must,
and divisors are not small. Functions the user left undefined, F(εt), become an exponential with random coefficients,
all of whose derivatives differ from zero.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, replace
from random import Random

import sympy as sp
from sympy.core.function import AppliedUndef

from multiscale.checks.residual.claim import Claim
from multiscale.checks.residual.statement import Statement
from multiscale.errors import EvaluationError

__all__ = ["Draw", "draw_values", "with_functions"]

UNIT = 1_000_003
"""A prime denominator, so that no small integer combination of drawn numbers vanishes by chance."""


@dataclass(frozen=True)
class Draw:
    """Values of the parameters (of their scaled forms where they carry orders), of the amplitudes, and of time.

    Amplitudes are of the order of `size`.
    """

    values: Mapping[sp.Symbol, sp.Rational]
    amplitudes: tuple[tuple[sp.Rational, sp.Rational], ...]
    time: sp.Rational
    size: sp.Rational = sp.S.One

    def scaled(self, factor: sp.Rational) -> Draw:
        """The same with other amplitudes: `size` is what they are multiplied by in all."""
        amplitudes = tuple((x * factor, y * factor) for x, y in self.amplitudes)
        return replace(self, amplitudes=amplitudes, size=self.size * factor)


def _between(rng: Random, low: float, high: float) -> sp.Rational:
    return sp.Rational(rng.randrange(int(low * UNIT), int(high * UNIT)), UNIT)


def _value(rng: Random, s: sp.Symbol, negative: float) -> sp.Rational:
    whole = sp.Integer(2 * rng.randrange(1, 4) + bool(s.is_odd))
    size = whole if s.is_integer else _between(rng, 0.5, 2)
    if s.is_nonnegative:
        return size
    return -size if s.is_nonpositive or rng.random() < negative else size


def draw_values(statement: Statement, claim: Claim, rng: Random, negative: float = 0.5) -> Draw:
    """One draw, without regard to what it makes of frequencies and divisors.

    `negative` is the share of negative values of symbols that may have either sign.
    """
    signs = [(rng.choice((-1, 1)), rng.choice((-1, 1))) for _ in claim.amplitudes]
    return Draw(
        {s: _value(rng, s, negative) for s in statement.parameters},
        tuple((x * _between(rng, 0.2, 0.8), y * _between(rng, 0.2, 0.8)) for x, y in signs),
        _between(rng, 0.5, 2),
    )


def with_functions(statement: Statement, claim: Claim, rng: Random) -> tuple[Statement, Claim]:
    """Both with the undefined functions of slow time replaced by functions with a value."""
    own = {u.func for u in statement.unknowns}
    applied = set().union(*(x.atoms(AppliedUndef) for x in statement.equations))
    functions = sorted({f.func for f in applied} - own, key=str)
    if not functions:
        return statement, claim
    instances = {}
    for f in functions:
        start, size, rate = (_between(rng, 0.5, 2) for _ in range(3))
        instances[f] = lambda *x, start=start, size=size, rate=rate: start + size * sp.exp(rate * sp.Add(*x))

    def instance(x: sp.Expr) -> sp.Expr:
        for f, value in instances.items():
            x = x.replace(f, value)
        # Integrals are phases of slowly varying frequencies and stay as they are.
        return x.doit(integrals=False)

    plain = replace(
        statement,
        equations=tuple(map(instance, statement.equations)),
        relations=tuple((s, instance(x)) for s, x in statement.relations),
    )
    if any(set(x.atoms(AppliedUndef)) - set(statement.unknowns) for x in plain.equations):
        raise EvaluationError(f"the functions {functions} could not be given values")
    return plain, claim.changed(instance)
