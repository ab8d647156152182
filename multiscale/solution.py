"""The uniform approximation u = U_0 + εU_1 + … in slow variables and time."""

from __future__ import annotations

from collections.abc import Callable

import sympy as sp

from multiscale.computed import Computation, Finished
from multiscale.frame import turns
from multiscale.level import Views
from multiscale.problem import Problem
from multiscale.symbols import Symbols

__all__ = ["FORMS", "field_writer", "solution"]

FORMS = ("polar", "complex", "cartesian")
Complex = tuple[sp.Expr, sp.Expr]


def solution(
    problem: Problem, computation: Computation, views: Views, symbols: Symbols, form: str, order: int
) -> dict[sp.Expr, sp.Expr]:
    """{unknown: Σ εⁿ U_n, n = 0 … order}."""
    build = field_writer(computation, views, symbols, form)
    return {
        u: sp.Add(*(problem.small**n * build(computation.field(n, k)) for n in range(order + 1)))
        for k, u in enumerate(problem.unknowns)
    }


def field_writer(computation: Computation, views: Views, symbols: Symbols, form: str) -> Callable[[Finished], sp.Expr]:
    """How a finished real field is written in one of `FORMS`."""
    if form == "complex":
        return views.field
    modes = computation.modes
    if form == "polar":
        deviations = computation.frame.deviations(symbols.gamma, symbols.beta)

        def wave(m: tuple[int, ...]) -> Complex:
            return _polar_wave(m, deviations, views, symbols)
    else:

        def wave(m: tuple[int, ...]) -> Complex:
            return _cartesian_wave(m, views, symbols)

    return lambda f: views.placed(_real_field(f, modes, views, wave), form)


def _real_field(finished: Finished, modes: int, views: Views, wave: Callable[[tuple[int, ...]], Complex]) -> sp.Expr:
    """Σ c M over one of each conjugate pair of terms: c M + conj = 2 (Re c Re M − Im c Im M).

    `wave` gives the real and imaginary part of Π z^p z̄^q e^m without the factors ½ of the amplitudes.
    """
    terms = []
    for m, c in finished.items():
        own = turns(m)
        if own < tuple(-x for x in own):
            continue
        size = sp.Rational(2 if any(own) else 1, 2 ** sum(m[: 2 * modes]))
        cosine, sine = wave(m)
        terms.append(size * (views.writer.quotient(c.real) * cosine - views.writer.quotient(c.imag) * sine))
    return sp.Add(*terms)


def _polar_wave(exponents: tuple[int, ...], deviations: list[sp.Expr], views: Views, symbols: Symbols) -> Complex:
    own = turns(exponents)
    size = sp.Mul(*(a ** (exponents[2 * k] + exponents[2 * k + 1]) for k, a in enumerate(symbols.a)))
    angle = views.angle(own) + sp.Add(*(n * d for n, d in zip(own, deviations, strict=False)))
    return size * sp.cos(angle), size * sp.sin(angle)


def _cartesian_wave(exponents: tuple[int, ...], views: Views, symbols: Symbols) -> Complex:
    """With A = ½ (p − iq) and its own fast angle apart: the slow factor times cos and sin of that angle."""
    own = turns(exponents)
    pairs = zip(symbols.p, symbols.q, exponents[::2], exponents[1::2], strict=False)
    size = sp.Mul(*((p**2 + q**2) ** min(up, down) for p, q, up, down in pairs))
    real, imag = views.phase_factor(own)
    angle = views.angle(own)
    cosine, sine = sp.cos(angle), sp.sin(angle)
    return size * (real * cosine - imag * sine), size * (real * sine + imag * cosine)
