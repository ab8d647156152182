"""What a generated file says about itself: equations, conventions, assumptions, remarks, as plain ASCII text.

`describe` gives paragraphs (title, lines) that the writers of each language put into their own comments.
"""

from __future__ import annotations

import textwrap
from collections.abc import Iterable, Sequence
from dataclasses import dataclass

import sympy as sp

from multiscale.computed import Computation
from multiscale.expansion import Expansion
from multiscale.level import polynomials_below
from multiscale.remarks import incomplete_cubic, small_divisors

__all__ = ["Paragraph", "describe", "plain", "wrapped"]

AMPLITUDES = {
    "fundamental": "the amplitude of the fundamental harmonic, to all orders",
    "peak": "half the distance from peak to peak",
}


@dataclass(frozen=True)
class Paragraph:
    """A title and its lines; `formulas` are indented, and broken only between terms."""

    title: str
    text: str = ""
    formulas: tuple[str, ...] = ()


def plain(text: object) -> str:
    """ASCII, one line, no control characters: safe in a comment of any language."""
    printable = "".join(c if c.isprintable() else " " for c in str(text))
    return printable.encode("ascii", "backslashreplace").decode("ascii")


def wrapped(paragraph: Paragraph, width: int, indent: str = "    ") -> list[str]:
    """The lines of a paragraph."""
    lines = [paragraph.title]
    if paragraph.text:
        lines += textwrap.wrap(paragraph.text, width, initial_indent=indent, subsequent_indent=indent)
    for formula in paragraph.formulas:
        lines += textwrap.wrap(
            formula,
            width,
            initial_indent=indent,
            subsequent_indent=indent * 2,
            break_long_words=False,
            break_on_hyphens=False,
        )
    return lines


def describe(expansion: Expansion, *, fields: bool) -> list[Paragraph]:
    """The paragraphs; with `fields` assumptions and remarks cover the displacement too, without it the slow flow."""
    problem = expansion.problem
    found = [Paragraph("Equations of motion", formulas=_equations(expansion))]
    if problem.ordering is not None:
        orders = ", ".join(f"{x}: {q}" for x, q in sorted(problem.ordering.items(), key=lambda item: str(item[0])))
        text = f"{problem.small} counts orders ({orders}); its value is 1 where none is given."
        found.append(Paragraph("Ordering", plain(text)))
    if expansion.relations:
        rows = tuple(plain(f"{_shown(expansion, x)} = {y}") for x, y in expansion.relations.items())
        found.append(Paragraph("Relations in force (the left side is eliminated)", formulas=rows))
    found.append(Paragraph("Leading motion", formulas=_motion(expansion)))
    found.append(_conventions(expansion))
    if divisors := _nonresonance(expansion, fields):
        found.append(Paragraph("Assumed not to vanish", formulas=tuple(plain(d) for d in divisors)))
    if remarks := _remarks(expansion, fields):
        found.append(Paragraph("Remarks", formulas=tuple(f"- {plain(remark)}" for remark in remarks)))
    return found


def _shown(expansion: Expansion, x: sp.Expr) -> sp.Expr:
    """Derivatives with primes and unknowns without their argument."""
    time = expansion.problem.time
    names = {u.diff(time, d) if d else u: u.func.__name__ + "'" * d for u in expansion.problem.unknowns for d in (2, 1)}
    names |= {u: u.func.__name__ for u in expansion.problem.unknowns}
    derivatives = {jet: sp.Symbol(name) for jet, name in names.items() if jet.is_Derivative}
    return x.xreplace(derivatives).xreplace({jet: sp.Symbol(name) for jet, name in names.items()})


def _equations(expansion: Expansion) -> tuple[str, ...]:
    return tuple(f"{plain(_sum(expansion, x))} = 0" for x in expansion.problem.equations)


def _sum(expansion: Expansion, equation: sp.Expr) -> str:
    """The terms of an equation, accelerations first and small terms last."""
    small, time = expansion.problem.small, expansion.problem.time
    accelerations = [u.diff(time, 2) for u in expansion.problem.unknowns]

    def place(term: sp.Expr) -> tuple[bool, int, bool]:
        return not term.has(*accelerations), int(sp.degree(term, small)) if term.has(small) else 0, not term.has(*jets)

    jets = expansion.problem.unknowns
    polynomial = equation.is_polynomial(small)
    terms = sp.Add.make_args(equation)
    texts = [str(_shown(expansion, x)) for x in (sorted(terms, key=place) if polynomial else terms)]
    signed = [f"- {x[1:]}" if x.startswith("-") else f"+ {x}" for x in texts]
    return " ".join(signed).removeprefix("+ ")


def _motion(expansion: Expansion) -> tuple[str, ...]:
    rows = []
    small = expansion.problem.small
    for form in ("cartesian", "polar"):
        for u, leading in expansion.solution(form, order=0).items():
            rows.append(plain(f"{u.func.__name__} = {leading} + O({small})"))
    return tuple(rows)


def _conventions(expansion: Expansion) -> Paragraph:
    """Symbols and their meaning."""
    s, flow = expansion.symbols, expansion.slow_flow
    rows = []
    for j, (p, q, a) in enumerate(zip(s.p, s.q, s.a, strict=True)):
        rows.append(f"{p}, {q}: Cartesian slow state, {a}**2 = {p}**2 + {q}**2, {s.A[j]} = ({p} - i*{q})/2")
        rows.append(f"{a}: {AMPLITUDES.get(expansion.amplitude, expansion.amplitude)}")
        rows.append(f"fast angle of {p}, {q}: {flow.frame[s.A[j]]}")
    deviations = _deviations(expansion.computation, [(str(p), str(q)) for p, q in zip(s.p, s.q, strict=True)])
    rows += [f"{name} = {text}" for name, text in zip((*s.gamma, *flow.cyclic), deviations, strict=True)]
    text = "" if flow.autonomous else f"The slow flow depends on {expansion.problem.time} explicitly."
    return Paragraph("Conventions", plain(text), tuple(plain(row) for row in rows))


def _deviations(computation: Computation, names: Sequence[tuple[str, str]]) -> list[str]:
    """The phases of the polar form, resonant then cyclic, from the Cartesian state."""
    frame = computation.frame
    found = []
    for row in [*frame.resonant, *(tuple(int(k == j) for k in range(frame.modes)) for j in frame.cyclic)]:
        parts = []
        for n, (p, q) in zip(row, names, strict=True):
            angle = f"atan2({q}, {p})" if abs(n) == 1 else f"{abs(n)}*atan2({q}, {p})"
            parts += [f"{'-' if n > 0 else '+'} {angle}"] if n else []
        text = " ".join(parts)
        found.append(text[2:] if text.startswith("+ ") else "-" + text[2:])
    return found


def _nonresonance(expansion: Expansion, fields: bool) -> Iterable[sp.Expr]:
    if fields:
        return expansion.nonresonance
    c = expansion.computation
    own = {p for _, p in c.canonical.spec.reciprocals}
    finished = [c.flow(n, a) for n in range(1, c.order + 1) for a in range(c.modes)]
    divisors = [expansion.views.writer.polynomial(p) for p in polynomials_below(finished) if p not in own]
    return [d for d in divisors if not d.is_positive]


def _remarks(expansion: Expansion, fields: bool) -> Sequence[str]:
    if fields:
        return expansion.warnings
    cubic = incomplete_cubic(expansion.problem, expansion.computation)
    near = small_divisors(expansion.problem, expansion.computation, expansion.tolerance)
    return [*([cubic] if cubic else []), *near]
