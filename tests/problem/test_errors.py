"""Every refusal names the term and says what to write instead."""

from __future__ import annotations

import pytest
import sympy as sp

import multiscale as ms

t = sp.Symbol("t", real=True)
eps, k, mu, w = sp.symbols("epsilon k mu omega", positive=True)
u, v = sp.Function("u")(t), sp.Function("v")(t)
linear = u.diff(t, 2) + u


def small(equations, unknowns=u, **options):
    return ms.Problem(equations, unknowns, small=eps, **options)


REFUSED = {
    "not polynomial": (
        lambda: small(linear + sp.sin(u) + eps * u**3),
        ms.UnsupportedTermError,
        r"sin\(u\(t\)\).*leading order.*factor epsilon",
    ),
    "absolute value": (
        lambda: small(linear + sp.Abs(u.diff(t)) * u + eps * u**3),
        ms.UnsupportedTermError,
        r"Abs\(Derivative.*leading order",
    ),
    "fractional power": (
        lambda: small(linear + eps * u ** sp.Rational(1, 3)),
        ms.UnsupportedTermError,
        "argument changes sign.*complex.*Abs",
    ),
    "unknown in denominator": (
        lambda: small(linear + eps / u),
        ms.UnsupportedTermError,
        r"1/u\(t\): it is singular.*Shift u\(t\)",
    ),
    "unknown in denominator beside decimals": (
        lambda: small(u.diff(t, 2) + 1.7 * u + eps * 0.1 / u),
        ms.UnsupportedTermError,
        "1/u.*singular",
    ),
    "small in denominator": (
        lambda: small(linear + u**2 / eps),
        ms.UnsupportedTermError,
        "epsilon stands in a denominator",
    ),
    "small under a root": (
        lambda: small(linear + sp.sqrt(eps) * u**2),
        ms.UnsupportedTermError,
        "sqrt.epsilon.*not a polynomial",
    ),
    "third derivative": (
        lambda: small(linear + eps * u.diff(t, 3)),
        ms.UnsupportedTermError,
        r"\(t, 3\).*second order",
    ),
    "explicit time": (lambda: small(linear + eps * t**2 * u), ms.UnsupportedTermError, "depends on t explicitly"),
    "strong damping": (
        lambda: small(linear + mu * u.diff(t) + eps * u**3),
        ms.UnsupportedTermError,
        "damping stands at leading.*factor epsilon",
    ),
    "strong nonlinearity": (
        lambda: small(linear + u**3 + eps * u**2),
        ms.UnsupportedTermError,
        r"u\(t\)\*\*3: a nonlinear term.*factor epsilon",
    ),
    "one-way coupling of equal frequencies": (
        lambda: small([linear + eps * v, v.diff(t, 2) + v + k * u], [u, v]),
        ms.ProblemError,
        "frequency 1 is a root of multiplicity 2.*defective",
    ),
    "one-way inertia between equal frequencies": (
        lambda: small([linear + v.diff(t, 2), v.diff(t, 2) + v + eps * u], [u, v]),
        ms.ProblemError,
        "frequency 1 is a root of multiplicity 2.*defective",
    ),
    "no restoring term": (lambda: small(u.diff(t, 2) + eps * u**3), ms.ProblemError, "zero frequency"),
    "negative stiffness": (lambda: small(u.diff(t, 2) - k * u + eps * u**3), ms.ProblemError, "-k, not positive"),
    "first order": (lambda: small(u.diff(t) + u + eps * u**3), ms.ProblemError, "no root on the imaginary axis"),
    "too few equations": (lambda: small(linear + eps * v, [u, v]), ms.ProblemError, "1 equations for 2 unknowns"),
    "unknown missing": (
        lambda: small([linear + eps * u, linear + eps * u**2], [u, v]),
        ms.ProblemError,
        r"v\(t\) does not appear",
    ),
    "two equations of one unknown": (
        lambda: small([linear + eps * v, linear + eps * v**2], [u, v]),
        ms.ProblemError,
        "must|needs exactly one equation",
    ),
    "undeclared unknown": (
        lambda: small(linear + eps * v),
        ms.ProblemError,
        r"v\(t\) depends on time but is not among",
    ),
    "string": (lambda: small("u'' + u"), ms.ProblemError, "are a string"),
    "number": (lambda: small(0), ms.ProblemError, "expected a SymPy expression"),
    "string unknown": (lambda: small(linear + eps * u, "u"), ms.ProblemError, "not a function of time"),
    "no unknowns": (lambda: small([], []), ms.ProblemError, "no unknowns"),
    "repeated unknown": (lambda: small([linear, linear], [u, u]), ms.ProblemError, "repeat"),
    "two times": (
        lambda: small([linear, v], [u, sp.Function("w")(sp.Symbol("s"))]),
        ms.ProblemError,
        "one time symbol",
    ),
    "another time": (lambda: small(linear + eps * u, time=sp.Symbol("s")), ms.ProblemError, "use the same symbol"),
    "nan": (lambda: small(linear + eps * sp.nan * u), ms.ProblemError, "undefined number"),
    "infinity": (lambda: small(linear + eps * sp.oo * u**2), ms.ProblemError, "infinite"),
    "imaginary": (lambda: small(linear + sp.I * eps * u**2), ms.ProblemError, "imaginary unit"),
    "division by zero": (
        lambda: small(linear + eps * u / (k * (k + 1) - k**2 - k)),
        ms.ProblemError,
        "identically zero",
    ),
    "neither small nor ordering": (lambda: ms.Problem(linear + u**3, u), ms.ProblemError, "neither was given"),
    "both": (lambda: small(linear + eps * u**3, ordering={u: 1}), ms.ProblemError, "both were given"),
    "small absent": (lambda: small(linear + u**3), ms.ProblemError, "does not appear"),
    "small not a symbol": (
        lambda: ms.Problem(linear + eps * u, u, small=2),
        ms.ProblemError,
        "expected the SymPy symbol",
    ),
    "one name, two symbols": (
        lambda: small(linear + eps * sp.Symbol("k") * u**3 + eps * k * u**2),
        ms.ProblemError,
        "both called 'k'",
    ),
    "unknown and symbol": (lambda: small(linear + eps * sp.Symbol("u") * u**3), ms.ProblemError, "both called 'u'"),
    "ordering of a stranger": (
        lambda: ms.Problem(linear + u**3, u, ordering={u: 1, mu: 1}),
        ms.ProblemError,
        "mu, which does not appear",
    ),
    "negative order": (lambda: ms.Problem(linear + u**3, u, ordering={u: -1}), ms.ProblemError, "integer ≥ 0"),
    "order key": (
        lambda: ms.Problem(linear + u**3, u, ordering={u**2: 1}),
        ms.ProblemError,
        "expected an unknown or a parameter",
    ),
    "ordered symbol below a line": (
        lambda: ms.Problem(linear + u**3 / mu, u, ordering={u: 1, mu: 1}),
        ms.UnsupportedTermError,
        "denominator",
    ),
    "unequal orders": (
        lambda: ms.Problem([linear + v**2, v.diff(t, 2) + v + u * v], [u, v], ordering={u: 3, v: 1}),
        ms.UnsupportedTermError,
        "order 2 is below the order 3",
    ),
    "order zero": (lambda: ms.expand(small(linear + eps * u**3), 0), ms.ProblemError, "integer ≥ 1"),
    "order a float": (lambda: ms.expand(small(linear + eps * u**3), 2.0), ms.ProblemError, "integer ≥ 1"),
    "order true": (lambda: ms.expand(small(linear + eps * u**3), True), ms.ProblemError, "integer ≥ 1"),
    "expression instead of problem": (lambda: ms.expand(linear, 2), ms.ProblemError, "state a multiscale.Problem"),
    "representation": (
        lambda: ms.expand(small(linear + eps * u), 1, representation="dense"),
        ms.MultiscaleError,
        "expected 'auto'",
    ),
}


@pytest.mark.parametrize("name", REFUSED)
def test_refused_with_a_remedy(name):
    build, kind, message = REFUSED[name]
    with pytest.raises(kind, match=f"(?s){message}"):
        build()


@pytest.mark.parametrize("name", REFUSED)
def test_every_error_has_one_base(name):
    with pytest.raises(ms.MultiscaleError):
        REFUSED[name][0]()
