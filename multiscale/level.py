"""One level of the hierarchy as an analyst would read it."""

from __future__ import annotations

from collections.abc import Callable, Iterable, Sequence
from dataclasses import dataclass, fields
from fractions import Fraction
from functools import cached_property
from typing import Any

import sympy as sp

from multiscale.algebra.polynomial import Frozen
from multiscale.computed import Computation, Finished
from multiscale.expressions import Writer
from multiscale.frame import turns
from multiscale.latex import aligned
from multiscale.problem import Problem
from multiscale.problem.averaged.projection import TorusMean, amplitude_of
from multiscale.symbols import Symbols
from multiscale.torus import Torus

__all__ = ["Level", "PendingLevel", "Views", "polynomials_below"]


@dataclass(frozen=True)
class Level:
    """Level `order` of the hierarchy L_0 U_n = forcing.

    Attributes
    ----------
    operator : dict
        {unknown: L_0 U_n}, applied to U_n as a function of the fast time T_0; the k-th equation stands under the k-th
        unknown.
    forcing : dict
        {unknown: right-hand side}, with the solvability conditions of lower levels inserted and the term in D_nA left
        out.
    secular : dict
        {unknown: the part of the forcing that D_nA balances}, both complex-conjugate halves: for an oscillator all of
        its forcing at the natural frequency, for coupled equations the part along L_0'(iω)φ.
    solvability : dict
        {D_nA: its value}, the condition that removes the secular terms; for a driven mode with what the turning of the
        frame adds, −iΦ_n A.
    corrections : dict
        {unknown: U_n}, for n ≥ 1 without any part at the natural frequency of a mode in the reference of that mode
        (`Expansion.modes`), which for an oscillator is the unknown itself, where A is the amplitude of the fundamental
        (`Expansion.amplitude`). As everywhere, A is taken in the rotating frame (`SlowFlow.frame`).
    divisors : tuple
        The polynomials in parameters that stand in denominators of this level, after reduction.
    """

    order: int
    operator: dict[sp.Expr, sp.Expr]
    forcing: dict[sp.Expr, sp.Expr]
    secular: dict[sp.Expr, sp.Expr]
    solvability: dict[sp.Symbol, sp.Expr]
    corrections: dict[sp.Expr, sp.Expr]
    divisors: tuple[sp.Expr, ...]

    def _repr_latex_(self) -> str:
        rows = [(sp.latex(left), self.forcing[u]) for u, left in self.operator.items()]
        return aligned([*rows, *((sp.latex(d), value) for d, value in self.solvability.items())])


class PendingLevel(Level):
    """A level that is written out as SymPy when it is looked at: `make` does it."""

    def __init__(self, order: int, make: Callable[[], Level]) -> None:
        object.__setattr__(self, "order", order)
        object.__setattr__(self, "_make", make)

    def __getattr__(self, name: str) -> Any:
        if name.startswith("_"):
            raise AttributeError(name)
        self.__dict__.update(self._make().__dict__)
        return self.__dict__[name]

    def __reduce__(self) -> tuple[Any, ...]:
        return Level, tuple(getattr(self, f.name) for f in fields(self))


def _phase(frequency: sp.Expr, time: sp.Symbol) -> sp.Expr:
    """∫ω dt: ωt, or an integral where the frequency varies slowly."""
    if time not in frequency.free_symbols:
        return frequency * time
    tau = sp.Symbol("tau", real=True)
    return sp.Integral(frequency.subs(time, tau), (tau, 0, time))


def polynomials_below(finished: Iterable[Finished]) -> list[Frozen]:
    """The distinct denominators in finished coefficients, in a fixed order; moduli of amplitudes are none."""
    found = {p for f in finished for c in f.values() for q in (c.real, c.imag) for p, _ in q.denominator}
    return sorted(p for p in found if not any(name.startswith("@r") for m, _ in p for name, _ in m))


class Views:
    """SymPy views of a computation's levels."""

    def __init__(self, problem: Problem, computation: Computation, symbols: Symbols) -> None:
        self._problem, self._computation, self._symbols = problem, computation, symbols

    @cached_property
    def writer(self) -> Writer:
        canonical = self._computation.canonical
        return Writer(dict(canonical.meanings), dict(canonical.spec.reciprocals), dict(canonical.numeric))

    def placed(self, x: sp.Expr, form: str) -> sp.Expr:
        """x with the amplitudes that Fourier coefficients of forces depend on written in the variables of a form."""
        if not self._computation.canonical.numeric:
            return x
        symbols = self._symbols
        sizes = {
            "polar": list(symbols.a),
            "cartesian": [sp.sqrt(p**2 + q**2) for p, q in zip(symbols.p, symbols.q, strict=True)],
            "complex": [2 * sp.Abs(A) for A in symbols.A],
        }[form]
        x = x.xreplace({amplitude_of(k): size for k, size in enumerate(sizes)})
        torus = [t for t in self._computation.canonical.torus if x.free_symbols & set(t.symbols)]
        return x.xreplace(self._torus_means(torus, form, sizes)) if torus else x

    def _torus_means(self, torus: Sequence[TorusMean], form: str, sizes: list[sp.Expr]) -> dict[sp.Symbol, sp.Expr]:
        """What stands for averages over several phases; they depend on the resonant phases, so cyclic ones are zero."""
        symbols, frame = self._symbols, self._computation.frame
        deviations = {
            "polar": lambda: frame.deviations(symbols.gamma, [sp.Integer(0)] * len(symbols.beta)),
            "cartesian": lambda: [-sp.atan2(q, p) for p, q in zip(symbols.p, symbols.q, strict=True)],
            "complex": lambda: [sp.arg(A) for A in symbols.A],
        }[form]()
        views = Torus(self._computation, self._problem.phase.name)
        result: dict[sp.Symbol, sp.Expr] = {}
        for t in torus:
            result.update(zip(t.symbols, views.polar(t, sizes, deviations), strict=True))
        return result

    def phase_of(self, row: Sequence[Fraction]) -> sp.Expr:
        """Σ row_f ω_f t + Σ row_l θ_l: a combination of natural phases and angles of drives, in time."""
        canonical = self._computation.canonical
        parts = [sp.Rational(x.numerator, x.denominator) for x in row]
        modes = self._computation.modes
        frequency = sp.Add(*(x * w for x, w in zip(parts[:modes], self._computation.frequencies, strict=True)))
        driven = (x * d.angle for x, d in zip(parts[modes:], canonical.drives, strict=True))
        return sp.Add(_phase(frequency, self._problem.time), *driven)

    def angle(self, combination: tuple[int, ...]) -> sp.Expr:
        """The fast angle of a combination (turns with the modes, turns with the drives), in time."""
        return self.phase_of(self._computation.frame.fast(combination))

    def fast_angle(self, mode: int) -> sp.Expr:
        """Φ of a mode: the angle its frame turns through."""
        return self.phase_of(self._computation.frame.angles[mode])

    def lead(self, mode: int) -> sp.Expr:
        """Natural phase of a mode less its fast angle: what its deviation from the frame has beside β."""
        angles = self._computation.frame.angles[mode]
        return self.phase_of([Fraction(int(k == mode)) - x for k, x in enumerate(angles)])

    def phase_factor(self, own: Sequence[int]) -> tuple[sp.Expr, sp.Expr]:
        """Real and imaginary part of Π (p ∓ iq)^|own|: `own` says how often a monomial turns with each mode."""
        real, imag = sp.Integer(1), sp.Integer(0)
        for p, q, k in zip(self._symbols.p, self._symbols.q, own, strict=False):
            y = -q if k > 0 else q
            for _ in range(abs(k)):
                real, imag = sp.expand(real * p - imag * y), sp.expand(real * y + imag * p)
        return real, imag

    def amplitudes(self, finished: Finished, mode: int) -> sp.Expr:
        """A term of dA_mode/dt in the frame: a polynomial in A and its conjugate, explicit time where it remains."""
        frame = self._computation.frame
        terms = []
        for m, c in finished.items():
            rest = self.angle(frame.relative(m, mode))
            wave = sp.exp(sp.I * rest) if rest != 0 else sp.Integer(1)
            terms.append(self.writer.coefficient(c) * self.monomial(m) * wave)
        return self.placed(sp.Add(*terms), "complex")

    def monomial(self, exponents: tuple[int, ...]) -> sp.Expr:
        """The amplitudes of a monomial, phases apart."""
        factors = [
            A ** exponents[2 * k] * sp.conjugate(A) ** exponents[2 * k + 1] for k, A in enumerate(self._symbols.A)
        ]
        return sp.Mul(*factors)

    def field(self, finished: Finished) -> sp.Expr:
        """A field in A, its conjugate and time, grouped by harmonic."""
        groups: dict[tuple[Fraction, ...], list[sp.Expr]] = {}
        angles: dict[tuple[Fraction, ...], sp.Expr] = {}
        for m, c in finished.items():
            row = self._computation.frame.fast(turns(m))
            angles[row] = self.angle(turns(m))
            groups.setdefault(row, []).append(self.writer.coefficient(c) * self.monomial(m))
        total = sp.Add(*(sp.Add(*terms) * sp.exp(sp.I * angles[row]) for row, terms in sorted(groups.items())))
        return self.placed(total, "complex")

    def _operator(self, k: int, n: int) -> sp.Expr:
        """Row k of L_0 U_n."""
        T0, form = self._symbols.T[0], self._computation.canonical
        fields = [sp.Function(f"{u.func.__name__}_{n}")(T0) for u in self._problem.unknowns]
        if form.operator is None:
            return fields[k].diff(T0, 2) + form.frequencies[k] ** 2 * fields[k]
        rows = form.operator.mass[k], form.operator.damping[k], form.operator.stiffness[k]
        terms = zip((2, 1, 0), rows, strict=True)
        return sp.Add(
            *(
                sp.factor_terms(self.writer.polynomial(x)) * (u.diff(T0, d) if d else u)
                for d, row in terms
                for u, x in zip(fields, row, strict=True)
                if x
            )
        )

    def level(self, n: int) -> Level:
        problem, computation = self._problem, self._computation
        T0 = self._symbols.T[0]
        operator, forcing, secular, corrections = {}, {}, {}, {}
        below: list[Finished] = []
        for k, u in enumerate(problem.unknowns):
            operator[u] = self._operator(k, n)
            corrections[u] = self.field(computation.field(n, k)).subs(problem.time, T0)
            total, resonant = computation.forcing(n, k)
            forcing[u], secular[u] = (self.field(x).subs(problem.time, T0) for x in (total, resonant))
            below.append(computation.field(n, k))
        solvability = {}
        for a, A in enumerate(self._symbols.A if n else ()):
            change = computation.flow(n, a)
            below.append(change)
            solvability[sp.Symbol(f"D_{n}{A.name}", complex=True)] = self.amplitudes(change, a).subs(problem.time, T0)
        divisors = tuple(self.writer.polynomial(p) for p in polynomials_below(below))
        return Level(n, operator, forcing, secular, solvability, corrections, divisors)
