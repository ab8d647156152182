"""Purely imaginary roots of det L_0(s), with exact frequencies.

    det L_0(s) = E(s²) + s O(s²),      iω is a root  ⟺  x = ω² is a positive root of gcd(E(−x), O(−x))

A linear factor of the gcd gives ω² itself, a quadratic one x² − Sx + P gives

    P a square p²:        ω = ½ (√(S + 2p) ± √(S − 2p))
    otherwise:            ω = √(½ (S ± √(S² − 4P)));    where P(S² − 4P) is a square the second follows from the first

Radicals become positive symbols (`radicals`), which eliminate a parameter each where they can and are relations of the
ring otherwise. Roots off the imaginary axis decay (or grow): they are no modes.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any

import sympy as sp
from sympy.polys.matrices import DomainMatrix

from multiscale.errors import MultiscaleError, ProblemError
from multiscale.problem.coupled.radicals import Radicals
from multiscale.problem.reading import unsupported

__all__ = ["Found", "imaginary_roots", "roots_at_most"]

X = sp.Symbol("@x")
S = sp.Symbol("@s")


DIGITS = 60
"""Digits of frequencies without a closed form."""


@dataclass(frozen=True)
class Found:
    """A frequency, the multiplicity of the root iω in det L_0, and the form in which to print it, where another.

    `given` says that the user gave it with as many shapes, so that it may be defective, or have more shapes.
    """

    frequency: sp.Expr
    multiplicity: int
    shown: sp.Expr | None = None
    given: bool = False


def imaginary_roots(
    mass: sp.Matrix,
    damping: sp.Matrix,
    stiffness: sp.Matrix,
    radical: Radicals,
    names: Sequence[sp.Expr],
    weak: str,
) -> tuple[list[Found], int]:
    """The frequencies of all oscillations that neither grow nor decay, and the number of roots off the imaginary axis.

    `weak` says how a term is made small. Raises `ProblemError` where nothing oscillates.
    """
    even, odd, back = _parts(mass, damping, stiffness)
    if even.is_zero and odd.is_zero:
        missing = [u for k, u in enumerate(names) if not any((*mass[:, k], *damping[:, k], *stiffness[:, k]))]
        hint = f"{missing[0]} does not stand in them; " if missing else ""
        raise ProblemError(
            f"the equations at leading order do not determine the unknowns {tuple(names)}: {hint}every unknown needs "
            "exactly one equation in which it stands at leading order"
        )
    if even.eval(0) == 0:
        raise ProblemError(
            "the leading-order equations have a root of zero frequency (a rigid-body motion, or a state that neither "
            "decays nor returns), for which there is no bounded response: every unknown needs a restoring term at "
            f"leading order. The stiffness matrix {stiffness.tolist()} is singular; fix the motion by a constraint, or "
            "use relative coordinates"
        )
    common = sp.gcd(even, odd) if not odd.is_zero else even
    found: list[Found] = []
    for factor, multiplicity in common.factor_list()[1]:
        for w in _frequencies(factor, back, radical):
            found.append(Found(w[0], multiplicity, w[1]) if isinstance(w, tuple) else Found(w, multiplicity))
    if not found:
        raise _nothing_oscillates(_shown(even, odd), damping, names, weak)
    degree = max(2 * even.degree(), -1 if odd.is_zero else 2 * odd.degree() + 1)
    return found, degree - 2 * sum(f.multiplicity for f in found)


def roots_at_most(mass: sp.Matrix, damping: sp.Matrix, stiffness: sp.Matrix) -> int:
    """A bound on the degree of det L_0(s), by rows and by columns."""
    size = int(mass.shape[0])
    orders: list[list[int]] = [
        [2 if mass[i, j] else 1 if damping[i, j] else 0 for j in range(size)] for i in range(size)
    ]
    columns = zip(*orders, strict=True)
    return int(min(sum(max(row) for row in orders), sum(max(column) for column in columns)))


def _nothing_oscillates(
    determinant: sp.Expr, damping: sp.Matrix, names: Sequence[sp.Expr], weak: str
) -> MultiscaleError:
    why = f"det L_0(s) = {determinant} has no root on the imaginary axis"
    size = len(names)
    terms = [damping[k, j] * names[j].diff() for k in range(size) for j in range(size) if damping[k, j]]
    if terms and sp.degree(determinant, sp.Symbol("s")) == 2 * size:
        return unsupported(
            ", ".join(map(str, terms)),
            f"damping stands at leading order, where some mode must be undamped, and {why}",
            weak,
        )
    return ProblemError(
        f"nothing oscillates at leading order: {why}. {weak}; for an onset of oscillation state the critical value of "
        "the parameter plus a small part"
    )


def _shown(even: sp.Poly, odd: sp.Poly) -> sp.Expr:
    s = sp.Symbol("s")
    return sp.expand(even.as_expr().subs(X, -(s**2)) + s * odd.as_expr().subs(X, -(s**2)))


def _parts(
    mass: sp.Matrix, damping: sp.Matrix, stiffness: sp.Matrix
) -> tuple[sp.Poly, sp.Poly, dict[sp.Expr, sp.Expr]]:
    """E(−x) and O(−x) of det L_0(s) = E(s²) + s O(s²), as polynomials in x, and what symbols for leaves stand for."""
    size = mass.shape[0]
    entries = [[S**2 * mass[i, j] + S * damping[i, j] + stiffness[i, j] for j in range(size)] for i in range(size)]
    opaque = _opaque(entries)
    radicals = sorted((x for x in opaque if _is_root(x)), key=str)
    plain = DomainMatrix.from_list_sympy(size, size, [[e.xreplace(opaque) for e in row] for row in entries])
    # Without division over polynomials: the constant term of the characteristic polynomial.
    determinant = plain.domain.to_sympy(plain.charpoly()[-1]) * (-1) ** size
    even, odd = sp.Integer(0), sp.Integer(0)
    for (power,), c in sp.Poly(determinant, S).terms():
        term = c * (-X) ** (power // 2)
        even, odd = (even + term, odd) if power % 2 == 0 else (even, odd + term)
    back = {v: k for k, v in opaque.items()}
    even, odd = (sp.expand(x.xreplace(back)) for x in (even, odd))
    radicals = [r for r in radicals if any(r in {_leaf(p) for p in x.atoms(sp.Pow)} for x in (even, odd))]
    # Parameters stand in the coefficient domain, so that factors are those over the field of all of them. Beside
    # parameters radicals count as independent: a factor may then be missed, but none is wrong.
    options: dict[str, object] = {"field": True}
    if radicals and (even.free_symbols | odd.free_symbols) == {X}:
        options = {"extension": radicals}
    elif radicals:
        even, odd = (x.xreplace(opaque) for x in (even, odd))
    return sp.Poly(even, X, **options), sp.Poly(odd, X, **options), back


def _is_root(x: sp.Expr) -> bool:
    return bool(x.is_Pow and x.base.is_Rational and not x.exp.is_Integer)


def _leaf(x: sp.Expr) -> sp.Expr:
    """√2 of √2³: the radical that all powers of it share."""
    return x.base ** sp.Rational(1, x.exp.q) if x.exp.is_Rational else x


def _opaque(entries: list[list[sp.Expr]]) -> dict[sp.Expr, sp.Expr]:
    """Radicals, functions of parameters and other leaves as symbols while the determinant is worked out."""
    found: set[sp.Expr] = set()
    for e in (e for row in entries for e in row):
        found |= e.atoms(sp.Function) | e.atoms(sp.NumberSymbol)
        found |= {_leaf(p) for p in e.atoms(sp.Pow) if p.exp.is_Rational and not p.exp.is_Integer}
        found |= {p for p in e.atoms(sp.Pow) if not p.exp.is_Rational}
    return {f: sp.Dummy(f"leaf{k}") for k, f in enumerate(sorted(found, key=str))}


def _frequencies(factor: sp.Poly, back: dict[sp.Expr, sp.Expr], radical: Radicals) -> list[Any]:
    """ω, or (ω, its form to print), for the positive roots ω² of an irreducible factor."""
    if factor.degree() == 1:
        a, b = (c.xreplace(back) for c in factor.all_coeffs())
        square = sp.cancel(-b / a)
        return [] if square.is_nonpositive else [radical(square)]
    if factor.degree() == 2:
        a, b, c = (c.xreplace(back) for c in factor.all_coeffs())
        return _pair(sp.cancel(-b / a), sp.cancel(c / a), radical)
    if factor.free_symbols_in_domain:
        raise ProblemError(
            f"the frequencies are the roots of {factor.as_expr().subs(X, sp.Symbol('omega') ** 2)} = 0, of degree "
            f"{factor.degree()} in omega**2, for which no closed form was found. If you know a mode, give it by "
            "`shapes={frequency: shape}`; any mode can be given with a symbol for its frequency if a parameter p is "
            "eliminated by `resonances={p: <p from det L_0(i*omega) = 0>}`. Or give numbers for the parameters of the "
            "linear part"
        )
    squares = [r for r in sp.Poly(factor, X).nroots(n=DIGITS, maxsteps=500) if r.is_real and r > 0]
    return [radical.number(sp.sqrt(x)) for x in squares]


def _pair(total: sp.Expr, product: sp.Expr, radical: Radicals) -> list[Any]:
    """The frequencies of x² − total x + product, the smaller first."""
    discriminant = sp.cancel(total**2 - 4 * product)
    if discriminant.is_negative or (discriminant.is_positive and total.is_nonpositive):
        return []
    if discriminant.is_number and discriminant.is_positive and product.is_negative:
        return [_nested(total, radical(discriminant), radical)]
    root = radical.rational(product)
    if root is not None:
        outer, inner = radical(sp.cancel(total + 2 * root)), radical(sp.cancel(total - 2 * root))
        return [(outer - inner) / 2, (outer + inner) / 2]
    inner = radical(discriminant)
    upper = _nested(total, inner, radical)
    cyclic = radical.rational(sp.cancel(product * discriminant))
    if cyclic is not None:
        # ω_1 = √P/ω_2 with √P = √(PD)/√D, all of it in the field of ω_2.
        lower = cyclic * upper * (inner * total - discriminant) / (2 * product * discriminant)
        return [(sp.expand(lower), sp.sqrt((total - inner) / 2)), upper]
    return [_nested(total, -inner, radical), upper]


def _nested(total: sp.Expr, inner: sp.Expr, radical: Radicals) -> sp.Expr:
    return radical(sp.together((total + inner) / 2))
