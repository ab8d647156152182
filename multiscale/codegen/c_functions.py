"""The functions of generated source in C99: those of math.h under their names there, small ones written out.

What has no counterpart there is refused: averages over a phase by quadrature, and Bessel functions, since j0, j1 and jn
belong to POSIX and not to C99.
"""

from __future__ import annotations

from collections.abc import Iterable

from multiscale.errors import EvaluationError

__all__ = ["WORDS", "check", "helpers", "spelling"]

_MATH = {
    "absolute": "fabs", "root": "sqrt", "gamma_function": "tgamma", "tanh": "tanh", "arcsin": "asin",
    "arccos": "acos", "arctan": "atan", "arcsinh": "asinh",
}  # fmt: skip
_WRITTEN = {
    "sign": ("double x", "(double)((x > 0.0) - (x < 0.0))"),
    "inverse_or_zero": ("double x", "x == 0.0 ? 0.0 : 1.0 / x"),
    "reciprocal": ("double x", "1.0 / fmax(x, 1e-300)"),
    "nonzero": ("double x", "x == 0.0 ? 0.0 : 1.0"),
    "or_one": ("double x", "x == 0.0 ? 1.0 : x"),
    "clipped": ("double x", "fmin(fmax(x, -1.0), 1.0)"),
    "within": ("double x", "fabs(x) < 1.0 ? 1.0 : 0.0"),
    "positive": ("double x", "x > 0.0 ? 1.0 : 0.0"),
    "where": ("double condition, double x, double y", "condition != 0.0 ? x : y"),
}
_DIGAMMA = """\
/* The logarithmic derivative of the gamma function, x > 0: recurrence up to 10, then
   the asymptotic series (DLMF 5.11.2). */
static double {name}(double x)
{{
    double below = 0.0, y, tail;
    for (; x < 10.0; x += 1.0) {{
        below += 1.0 / x;
    }}
    y = 1.0 / (x * x);
    tail = y * (1.0 / 240.0 - y * (1.0 / 132.0 - y * 691.0 / 32760.0));
    tail = y * (1.0 / 12.0 - y * (1.0 / 120.0 - y * (1.0 / 252.0 - tail)));
    return log(x) - 1.0 / (2.0 * x) - tail - below;
}}"""
_REFUSED = {
    "circle": "an average over a phase by quadrature",
    "arcs": "an average over a phase by quadrature",
    "jump": "an average over a phase by quadrature",
    "besselj": "the Bessel function J_n",
    "besseli": "the modified Bessel function I_n",
}
WORDS = frozenset(["sin", "cos", "exp", "log", "sqrt", "fmax", "fmin", *_MATH.values()])
"""What the source may call in math.h."""


def check(names: Iterable[str]) -> None:
    """EvaluationError where one of the functions called `names` has no counterpart in C99."""
    if refused := sorted({_REFUSED[name] for name in names if name in _REFUSED}):
        raise EvaluationError(
            f"the functions need {' and '.join(refused)}, which math.h of C99 does not have: use write_module, whose "
            "file brings what it needs, or state the force as a Taylor polynomial"
        )


def spelling(stem: str) -> dict[str, str]:
    """What the file called `stem` calls a function."""
    return _MATH | {name: f"{stem}_{name}" for name in (*_WRITTEN, "digamma")}


def helpers(names: Iterable[str], stem: str) -> list[list[str]]:
    """The functions written out, as far as they are among `names`."""
    used, found = set(names), []
    for name, (arguments, text) in _WRITTEN.items():
        if name in used:
            found.append([f"static double {stem}_{name}({arguments})", "{", f"    return {text};", "}"])
    if "digamma" in used:
        found.append(_DIGAMMA.format(name=f"{stem}_digamma").splitlines())
    return found
