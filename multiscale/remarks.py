"""What a careful analyst would say about a result: orderings that lose something, near resonances, assumptions."""

from __future__ import annotations

import warnings
from collections.abc import Callable, Iterator, Mapping, Sequence
from typing import TYPE_CHECKING, Any

import numpy as np
import sympy as sp

from multiscale.computed import Computation, Finished
from multiscale.errors import SmallDivisorWarning
from multiscale.frame import turns
from multiscale.linear_part import Rate
from multiscale.linear_part.growth import leading_growth
from multiscale.omissions import drift, first_order_of, terms_beyond
from multiscale.problem import Problem

if TYPE_CHECKING:
    from multiscale.expansion import Expansion

__all__ = ["incomplete_cubic", "remarks", "small_divisors", "warn_at"]


def remarks(
    problem: Problem, computation: Computation, tolerance: float, write: Callable[[Finished], sp.Expr]
) -> tuple[str, ...]:
    """The remarks, most important first; `write` gives a real field in real amplitudes."""
    cubic = incomplete_cubic(problem, computation)
    return (
        *([cubic] if cubic else []),
        *small_divisors(problem, computation, tolerance),
        *computation.canonical.left_out,
        *_unbalanced(computation),
        *_explicit_time(problem, computation),
        *_growing(computation),
        *terms_beyond(problem, computation),
        *_lost_parameters(problem, computation),
        *drift(problem, computation, write),
        *_assumptions(computation),
    )


def incomplete_cubic(problem: Problem, computation: Computation) -> str | None:
    """Order 1 with quadratic terms is a common trap: the shift they cause appears at order 2."""
    even = any(
        term.factors and len(term.factors) % 2 == 0 and not _driven(term.coefficient)
        for equation in computation.canonical.force
        for term in equation
    )
    if computation.order > 1 or not even:
        return None
    return (
        "order 1 with even (quadratic) terms: they contribute to the frequency only from the second order on, "
        f"so the effective cubic coefficient is incomplete; use order=2 or more in {problem.small}"
    )


def _driven(coefficient: tuple[tuple[tuple[tuple[str, int], ...], object], ...]) -> bool:
    return all(any(name.startswith("@e") for name, _ in monomial) for monomial, _ in coefficient)


def small_divisors(
    problem: Problem, computation: Computation, tolerance: float, given: Mapping[sp.Symbol, float] | None = None
) -> list[str]:
    """Combinations of frequencies that come close to a natural frequency without meeting it.

    Frequencies are the numbers in the equations, or those that `given` values of parameters make of them.
    """
    bases, drives = computation.canonical.bases, computation.canonical.drives
    values = [value for b in bases.values if (value := computation.base_value(b, given)) is not None]
    if len(values) < len(bases.values):
        return []
    frequencies = [_value(rate, values) / bases.unit for rate in (*bases.rates, *(d.rate for d in drives))]
    found: dict[tuple[int, ...], str] = {}
    for k, rate in _met(computation):
        turning = _value(rate, values) / bases.unit
        own = bases.rates[k]
        if rate in (own, tuple(-r for r in own)):
            continue
        if abs(abs(turning) - frequencies[k]) >= tolerance * frequencies[k]:
            continue
        relation = _relation(computation, k, rate, 1 if turning > 0 else -1)
        if relation not in found:
            found[relation] = _near_resonance(problem, computation, relation, frequencies)
    return [*found.values(), *_left_aside(computation, values, tolerance)]


def _left_aside(computation: Computation, values: Sequence[float], tolerance: float) -> list[str]:
    """Modes that are not carried although a combination of the carried ones comes close to their frequency."""
    operator, unit = computation.canonical.operator, computation.canonical.bases.unit
    if operator is None:
        return []
    rates = {rate for _, rate in computation.hierarchy.met}
    found = []
    for root in operator.roots:
        own = _value(root.rate, values) / unit
        near = [v for rate in rates if abs((v := abs(_value(rate, values) / unit)) - own) < tolerance * own]
        if root.first is None and near:
            closest = min(near, key=lambda v: abs(v - own))
            found.append(
                f"small divisor: a combination of the modes carried and the drives has the frequency {closest:.6g}, "
                f"close to the frequency {own:.6g} of a mode that is not carried, which it excites: add that mode to "
                "`modes`"
            )
    return found


def warn_at(expansion: Expansion, values: Mapping[str, Any]) -> None:
    """SmallDivisorWarning, in the caller of the caller, for what numbers bring that the equations leave open.

    `values` are those of parameters by name; arrays are left out.
    """
    problem, computation, tolerance = expansion.problem, expansion.computation, expansion.tolerance
    given = {s: float(x) for s in problem.parameters if s.name in values and np.ndim(x := values[s.name]) == 0}
    known = small_divisors(problem, computation, tolerance)
    for remark in small_divisors(problem, computation, tolerance, given):
        if remark not in known:
            warnings.warn(remark, SmallDivisorWarning, stacklevel=3)


def _met(computation: Computation) -> list[tuple[int, Rate]]:
    """(mode, rate) for the rates that levels solved for: an oscillator meets those of its own equation, a mode all."""
    if computation.canonical.operator is None:
        return sorted(computation.hierarchy.met)
    rates = sorted({rate for _, rate in computation.hierarchy.met})
    return [(a, rate) for rate in rates for a in range(computation.modes)]


def _value(rate: Rate, values: Sequence[float]) -> float:
    return sum(r * v for r, v in zip(rate, values, strict=True))


def _relation(computation: Computation, k: int, rate: Rate, sign: int) -> tuple[int, ...]:
    """The combination of frequencies that nearly vanishes: a simplest monomial of this rate less ±mode k, oriented."""
    rates = computation.hierarchy.rates
    combination = min((turns(m) for m, r in rates.items() if r == rate), key=lambda n: (sum(map(abs, n)), n))
    relation = tuple(n - sign * (j == k) for j, n in enumerate(combination))
    return max(relation, tuple(-n for n in relation))


def _near_resonance(
    problem: Problem, computation: Computation, relation: Sequence[int], frequencies: Sequence[float]
) -> str:
    """The message, solved for a drive or for the fastest mode that enters once."""
    canonical, modes = computation.canonical, computation.modes
    single = [j for j, n in enumerate(relation) if abs(n) == 1]
    target = max(single or [j for j, n in enumerate(relation) if n], key=lambda j: (j >= modes, frequencies[j]))
    names = [*problem.frequency_names, *(str(d.frequency) for d in canonical.drives)]
    exact = [*canonical.frequencies, *(d.frequency for d in canonical.drives)]
    shares = {j: sp.Rational(-n, relation[target]) for j, n in enumerate(relation) if n and j != target}
    text = " + ".join(f"{c}*{names[j]}" for j, c in shares.items())
    near = sum(float(c) * frequencies[j] for j, c in shares.items())
    value = sp.Add(*(c * exact[j] for j, c in shares.items()))
    if target >= modes:
        key = canonical.drives[target - modes].frequency
    else:
        key = problem.unknowns[target] if canonical.operator is None else sp.Symbol(names[target])
    hint = " (with a symbol for the drive frequency)" if target >= modes and key.is_number else ""
    return (
        f"small divisor: {text} = {near:.6g} is close to {names[target]} = {frequencies[target]:.6g}; "
        f"the expansion holds only for {problem.small} well below {abs(near - frequencies[target]):.3g}. "
        f"To treat it as a resonance add resonances={{{key}: {value} + {problem.small}*sigma}}{hint}"
    )


def _all(computation: Computation) -> Iterator[Finished]:
    c = computation
    yield from (c.flow(n, a) for n in range(1, c.order + 1) for a in range(c.modes))
    yield from (c.field(n, k) for n in range(c.order + 1) for k in range(c.unknowns))


def _unbalanced(computation: Computation) -> list[str]:
    """Drives that no relation ties to the modes within this order."""
    c = computation
    seen = [turns(m) for n in range(1, c.order + 1) for a in range(c.modes) for m in c.change(n, a)]
    found = []
    for k, drive in enumerate(c.canonical.drives):
        if drive.frequency != 0 and not any(row[c.modes + k] for row in seen):
            found.append(
                f"the drive of frequency {drive.frequency} is balanced by no relation up to order {c.order}: it does "
                "not turn the slow flow and enters the forced response only; declare a resonance if it is near one"
            )
    return found


def _explicit_time(problem: Problem, computation: Computation) -> list[str]:
    if computation.autonomous:
        return []
    cause = "slow parameters, or beats between drives"
    return [f"the slow flow depends on {problem.time} explicitly ({cause}): it has no equilibria"]


def _lost_parameters(problem: Problem, computation: Computation) -> list[str]:
    """Parameters that appear in the equations but nowhere in the result."""
    c = computation
    meanings = dict(c.canonical.meanings)
    used: set[sp.Symbol] = set()
    used.update(*(w.free_symbols for w in problem.natural_frequencies))
    used.update(*(x.free_symbols for d in c.canonical.drives for x in (d.angle, d.reduced_frequency)))
    used.update(*(d.formula.free_symbols for d in c.canonical.detunings))
    quotients = [q for f in _all(c) for x in f.values() for q in (x.real, x.imag)]
    polynomials = [p for q in quotients for p in (q.numerator, *(d for d, _ in q.denominator))]
    names = {name for p in polynomials for monomial, _ in p for name, _ in monomial}
    used.update(*(meanings[name].free_symbols for name in names))
    used.update(*(t.force.free_symbols for t in c.canonical.torus))
    lost = [s for s in problem.parameters if s not in used]
    return [f"{s} has no effect up to order {c.order}: {_where(computation, s)}" for s in lost]


def _where(computation: Computation, symbol: sp.Symbol) -> str:
    power = first_order_of(computation, symbol)
    if power is not None and power > computation.order:
        return f"it enters at order {power}"
    return "it enters at a higher order, or cancels"


def _growing(computation: Computation) -> list[str]:
    """Motions of the leading order that are not carried because they decay, or should; growth where it is decided."""
    operator = computation.canonical.operator
    if operator is None or not operator.others:
        return []
    rates = leading_growth(operator, dict(computation.canonical.meanings))
    if operator.given and (rates is None or max(rates) <= 1e-9):
        return [
            f"the other roots of the leading order ({operator.others} at most) were not looked for: their motions are "
            "assumed to decay or to be at rest but for what the modes given force on them, and no combination of "
            "frequencies to meet theirs"
        ]
    if rates is None or max(rates) <= 1e-9:
        assumed = "assumed to decay" if rates is None else "decay"
        return [
            f"{operator.others} of the roots of the leading order lie off the imaginary axis and {assumed}: the "
            "expansion holds for the motion that is left, where the unknowns concerned follow the modes carried. "
            "Damping that is meant to be weak needs a power of the small parameter"
        ]
    return [
        f"the leading order has a motion that grows like exp({max(rates):.6g}*t) beside the modes carried: the "
        "expansion describes the invariant set on which it is absent, and no motion near it stays there"
    ]


def _assumptions(computation: Computation) -> list[str]:
    bases = computation.canonical.bases
    found = [f"{name} is assumed to be rationally independent of the other frequencies" for name in bases.assumed]
    if computation.representation in ("complex", "mpmath"):
        found.append(
            "some natural frequencies have no closed form: coefficients are floating-point numbers, and these "
            "frequencies are assumed to be rationally independent of all others"
        )
    for frequency in computation.canonical.frequencies:
        if not frequency.is_positive:
            found.append(f"the natural frequency {frequency} is assumed to be positive")
    return found
