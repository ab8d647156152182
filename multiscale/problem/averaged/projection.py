"""Forces that are not polynomial, as Fourier coefficients that the algebra treats as real generators.

Along the leading motion u = a cos θ of one oscillator, with z = ½ a e^{iθ},

    g(u, u', u'') = Σ_m z^m F_m + conjugate,      F_m = C_m (2/a)^m,      C_m the mean of g e^{−imθ} over θ

`Harmonic` names the real and the imaginary part of F_m; their meanings are closed forms in the amplitude (a placeholder
symbol) where `closed_form` has one, and integrals over θ otherwise. What generated code evaluates is spelled apart, so
that it is regular at a = 0: for a force without jumps, by parts,

    F_1 = 2i · mean of (g_u sin θ + ω g_v cos θ) e^{−iθ}
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import sympy as sp

from multiscale.problem.averaged.closed_forms import AMPLITUDE, FREQUENCY, Closed, U, V, closed_form
from multiscale.problem.averaged.guarded import Clipped, Inverse, Reciprocal, Root, guarded
from multiscale.problem.averaged.steps import expanded, with_steps

__all__ = ["Harmonic", "TorusMean", "amplitude_of", "complex_parts", "harmonic", "numeric_harmonic"]

NONSMOOTH = (sp.Abs, sp.sign, sp.Max, sp.Min, sp.Heaviside, sp.Piecewise, sp.core.function.AppliedUndef)


@dataclass(frozen=True)
class Harmonic:
    """z_mode^number (real + i imag) Π factors of a law, the parts by the names of their generators, "" for zero.

    `slope` says which function this is of: None for the force, 0 and 1 for its derivative by u and u'.
    """

    law: int
    mode: int
    number: int
    real: str
    imag: str
    factors: tuple[str, ...] = ()
    slope: int | None = None


@dataclass(frozen=True)
class TorusMean:
    """z_mode (real + i imag): the part of a law at the rate of a mode, for a force of several phases.

    `jets` are the symbols in `force`, `generators` the modes and drives (numbered on from the modes) of its leading
    motion, `combinations` their combinations of rate zero.
    """

    law: int
    mode: int
    real: str
    imag: str
    force: sp.Expr
    jets: tuple[tuple[sp.Symbol, tuple[int, int]], ...]
    generators: tuple[int, ...]
    combinations: tuple[tuple[int, ...], ...]

    @property
    def symbols(self) -> tuple[sp.Symbol, sp.Symbol]:
        """What stands for the two parts in expressions."""
        return sp.Symbol(self.real, real=True), sp.Symbol(self.imag, real=True)


def amplitude_of(mode: int) -> sp.Symbol:
    """The placeholder of a mode's amplitude in the meaning of a Fourier coefficient."""
    return sp.Symbol(f"@a{mode}", positive=True)


def _arc(j: int, c: sp.Expr, angle: sp.Expr, root: sp.Expr) -> sp.Expr:
    """(1/2π) ∫ e^{ijθ} dθ over |θ| < arccos c: arccos(c)/π or sin(jθ_c)/(jπ)."""
    if j == 0:
        return angle / sp.pi
    x = sp.Symbol("@c")
    return root * sp.chebyshevu(j - 1, x).subs(x, c) / (j * sp.pi)


def complex_parts(x: sp.Expr) -> tuple[sp.Expr, sp.Expr]:
    """Real and imaginary part of an expression in which i stands explicitly."""
    dummy = sp.Symbol("@j")
    real: list[sp.Expr] = []
    imag: list[sp.Expr] = []
    for term in sp.Add.make_args(expanded(x.xreplace({sp.I: dummy}))):
        power = int(term.as_powers_dict()[dummy])
        (imag if power % 2 else real).append(term / dummy**power * (-1) ** (power // 2))
    return sp.Add(*real), sp.Add(*imag)


def _shown_step(c: sp.Expr, arc: Sequence[tuple[int, sp.Expr]]) -> tuple[sp.Expr, sp.Expr]:
    """(inside the range where the motion crosses the threshold, where it is beyond it all the time)."""
    root = sp.sqrt(1 - c**2)
    angle = sp.pi - sp.acos(-c) if c.could_extract_minus_sign() else sp.acos(c)
    inside = sp.expand(sp.Add(*(q * _arc(j, c, angle, root) for j, q in arc)))
    full = next((q for j, q in arc if j == 0), sp.Integer(0))
    return inside, full


def _shown(form: Closed, scale: sp.Expr) -> sp.Expr:
    """C_m times `scale` as a plain formula, piecewise in the amplitude where there are thresholds."""
    grouped: dict[sp.Expr, list[tuple[sp.Expr, sp.Expr, sp.Expr]]] = {}
    for c, arc in form.steps:
        gap = sp.expand(c * AMPLITUDE)
        grouped.setdefault(sp.Abs(gap), []).append((gap, *_shown_step(c, arc)))
    # With one threshold the smooth part goes into the cases, where it often cancels.
    inner, outer = (form.smooth, sp.Integer(0)) if len(grouped) == 1 else (sp.Integer(0), form.smooth)
    total = scale * outer
    for size, parts in grouped.items():
        inside = inner + sp.Add(*(x for _, x, _ in parts))
        beyond = inner + sp.Add(*(sp.Piecewise((full, gap < 0), (0, True)) for gap, _, full in parts))
        total += sp.Piecewise((_spread(scale * inside), size < AMPLITUDE), (_spread(scale * beyond), True))
    return total


def _spread(x: sp.Expr) -> sp.Expr:
    return sp.expand(x, deep=False, power_base=False, power_exp=False, log=False)


def _guarded_steps(form: Closed, m: int) -> sp.Expr:
    """The threshold part of F_m = C_m (2/a)^m, with arguments cut off instead of cases."""
    total = sp.Integer(0)
    for c, arc in form.steps:
        cut = Clipped(sp.expand(c * AMPLITUDE) * Reciprocal(AMPLITUDE))
        angle, root = sp.acos(cut), Root(1 - cut**2)
        total += sp.Add(*(guarded(q * (2 / AMPLITUDE) ** m, AMPLITUDE) * _arc(j, cut, angle, root) for j, q in arc))
    return total


def _averaged(g: sp.Expr, m: int, theta: sp.Symbol) -> tuple[sp.Expr, sp.Expr]:
    """C_m as integrals over θ, real and imaginary part; parts that vanish by symmetry are zero."""
    along = g.xreplace({U: AMPLITUDE * sp.cos(theta), V: -AMPLITUDE * FREQUENCY * sp.sin(theta)})
    # A function of u alone is even in θ; of u' alone, even about θ = π/2.
    cosine = sp.cos(m * theta) if V in g.free_symbols or m == 0 or U in g.free_symbols else sp.Integer(0)
    sine = sp.sin(m * theta) if V in g.free_symbols else sp.Integer(0)
    if U not in g.free_symbols:
        cosine, sine = (cosine, sp.Integer(0)) if m % 2 == 0 else (sp.Integer(0), sine)
    return tuple(
        sp.Integer(0) if wave == 0 else sign * sp.Integral(along * wave, (theta, 0, 2 * sp.pi)) / (2 * sp.pi)
        for wave, sign in ((cosine, 1), (sine, -1))
    )


def _part(form: Closed, smooth: sp.Expr, k: int) -> Closed:
    """The real (0) or imaginary (1) part of a closed form, that of its smooth part being given."""
    steps = []
    for c, arc in form.steps:
        steps.append((c, tuple((j, y) for j, q in arc if (y := complex_parts(q)[k]) != 0)))
    return Closed(smooth, tuple(steps))


def _parted(g: sp.Expr, m: int) -> tuple[sp.Expr, sp.Expr]:
    """(the terms whose C_m has a closed form, the others)."""
    closed: list[sp.Expr] = []
    others: list[sp.Expr] = []
    for term in sp.Add.make_args(g):
        (others if closed_form(term, m) is None else closed).append(term)
    return sp.Add(*closed), sp.Add(*others)


def harmonic(g: sp.Expr, m: int, theta: sp.Symbol) -> tuple[sp.Expr, sp.Expr]:
    """Real and imaginary part of F_m as formulas in `AMPLITUDE` and `FREQUENCY`."""
    closed, others = _parted(g, m)
    form, scale = closed_form(closed, m), (2 / AMPLITUDE) ** m
    assert form is not None
    real, imag = complex_parts(form.smooth)
    real, imag = (_shown(_part(form, part, k), scale) for k, part in enumerate((real, imag)))
    if others != 0:
        averaged = _averaged(others, m, theta)
        real, imag = real + scale * averaged[0], imag + scale * averaged[1]
    return real, imag


def numeric_harmonic(g: sp.Expr, m: int, theta: sp.Symbol) -> tuple[sp.Expr, sp.Expr]:
    """The same for evaluation at any amplitude ≥ 0."""
    closed, others = _parted(g, m)
    real, imag = complex_parts(_numeric_closed(closed, m))
    if others != 0 and m == 1 and not others.has(*NONSMOOTH):
        averaged = _by_parts_averaged(others, theta)
    else:
        scale = (2 * Inverse(AMPLITUDE)) ** m if m else sp.Integer(1)
        averaged = tuple(scale * x for x in _averaged(others, m, theta)) if others != 0 else (0, 0)
    return real + averaged[0], imag + averaged[1]


def _numeric_closed(g: sp.Expr, m: int) -> sp.Expr:
    """F_m of a force with a closed form: waves by parts, which divides by no amplitude, powers and steps directly."""
    waves: list[sp.Expr] = []
    rest: list[sp.Expr] = []
    for term in sp.Add.make_args(with_steps(g, (U, V))):
        (waves if m == 1 and not term.has(sp.Heaviside, sp.Abs, sp.sign) else rest).append(term)
    total = _by_parts(sp.Add(*waves)) if waves else sp.Integer(0)
    if rest:
        form = closed_form(sp.Add(*rest), m)
        assert form is not None
        smooth = sp.expand(form.smooth * (2 / AMPLITUDE) ** m, power_base=False, power_exp=False, log=False)
        total += guarded(smooth, AMPLITUDE) + _guarded_steps(form, m)
    return total


def _by_parts(g: sp.Expr) -> sp.Expr:
    """F_1 = C_0[g_u] − C_2[g_u] + iω (C_0[g_v] + C_2[g_v])."""
    total = sp.Integer(0)
    for x, sign, factor in ((U, -1, sp.Integer(1)), (V, 1, sp.I * FREQUENCY)):
        slope = sp.diff(g, x)
        if slope != 0:
            zero, two = closed_form(slope, 0), closed_form(slope, 2)
            assert zero is not None
            assert two is not None
            total += factor * (zero.smooth + sign * two.smooth)
    return sp.expand(total, power_base=False, power_exp=False, log=False)


def _by_parts_averaged(g: sp.Expr, theta: sp.Symbol) -> tuple[sp.Expr, sp.Expr]:
    along = {U: AMPLITUDE * sp.cos(theta), V: -AMPLITUDE * FREQUENCY * sp.sin(theta)}
    slope = (sp.diff(g, U) * sp.sin(theta) + FREQUENCY * sp.diff(g, V) * sp.cos(theta)).xreplace(along)
    cycle = (theta, 0, 2 * sp.pi)
    shown = _averaged(g, 1, theta)
    return tuple(
        sp.Integer(0) if part == 0 else sp.Integral(slope * wave, cycle) / sp.pi
        for part, wave in zip(shown, (sp.sin(theta), sp.cos(theta)), strict=True)
    )
