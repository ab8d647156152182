"""A linear oscillator with periodic coefficients, as exact Fourier coefficients.

    M(t) u'' + C(t) u' + K(t) u = 0,      X(t) = Σ ε^a p^b X_{a,b,k} exp(ikΩt),      X = K, C, M

ε is the small parameter, p the parameter to solve for, Ω the highest frequency of which every drive is a multiple. The
equation is the linearisation of the user's about rest. Invariants: at ε⁰ nothing oscillates, nothing is damped, and
p enters affinely; X_{a,b,−k} is the conjugate of X_{a,b,k}.
"""

from __future__ import annotations

from collections.abc import Iterable, Mapping, Sequence
from dataclasses import dataclass, replace
from fractions import Fraction
from math import gcd, lcm
from typing import Any, Protocol

import sympy as sp

from multiscale.algebra.choice import make_ring
from multiscale.algebra.ring import IMAGINARY, Ring, RingSpec
from multiscale.errors import ProblemError, UnsupportedTermError
from multiscale.expressions import Writer
from multiscale.problem.reading import Reader, unsupported

__all__ = ["Hill", "Parametric", "read_hill"]

Term = tuple[int, int, int]
"""(power of ε, power of p, harmonic of Ω)."""

TURN, BACK, UNIT = (sp.Symbol(name) for name in ("@turn", "@back", "@unit"))
ONE = (((), Fraction(1)),)


class Parametric(Protocol):
    """What is asked of a problem: its equations (= 0), unknowns, small parameter and time."""

    @property
    def equations(self) -> Sequence[sp.Expr]: ...
    @property
    def unknowns(self) -> Sequence[sp.Expr]: ...
    @property
    def small(self) -> sp.Symbol: ...
    @property
    def time(self) -> sp.Symbol: ...


@dataclass(frozen=True)
class Hill:
    """The equation: {(a, b, k): (K, C, M)}, Ω as ring element, and how generators are spelled."""

    ring: Ring
    terms: Mapping[Term, tuple[Any, ...]]
    frequency: Any
    writer: Writer
    small: sp.Symbol
    parameter: sp.Symbol


def read_hill(problem: Parametric, parameter: sp.Symbol, representation: str = "auto") -> Hill:
    """The linearisation of `problem` about rest; raises for what is not a Hill equation, naming the term."""
    small, time = problem.small, problem.time
    if getattr(problem, "resonances", ()):
        raise ProblemError(
            "the problem declares resonances: state it without them, the tongue fixes the relation itself"
        )
    jets = tuple(sp.Dummy(f"u{k}", real=True) for k in range(3))
    equation = _single(problem, parameter, jets)
    coefficients = _linearised(equation, jets, problem.unknowns[0])
    waves = _waves(coefficients, time, (small, parameter))
    if not any(time in x.free_symbols for x in coefficients[:3]):
        raise ProblemError(
            f"no coefficient of {problem.unknowns[0]} oscillates: a parametric drive such as {small}*cos(2*{time})*"
            f"{problem.unknowns[0]} is needed for a tongue of instability"
        )
    base = _base_frequency(waves)
    phasors = _phasors(waves, base)
    shown = {TURN: sp.exp(sp.I * base * time), BACK: sp.exp(-sp.I * base * time), UNIT: sp.I}
    hidden = [x.xreplace(phasors) for x in coefficients]
    for x in hidden:
        for term in sp.Add.make_args(x):
            if time in term.free_symbols:
                raise unsupported(
                    term.subs(shown),
                    "its dependence on time is not a polynomial in cosines and sines",
                    "Write it as a Fourier sum of cos and sin",
                )
    reader = Reader([*hidden, base], (small, parameter, TURN, BACK, UNIT), shown)
    ring = make_ring(_spec(reader), representation)
    hill = _assembled(reader, ring, hidden, base, small, parameter, problem.unknowns[0])
    _check_leading(hill, problem.unknowns[0])
    return hill


def _single(problem: Parametric, parameter: sp.Symbol, jets: Sequence[sp.Symbol]) -> sp.Expr:
    """The one equation with a symbol for the unknown and each derivative, statement checked."""
    if len(problem.unknowns) != 1 or len(problem.equations) != 1:
        raise UnsupportedTermError(
            f"the problem has {len(problem.unknowns)} unknowns: transition curves are given for one oscillator. "
            "Pass one equation, in the modal coordinate of interest"
        )
    (equation,), (u,), small, time = problem.equations, problem.unknowns, problem.small, problem.time
    if small not in equation.free_symbols:
        raise ProblemError(
            f"the small parameter {small} does not stand in the equation: write its powers there and pass small={small}"
        )
    if not isinstance(parameter, sp.Symbol) or parameter in (small, time):
        raise ProblemError(f"parameter={parameter!r}: expected the symbol of a coefficient of the equation")
    if parameter not in equation.free_symbols:
        raise ProblemError(
            f"the parameter {parameter} does not appear in the equation {equation} = 0: name one of its own"
        )
    hidden = equation.xreplace({u.diff(time, 2): jets[2], u.diff(time): jets[1]}).xreplace({u: jets[0]})
    if rest := hidden.atoms(sp.Derivative):
        raise unsupported(
            min(rest, key=str).subs(jets[0], u),
            "only first and second time derivatives of the unknown are accepted",
            "Rewrite the equation with these alone",
        )
    return hidden


def _linearised(equation: sp.Expr, jets: Sequence[sp.Symbol], u: sp.Expr) -> list[sp.Expr]:
    """Coefficients K, C, M and what remains at rest."""
    rest = dict.fromkeys(jets, sp.Integer(0))
    result = [*(sp.diff(equation, jet).subs(rest) for jet in jets), equation.subs(rest)]
    for x in result:
        if x.has(sp.nan, sp.oo, -sp.oo, sp.zoo, sp.Derivative, sp.Subs, sp.DiracDelta):
            raise UnsupportedTermError(
                f"the equation of {u} has no linearisation about rest: its derivative there is {x}. "
                "Replace the term by one that is differentiable at rest"
            )
    return result


@dataclass(frozen=True)
class _Wave:
    rate: sp.Expr
    phase: sp.Expr


def _waves(coefficients: Iterable[sp.Expr], time: sp.Symbol, forbidden: tuple[sp.Symbol, ...]) -> dict[sp.Expr, _Wave]:
    """Rate and phase of every cos and sin of time."""
    waves = {}
    for x in sorted(set().union(*(c.atoms(sp.cos, sp.sin) for c in coefficients)), key=str):
        # Decimals in an angle are taken as printed, so that common periods are decided exactly.
        angle = sp.expand(x.args[0].xreplace({f: sp.Rational(str(f)) for f in x.args[0].atoms(sp.Float)}))
        if time not in angle.free_symbols:
            continue
        rate = sp.diff(angle, time)
        if time in rate.free_symbols:
            raise unsupported(x, f"its angle is not linear in {time}", "State a drive of constant frequency")
        for s in forbidden:
            if s in angle.free_symbols:
                raise unsupported(
                    x,
                    f"its angle depends on {s}",
                    "Measure time in units of the drive, tau = Omega*t, so that the frequency becomes a coefficient",
                )
        waves[x] = _Wave(rate, sp.expand(angle - rate * time))
    return waves


def _base_frequency(waves: Mapping[sp.Expr, _Wave]) -> sp.Expr:
    """The highest frequency of which every rate is an integer multiple."""
    first = next(iter(waves.values())).rate
    ratios = []
    for x, wave in waves.items():
        ratio = sp.radsimp(sp.cancel(wave.rate / first))
        if not ratio.is_Rational:
            raise unsupported(
                x,
                f"its frequency {wave.rate} is not a rational multiple of the frequency {first} of another drive",
                "Keep drives that have a common period, with frequencies written exactly",
            )
        ratios.append(ratio)
    below = lcm(*(int(r.q) for r in ratios))
    base = sp.Rational(gcd(*(int(r * below) for r in ratios)), below) * first
    return -base if base.could_extract_minus_sign() else base


def _phasors(waves: Mapping[sp.Expr, _Wave], base: sp.Expr) -> dict[sp.Expr, sp.Expr]:
    """cos(kΩt + φ) = cos φ (z + z̄)/2 − sin φ (z − z̄)/2i and the like, cos φ and sin φ in as few symbols as possible."""
    parts = {x: {s: c for s, c in w.phase.as_coefficients_dict().items() if s.free_symbols} for x, w in waves.items()}
    below: dict[sp.Expr, int] = {}
    for part in parts.values():
        for s, c in part.items():
            below[s] = lcm(below.get(s, 1), int(sp.Rational(c).q) if c.is_Rational else 1)
    names = {s: sp.Dummy(real=True) for s in below}
    meaning = {names[s]: s / below[s] for s in below}
    result = {}
    for x, wave in waves.items():
        k = int(sp.radsimp(sp.cancel(wave.rate / base)))
        numeric = wave.phase - sp.Add(*(c * s for s, c in parts[x].items()))
        phase = numeric + sp.Add(*(c * below[s] * names[s] for s, c in parts[x].items()))
        c, s = (sp.expand_trig(f(phase)).xreplace(meaning) for f in (sp.cos, sp.sin))
        forward, backward = (TURN, BACK) if k > 0 else (BACK, TURN)
        even, odd = (forward ** abs(k) + backward ** abs(k)) / 2, -UNIT * (forward ** abs(k) - backward ** abs(k)) / 2
        result[x] = c * even - s * odd if isinstance(x, sp.cos) else s * even + c * odd
    return result


def _assembled(
    reader: Reader,
    ring: Ring,
    hidden: Sequence[sp.Expr],
    base: sp.Expr,
    small: sp.Symbol,
    parameter: sp.Symbol,
    u: sp.Expr,
) -> Hill:
    names = [s.name for s in reader.dynamic]
    tables = []
    for x in hidden:
        table: dict[Term, dict[Any, Fraction]] = {}
        for monomial, c in reader.ring.write(reader.read(x)).items():
            powers = dict(monomial)
            a, b, forward, backward, unit = (powers.pop(name, 0) for name in names)
            rest = tuple(sorted({**powers, **({IMAGINARY: unit} if unit else {})}.items()))
            part = table.setdefault((a, b, forward - backward), {})
            part[rest] = part.get(rest, Fraction(0)) + c
        read = {key: ring.normal(ring.read({m: c for m, c in part.items() if c})) for key, part in table.items()}
        tables.append({key: x for key, x in read.items() if x})
    if tables[3]:
        raise unsupported(
            reader.show(hidden[3]),
            f"it does not vanish at {u} = 0, so that rest is no motion",
            f"Leave external forces out, or measure {u} from its equilibrium",
        )
    keys = sorted(set().union(*tables[:3]))
    # Products such as cos(t)**2 may have left higher harmonics alone.
    step = gcd(*(k for _, _, k in keys)) or 1
    terms = {(a, b, k // step): tuple(table.get((a, b, k), ring.zero) for table in tables[:3]) for a, b, k in keys}
    frequency = ring.read(reader.ring.write(reader.read(base))) * ring.constant(step)
    return Hill(ring, terms, frequency, Writer(reader.meanings), small, parameter)


def _spec(reader: Reader) -> RingSpec:
    """The generators without ε, p and phasors."""
    spec = reader.ring.spec
    dynamic = {s.name for s in reader.dynamic}
    return replace(spec, reals=tuple(s for s in spec.reals if s not in dynamic))


def _check_leading(hill: Hill, u: sp.Expr) -> None:
    """At ε⁰ the equation must be an undamped oscillator with constant coefficients, affine in the parameter."""
    p = hill.parameter
    shown = (str(u), f"d{u}/dt", f"d²{u}/dt²")
    if not any(k for _, _, k in hill.terms):
        raise ProblemError(
            "the drives of the equation cancel: a parametric drive is needed for a tongue of instability"
        )
    for (a, b, k), parts in hill.terms.items():
        if a:
            continue
        name = next(s for s, x in zip(shown, parts, strict=True) if x)
        remedy = f"Give it a factor {hill.small}"
        if k:
            raise unsupported(f"in {name}", f"its coefficient oscillates without a factor {hill.small}", remedy)
        if parts[1]:
            raise unsupported(f"in {shown[1]}", f"damping stands at leading order, without {hill.small}", remedy)
        if b > 1:
            raise unsupported(
                f"{p}**{b} in {name}",
                f"{p} does not enter the leading order affinely",
                f"Take {p}**{b} as the parameter",
            )
    if (0, 1, 0) not in hill.terms:
        raise ProblemError(
            f"the parameter {p} appears only with a factor {hill.small}: it must stand in the leading stiffness or "
            f"mass, where the tongues begin. Take a parameter of the {hill.small}**0 terms"
        )
