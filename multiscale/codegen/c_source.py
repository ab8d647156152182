"""A result as a C99 source file and its header: double arithmetic, no allocation, nothing but math.h.

Each function is ``void name(double t, const double *y, const double *parameters, double *result)``. A long computation
is split into parts, since compilers take more than linear time over one long function; values that pass from part to
part stand in an array on the stack, whose places are used again once a value is no longer needed.
"""

from __future__ import annotations

import re
import textwrap
from collections.abc import Iterable, Mapping, Sequence
from os import PathLike
from pathlib import Path

import multiscale
from multiscale.codegen.c_functions import check, helpers, spelling
from multiscale.codegen.c_names import words_of
from multiscale.codegen.description import describe, plain, wrapped
from multiscale.codegen.functions import Routine
from multiscale.codegen.printer import identifiers
from multiscale.codegen.routines import FUNCTIONS, Exported, exported, functions_called
from multiscale.codegen.statements import Assignment, Listing, listing, names_in
from multiscale.errors import EvaluationError
from multiscale.expansion import Expansion

__all__ = ["c_source", "write_c"]

WIDTH = 84
PART = 200
"""Assignments in one part of a split function."""


def write_c(
    expansion: Expansion, path: str | PathLike[str], *, functions: Sequence[str] = FUNCTIONS
) -> tuple[Path, Path]:
    """Write an expansion as C99 source and header.

    Parameters
    ----------
    expansion : Expansion
    path : path of the source file, such as ``flow.c``
        The header ``flow.h`` is written beside it; every name in the two begins with ``flow_``.
    functions : names among "rhs", "jacobian", "frequency", "displacement"
        What the source holds; those that are not defined for the problem are left out, and the header says so.

    Returns
    -------
    (Path, Path)
        Source and header. Matrices are stored row by row. A relation that gives a detuning becomes a function too.

    Raises
    ------
    EvaluationError
        The file name is no C identifier followed by ``.c``; the functions need quadrature over a phase or Bessel
        functions, which C99 does not have; otherwise as for `write_module`.

    Examples
    --------
    >>> import tempfile, pathlib, sympy as sp, multiscale as ms
    >>> t = sp.Symbol("t", real=True)
    >>> eps = sp.Symbol("epsilon", positive=True)
    >>> u = sp.Function("u")(t)
    >>> result = ms.expand(ms.Problem(u.diff(t, 2) + u + eps*u**3, u, small=eps), order=1)
    >>> with tempfile.TemporaryDirectory() as folder:
    ...     source, header = ms.write_c(result, pathlib.Path(folder) / "cubic.c")
    ...     print("void cubic_rhs(" in source.read_text())
    True
    """
    target = Path(path)
    if target.suffix != ".c" or not re.fullmatch(r"[A-Za-z]\w*", target.stem, re.ASCII):
        raise EvaluationError(f"path is {str(path)!r}: expected a name such as 'flow.c', which names the functions too")
    source, head = c_source(expansion, target.stem, functions=functions)
    header = target.with_suffix(".h")
    target.write_text(source, encoding="ascii", newline="\n")
    header.write_text(head, encoding="ascii", newline="\n")
    return target, header


def c_source(expansion: Expansion, stem: str, *, functions: Sequence[str] = FUNCTIONS) -> tuple[str, str]:
    """The texts of source and header that `write_c` writes."""
    made = exported(expansion, functions)
    names = functions_called(made)
    check(names)
    blocks, prototypes = helpers(names, stem), []
    for name, routine in made.routines.items():
        lines, places = _function(stem, name, routine, made)
        blocks.append(lines)
        count = len(routine.outputs)
        told = f"{_purpose(made)[name]}: {count} value{'s' if count > 1 else ''}"
        told += f"; {8 * places} bytes of stack for intermediate values" if places else ""
        prototypes += [*_comment([told]), *_prototype(f"{stem}_{name}", f"{stem.upper()}_RESTRICT", ";"), ""]
    for k, relation in enumerate(made.relations, start=1):
        words = words_of(relation.arguments, stem)
        inputs = dict(zip((f"parameter {x}" for x in relation.arguments), words, strict=True))
        found = listing(relation.tape, [relation.output], inputs, (), spelling(stem))
        head = f"double {stem}_relation_{k}({', '.join(f'double {word}' for word in words)})"
        body = [f"    const double {x.name} = {x.text};" for x in found.coefficients]
        blocks.append([head, "{", *body, f"    return {found.results[0]};", "}"])
        told = f"{relation.detuning or 'A detuning'} from {', '.join(relation.arguments)}, by its relation"
        prototypes += [*_comment([told]), f"{head};", ""]
    source = [f"/* {stem}.c: see {stem}.h. Made by multiscale {multiscale.__version__}. */", "#include <math.h>", ""]
    source.append(f'#include "{stem}.h"')
    for lines in blocks:
        source += ["", *lines]
    return "\n".join(source) + "\n", "\n".join(_header(made, stem, prototypes)) + "\n"


def _purpose(made: Exported) -> dict[str, str]:
    state = ", ".join(made.state)
    return {
        "rhs": f"d({state})/dt in physical time, all orders together",
        "jacobian": "Derivative of rhs by the state, row by row",
        "frequency": "Frequency of each mode at a state",
        "displacement": f"{', '.join(u.func.__name__ for u in made.expansion.problem.unknowns)} at time t from a state",
    }


def _comment(lines: Iterable[str]) -> list[str]:
    """A comment: text of the user's can neither end it nor open another."""
    safe = [plain(x).replace("*/", "* /").replace("/*", "/ *").replace("??", "? ?").rstrip("\\") for x in lines]
    if len(safe) == 1 and len(safe[0]) <= WIDTH:
        return [f"/* {safe[0]} */"]
    if len(safe) == 1:
        safe = textwrap.wrap(safe[0], WIDTH)
    return ["/*", *(f" * {x}".rstrip() for x in safe), " */"]


def _prototype(name: str, restrict: str, end: str) -> list[str]:
    space = " " * len(f"void {name}(")
    return [
        f"void {name}(double t, const double *{restrict} y,",
        f"{space}const double *{restrict} parameters,",
        f"{space}double *{restrict} result){end}",
    ]


def _header(made: Exported, stem: str, prototypes: Sequence[str]) -> list[str]:
    expansion, upper = made.expansion, stem.upper()
    unknowns = ", ".join(str(u) for u in expansion.problem.unknowns)
    text = [f"Slow flow of {unknowns} to order {expansion.order} in {expansion.problem.small}."]
    for paragraph in describe(expansion, fields="displacement" in made.routines):
        text += ["", *wrapped(paragraph, WIDTH)]
    text += [""] if made.absent else []
    for name, reason in made.absent.items():
        text += textwrap.wrap(plain(f"{name} is not defined here: {reason}."), WIDTH)
    text += ["", f"y holds {', '.join(made.state)}. Any consistent units.", ""]
    text += [f"Made by multiscale {multiscale.__version__}; C99, double precision, math.h only, no allocation."]
    named = zip(identifiers([x.upper() for x in made.parameters], []), made.parameters, strict=True)
    places = [f"    {upper}_P_{word} = {k}, /* {_comment([name])[0][3:-3]} */" for k, (word, name) in enumerate(named)]
    return [
        *_comment(text),
        f"#ifndef {upper}_H",
        f"#define {upper}_H",
        "",
        f"#define {upper}_STATES {len(made.state)}",
        f"#define {upper}_PARAMETERS {len(made.parameters)}",
        "",
        "/* Places of the parameters. */",
        "enum {",
        *places[:-1],
        places[-1].replace(", /*", " /*"),
        "};",
        "",
        "#ifdef __cplusplus",
        f"#define {upper}_RESTRICT",
        'extern "C" {',
        "#else",
        f"#define {upper}_RESTRICT restrict",
        "#endif",
        "",
        *prototypes,
        "#ifdef __cplusplus",
        "}",
        "#endif",
        "",
        "#endif",
    ]


def _function(stem: str, title: str, routine: Routine, made: Exported) -> tuple[list[str], int]:
    """The lines of one function, and how many intermediate values it keeps on the stack (0 if it is not split)."""
    name = f"{stem}_{title}"
    words = dict(zip(routine.arguments, words_of(["t", *made.state, *made.parameters], stem), strict=True))
    moving = ("time t", *routine.state)
    found = listing(routine.program.tape, routine.outputs, words, moving, spelling(stem))
    sources = {words[x]: f"y[{k}]" for k, x in enumerate(routine.state)}
    sources |= {
        words[x]: f"parameters[{k}]" for k, x in enumerate(a for a in routine.arguments if a.startswith("parameter "))
    }
    steps = [*found.coefficients, *found.steps]
    if len(steps) <= 2 * PART:
        body = [f"    const double {x.name} = {x.text};" for x in steps]
        body += [f"    result[{k}] = {text};" for k, text in enumerate(found.results)]
        loads = _loads([x.text for x in steps] + list(found.results), sources)
        return [*_prototype(name, "restrict", ""), "{", *_unused([*loads, *body]), *loads, *body, "}"], 0
    return _split(name, found, steps, sources)


def _loads(texts: Iterable[str], sources: Mapping[str, str]) -> list[str]:
    """Declarations of the inputs that the texts use."""
    used = {name for text in texts for name in names_in(text)}
    return [f"    const double {name} = {place};" for name, place in sources.items() if name in used]


def _unused(lines: Sequence[str]) -> list[str]:
    names = {name for line in lines for name in names_in(line)}
    return [f"    (void){name};" for name in ("t", "y", "parameters") if name not in names]


def _split(name: str, found: Listing, steps: Sequence[Assignment], sources: Mapping[str, str]) -> tuple[list[str], int]:
    """The function as parts that pass values in an array w."""
    parts = [steps[k : k + PART] for k in range(0, len(steps), PART)]
    made_in = {x.name: k for k, part in enumerate(parts) for x in part}
    needs = [[n for x in part for n in names_in(x.text) if made_in.get(n, k) != k] for k, part in enumerate(parts)]
    needs.append([n for text in found.results for n in names_in(text) if n in made_in])
    needs = [list(dict.fromkeys(names)) for names in needs]
    last = {n: k for k, names in enumerate(needs) for n in names}
    places: dict[str, int] = {}
    free: list[int] = []
    size, lines = 0, []
    ending: dict[int, list[str]] = {}
    for n, k in last.items():
        ending.setdefault(k, []).append(n)
    for k, part in enumerate(parts):
        body = [f"    const double {n} = w[{places[n]}];" for n in needs[k]]
        body += [f"    const double {x.name} = {x.text};" for x in part]
        free += [places[n] for n in ending.get(k, ())]
        for x in part:
            if x.name in last:
                places[x.name] = free.pop() if free else size
                size = max(size, places[x.name] + 1)
                body.append(f"    w[{places[x.name]}] = {x.name};")
        body = [*_loads([x.text for x in part], sources), *body]
        head = _prototype(f"{name}_{k + 1}", "restrict", "")
        head = [head[0].replace("void", "static void", 1), *(f"       {line}" for line in head[1:])]
        head[2] = head[2].replace("result", "w")
        lines += [*head, "{", *_unused(body), *body, "}", ""]
    calls = [f"    {name}_{k + 1}(t, y, parameters, w);" for k in range(len(parts))]
    results = [f"    result[{k}] = {text};" for k, text in enumerate(found.results)]
    kept = [f"    const double {n} = w[{places[n]}];" for n in needs[-1]]
    inside = [f"    double w[{size}];"]
    # Declarations first: the values that the results need are read after the calls.
    body = [*inside, *_loads(found.results, sources), *calls, *kept, *results]
    return [*lines, *_prototype(name, "restrict", ""), "{", *body, "}"], size
