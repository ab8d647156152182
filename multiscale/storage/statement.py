"""A problem as it was stated, in references to a table of expressions.

    {"equations": [x, …], "unknowns": [u, …], "resonances": [[x, y], …], "small": x  or  "ordering": [[x, q], …],
     "modes": [a, …], "references": [[a, k], …], "shapes": [[w, [[x, …], …]], …], "left_shapes": the same,
     "harmonics": n, "formal": true, "laws": [[F, [x], [y]], …]}

Positions of rest are stored where `Problem` keeps them: in the equations and relations. Of force laws that are no
formulas a table of numbers can be stored, a Python function cannot.
"""

from __future__ import annotations

from typing import Any

import sympy as sp

from multiscale.errors import StorageError
from multiscale.problem import Problem
from multiscale.problem.force_law import ForceLaw
from multiscale.storage.expressions import Reader, Writer
from multiscale.storage.limits import checked_name, field, hexadecimal, integer, refuse, sequence, shown

__all__ = ["read_problem", "written_problem"]


def written_problem(problem: Problem, into: Writer) -> dict[str, Any]:
    """Raises `StorageError` for a force law that is a Python function."""
    written: dict[str, Any] = {
        "equations": [into.node(x) for x in problem.equations],
        "unknowns": [into.node(x) for x in problem.unknowns],
        "resonances": [[into.node(x), into.node(y)] for x, y in problem.resonances],
    }
    if problem.ordering is None:
        written["small"] = into.node(problem.small)
    else:
        written["ordering"] = [[into.node(x), q] for x, q in problem.ordering.items()]
    if problem.modes is not None:
        written["modes"] = list(problem.modes)
    if problem.references:
        written["references"] = [[a, problem.unknowns.index(u)] for a, u in sorted(problem.references.items())]
    for name, shapes in (("shapes", problem.shapes), ("left_shapes", problem.left_shapes)):
        if shapes:
            written[name] = [[into.node(w), [[into.node(x) for x in v] for v in vs]] for w, vs in shapes.items()]
    if problem.harmonics is not None:
        written["harmonics"] = problem.harmonics
    if problem.formal:
        written["formal"] = True
    if problem.laws:
        written["laws"] = [_written_law(name, law) for name, law in sorted(problem.laws.items())]
    return written


def _written_law(name: str, law: ForceLaw) -> list[Any]:
    if law.points is None:
        raise StorageError(
            f"the force law {name} is a Python function, which cannot be stored: give it as a table (x, y), or leave "
            "the expansion in memory"
        )
    return [checked_name(name), *([float(v).hex() for v in column] for column in law.points)]


def read_problem(stored: Any, expressions: Reader) -> Problem:
    """The problem; raises `StorageError` where the text is malformed, and the errors of `Problem`."""

    def several(name: str) -> list[sp.Expr]:
        return [expressions.scalar(k) for k in sequence(field(stored, name), name)]

    def pairs(name: str) -> list[Any]:
        return [sequence(p, f"an entry of {name}", 2) for p in sequence(field(stored, name), name)]

    unknowns = several("unknowns")
    for u in unknowns:
        checked_name(getattr(u.func, "__name__", ""))
    options: dict[str, Any] = {
        "resonances": {expressions.scalar(x): expressions.scalar(y) for x, y in pairs("resonances")}
    }
    if "ordering" in stored:
        options["ordering"] = {expressions.scalar(x): integer(q, "an order", 0, 1000) for x, q in pairs("ordering")}
    else:
        options["small"] = expressions.scalar(field(stored, "small"))
    if "modes" in stored:
        options["modes"] = [integer(a, "a mode", 0, 10_000) for a in sequence(stored["modes"], "the modes")]
    if "references" in stored:
        last = len(unknowns) - 1
        options["references"] = {
            integer(a, "a mode", 0, 10_000): unknowns[integer(k, "an unknown", 0, last)] for a, k in pairs("references")
        }
    for name in ("shapes", "left_shapes"):
        if name in stored:
            options[name] = {
                expressions.scalar(w): [
                    [expressions.scalar(x) for x in sequence(v, "a shape")] for v in sequence(vs, "shapes")
                ]
                for w, vs in pairs(name)
            }
    if "harmonics" in stored:
        options["harmonics"] = integer(stored["harmonics"], "the number of harmonics", 0, 1000)
    if "formal" in stored:
        if stored["formal"] is not True:
            raise refuse(f"formal is {shown(stored['formal'])!r}")
        options["formal"] = True
    if "laws" in stored:
        rows = [sequence(row, "a force law", 3) for row in sequence(stored["laws"], "the force laws")]
        options["laws"] = {sp.Function(checked_name(name)): (_numbers(x), _numbers(y)) for name, x, y in rows}
    return Problem(several("equations"), unknowns, **options)


def _numbers(x: Any) -> list[float]:
    return [hexadecimal(v, "a value of a table") for v in sequence(x, "a table")]
