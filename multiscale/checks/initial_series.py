"""The slow state of given displacement and velocity at t = 0 as a series in ε, for one undriven oscillator.

With w = ½(u − i u'/ω), the state of the linear oscillator, and Z = ½ Σ εⁿ (U_n − i V_n/ω) = z + R + εZ_1 + …, R the
response to a constant force of order ε⁰,

    w = z + R + Σ_{n≥1} εⁿ Z_n(z, z̄),        z = w − R − Σ_{n≥1} εⁿ Z_n(z, z̄)

is solved one power of ε after the other, exactly. At t = 0 the frame has turned through no angle: z = A = ½(p − iq).
"""

from __future__ import annotations

from fractions import Fraction
from typing import Any

import sympy as sp

from multiscale.algebra.quotient import finish
from multiscale.algebra.reciprocals import inverse, missing
from multiscale.algebra.ring import Exponents, Ring
from multiscale.convention import obstacle
from multiscale.errors import EvaluationError, UnsupportedTermError
from multiscale.expansion import Expansion
from multiscale.frame import turns
from multiscale.problem.reading import given_expression

__all__ = ["initial_series"]

HALF = Fraction(1, 2)
FACTOR_LIMIT = 3000
"""Operations beyond which factoring would take longer than the series itself."""
Series = list[Any]


def initial_series(expansion: Expansion, places: list[Any], velocities: list[Any]) -> dict[sp.Symbol, sp.Expr]:
    """{p: series, q: series} through ε^N for u = places[0], u' = velocities[0] at t = 0."""
    if reason := obstacle(expansion.computation):
        raise UnsupportedTermError(
            f"the slow state as a series is given for one undriven oscillator; {reason}. Give `parameters` for "
            "its value"
        )
    place, velocity = (_expression(expansion, x) for x in (places[0], velocities[0]))
    problem, symbols = expansion.problem, expansion.symbols
    p, q = symbols.p[0], symbols.q[0]
    start = {p: place, q: velocity / problem.natural_frequencies[0]}
    ring, series = _inverted(expansion)
    found = {p: sp.Integer(0), q: sp.Integer(0)}
    for n, x in enumerate(series):
        real, imag = [], []
        for m, c in finish(ring, x).items():
            size = sp.Rational(2, 2 ** sum(m)) * (p**2 + q**2) ** min(m)
            cosine, sine = expansion.views.phase_factor(turns(m))
            a, b = (size * expansion.views.writer.quotient(part) for part in (c.real, c.imag))
            real.append(a * cosine - b * sine)
            imag.append(a * sine + b * cosine)
        for symbol, terms in ((p, real), (q, [-x for x in imag])):
            found[symbol] += problem.small**n * _compact(sp.Add(*terms).xreplace(start))
    return found


def _compact(x: sp.Expr) -> sp.Expr:
    """Factored over one denominator; floats and very long coefficients are left as they are."""
    return x if x.atoms(sp.Float) or x.count_ops() > FACTOR_LIMIT else sp.factor(x)


def _expression(expansion: Expansion, x: Any) -> sp.Expr:
    value = given_expression(x)
    if value is None:
        raise EvaluationError(f"condition {x!r}: expected a number or a SymPy expression; arrays need `parameters`")
    if value.has(expansion.problem.time):
        raise EvaluationError(f"condition {value} depends on {expansion.problem.time}: give its value at one instant")
    return value


def _inverted(expansion: Expansion) -> tuple[Ring, Series]:
    """z as a series in ε, the generators of the ring standing for w and its conjugate."""
    tower = expansion.computation.hierarchy.tower
    ring = tower.ring
    turning = tower.time[0].images[expansion.computation.canonical.spec.pairs[0][0]]
    frequency = ring.normal(-(ring.generators[0] * _by_power(ring, turning)[1, 0]))  # D_0 z = iωz
    if needed := missing(ring, [frequency]):
        ring = ring.extended(needed)
    over = inverse(ring, ring.lift(frequency)) * ring.generators[0]
    half = ring.constant(HALF)
    fields = zip(tower.component((0, 0)), tower.component((0, 1)), strict=True)
    states = [ring.normal(half * (ring.lift(u) - over * ring.lift(v))) for u, v in fields]
    parts = [_by_power(ring, x) for x in states]
    own = ring.generators[ring.spec.first_pair]
    z: Series = [ring.normal(own + own - states[0]), *(ring.zero for _ in states[1:])]
    for n in range(1, len(z)):
        z[n] = ring.normal(-_composed(ring, parts, z, n))
    return ring, z


def _by_power(ring: Ring, x: Any) -> dict[tuple[int, int], Any]:
    """{(p, q): coefficient of z^p z̄^q}."""
    first, groups = ring.spec.first_pair, dict[tuple[int, int], dict[Exponents, Fraction]]()
    for m, c in ring.terms(x):
        key = (int(m[first]), int(m[first + 1]))
        groups.setdefault(key, {})[(*m[:first], 0, 0, *m[first + 2 :])] = c
    return {key: ring.from_terms(terms) for key, terms in groups.items()}


def _composed(ring: Ring, parts: list[dict[tuple[int, int], Any]], z: Series, n: int) -> Any:
    """[εⁿ] Σ_{k≥1} ε^k Z_k(z, z̄) for a series z."""
    mirrored = [ring.conjugate(x) for x in z]
    total = ring.zero
    for k in range(1, n + 1):
        for (p, q), c in parts[k].items():
            total = total + c * _power_product(ring, [z] * p + [mirrored] * q, n - k)
    return ring.normal(total)


def _power_product(ring: Ring, factors: list[Series], n: int) -> Any:
    """[εⁿ] of a product of series."""
    product: Series = [ring.one, *(ring.zero for _ in range(n))]
    for factor in factors:
        product = [
            ring.normal(sum((product[j] * factor[i - j] for j in range(i + 1)), ring.zero)) for i in range(n + 1)
        ]
    return product[n]
