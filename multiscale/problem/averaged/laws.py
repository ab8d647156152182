"""Forces that are not polynomial in the unknowns, taken out of the equations.

    equation = polynomial + Σ coefficient · g(u, u', u''),     g → a symbol of its own, the coefficient stays

The coefficient is everything free of unknowns, drives and powers of ε included; polynomial factors go into g. Terms
that share their coefficient, numbers apart, are one law.
"""

from __future__ import annotations

from collections.abc import Iterable, Mapping, Sequence
from dataclasses import dataclass, replace

import sympy as sp

from multiscale.problem.averaged.steps import expanded
from multiscale.problem.reading import unsupported
from multiscale.problem.terms import Layout

__all__ = ["LAW", "Law", "at_resonance", "layout_with_laws", "separated"]

LAW = -1
"""What stands for the order of the derivative in the jet of a law."""
_KNOWN = (
    sp.Abs, sp.sign, sp.Max, sp.Min, sp.Heaviside, sp.Piecewise, sp.exp, sp.log, sp.sin, sp.cos, sp.tan,
    sp.sinh, sp.cosh, sp.tanh, sp.asin, sp.acos, sp.atan, sp.asinh, sp.core.function.AppliedUndef,
)  # fmt: skip


@dataclass(frozen=True)
class Law:
    """`symbol` stands in the equations for `force`, written with real symbols for the jets (`real_jets`)."""

    symbol: sp.Symbol
    force: sp.Expr

    def jets(self, layout: Layout) -> list[tuple[int, int]]:
        """The unknowns and derivatives that the force depends on."""
        real = {_real(s): jet for s, jet in layout.jets.items()}
        return sorted(real[s] for s in self.force.free_symbols if s in real)

    def spelled(self, shown: Mapping[sp.Symbol, sp.Expr]) -> sp.Expr:
        """The force as the user wrote it."""
        return self.force.xreplace({_real(s): x for s, x in shown.items()})


def _real(s: sp.Symbol) -> sp.Symbol:
    return sp.Symbol(s.name, real=True)


def _polynomial(x: sp.Expr, jets: set[sp.Symbol]) -> bool:
    if not x.free_symbols & jets or x in jets:
        return True
    if isinstance(x, sp.Add | sp.Mul):
        return all(_polynomial(arg, jets) for arg in x.args)
    return bool(isinstance(x, sp.Pow) and x.exp.is_Integer and x.exp.is_positive and _polynomial(x.base, jets))


def separated(
    equations: Sequence[sp.Expr],
    layout: Layout,
    time: sp.Symbol,
    shown: Mapping[sp.Symbol, sp.Expr],
    given: Iterable[str],
) -> tuple[list[sp.Expr], tuple[Law, ...]]:
    """(equations polynomial in jets and laws, the laws). Raises `UnsupportedTermError`, naming the term."""
    jets = set(layout.jets)
    if all(_polynomial(x, jets) for x in equations):
        return list(equations), ()
    real = {s: _real(s) for s in jets}
    back = {r: s for s, r in real.items()}
    spelled = {r: shown[s] for s, r in real.items()}
    found: dict[sp.Expr, Law] = {}
    result = []
    for equation in equations:
        plain: list[sp.Expr] = []
        forces: dict[sp.Expr, list[sp.Expr]] = {}
        for term in sp.Add.make_args(_opened(equation.xreplace(real), set(back))):
            if _polynomial(term, set(back)):
                plain.append(term.xreplace(back))
                continue
            free, dynamic = term.as_independent(*back, as_Add=False)
            if layout.small in dynamic.free_symbols and _polynomial(dynamic.subs(layout.small, 0), set(back)):
                # Analytic in ε at polynomials, such as sin(εu): a Taylor polynomial takes its place.
                plain.append(term.xreplace(back))
                continue
            number, free = free.as_coeff_Mul()
            forces.setdefault(free, []).append(number * dynamic)
        for free, parts in forces.items():
            force = sp.Add(*parts)
            _check(force, layout.small, time, set(back), spelled, set(given))
            law = found.setdefault(force, Law(sp.Symbol(f"@f{len(found)}"), force))
            plain.append(free * law.symbol)
        result.append(sp.Add(*plain))
    return result, tuple(found.values())


def layout_with_laws(
    layout: Layout, shown: dict[sp.Symbol, sp.Expr], laws: Sequence[Law]
) -> tuple[Layout, dict[sp.Symbol, sp.Expr]]:
    """Layout and spelling with the symbols of laws."""
    real = {sp.Symbol(s.name, real=True): x for s, x in shown.items()}
    jets = {**layout.jets, **{law.symbol: (n, LAW) for n, law in enumerate(laws)}}
    return replace(layout, jets=jets), {**shown, **{law.symbol: law.force.xreplace(real) for law in laws}}


def at_resonance(
    laws: Sequence[Law], relations: Sequence[tuple[sp.Symbol, sp.Expr]], small: sp.Symbol
) -> tuple[Law, ...]:
    """Laws with the frequencies that relations eliminate at their leading values."""
    values = {s: value.subs(small, 0) for s, value in relations}
    return tuple(replace(law, force=law.force.subs(values)) for law in laws)


def _opened(x: sp.Expr, jets: set[sp.Symbol]) -> sp.Expr:
    """The sum with those products multiplied out that hold a force which is not polynomial."""
    terms = []
    for term in sp.Add.make_args(x):
        terms.append(term if _polynomial(term, jets) else expanded(term))
    return sp.Add(*terms)


def _check(
    force: sp.Expr,
    small: sp.Symbol,
    time: sp.Symbol,
    jets: set[sp.Symbol],
    spelled: Mapping[sp.Symbol, sp.Expr],
    given: set[str],
) -> None:
    shown = force.xreplace(dict(spelled))
    if small in force.free_symbols:
        raise unsupported(
            shown,
            f"the small parameter {small} stands inside a force that is not polynomial",
            f"Expand it in powers of {small}, or give what stands there a symbol of its own",
        )
    if time in force.free_symbols:
        raise unsupported(
            shown,
            f"a force that is not polynomial contains {time}",
            "Drives and slow parameters may multiply such a force, not stand inside it",
        )
    for x in sorted(force.atoms(sp.Function, sp.Pow, sp.Derivative), key=sp.default_sort_key):
        if not x.free_symbols & jets:
            continue
        term = x.xreplace(dict(spelled))
        if isinstance(x, sp.core.function.AppliedUndef):
            if str(x.func) not in given:
                raise unsupported(
                    term,
                    f"nothing says what the function {x.func} is",
                    f"Pass laws={{{x.func}: function or table}} to Problem",
                )
        elif isinstance(x, sp.Derivative):
            raise unsupported(
                term,
                "only first and second time derivatives of the unknowns are accepted",
                "Rewrite the equation as a system of second order",
            )
        elif isinstance(x, sp.Pow | sp.log):
            _check_power(x, term, jets)
        elif not isinstance(x, _KNOWN):
            raise unsupported(
                term,
                f"the function {x.func.__name__} is not known to the quadrature",
                "Write it as an undefined function F and pass laws={F: …} to Problem",
            )


def _check_power(x: sp.Expr, term: sp.Expr, jets: set[sp.Symbol]) -> None:
    """Roots, logarithms and poles at what the motion passes through at any amplitude: displacement or velocity zero."""
    base = x.args[0]
    exponent = sp.Integer(0) if isinstance(x, sp.log) else x.exp
    if not base.free_symbols & jets or (exponent.is_Integer and exponent.is_positive):
        return
    at_rest = base.subs(dict.fromkeys(jets, 0))
    if isinstance(x, sp.log) or not exponent.is_nonnegative:
        if at_rest == 0:
            remedy = f"Shift {term.args[0]} away from zero"
            if isinstance(x, sp.Pow) and exponent.is_negative is None:
                remedy = f"Declare the exponent {exponent} as nonnegative or positive"
            raise unsupported(term, "it is singular where displacement or velocity passes through zero", remedy)
    elif not exponent.is_Integer and at_rest == 0 and not base.is_nonnegative:
        raise unsupported(
            term,
            "its argument changes sign during the motion, where the power is complex",
            "Write Abs(x)**p, or sign(x)*Abs(x)**p for a force that changes sign with x",
        )
