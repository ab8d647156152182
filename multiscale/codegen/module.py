"""A result as one Python file that needs only NumPy: documented, laid out, the same byte for byte on every run.

The file holds ``rhs``, ``jacobian``, ``frequency`` and ``displacement``, called as f(t, y, *parameters) like every
generated function of the library, ``parameters`` to order values by name, and the change between Cartesian and polar
state. Under each function lies its kernel, which takes and returns scalars and has neither branches nor in-place
writes, so that just-in-time compilers accept it as it stands.
"""

from __future__ import annotations

import re
import textwrap
from collections.abc import Sequence
from os import PathLike
from pathlib import Path

import multiscale
from multiscale.codegen.description import Paragraph, describe, plain, wrapped
from multiscale.codegen.module_averages import averaging_kernel, averaging_runtime
from multiscale.codegen.module_text import COMPLETED, EVALUATED, MISSING, POLAR
from multiscale.codegen.python_kernel import call, identifiers_of, kernel, quoted, sequence, signature, words_for
from multiscale.codegen.routines import FUNCTIONS, Exported, averages, exported
from multiscale.codegen.runtime import RUNTIME
from multiscale.codegen.statements import listing
from multiscale.errors import EvaluationError
from multiscale.expansion import Expansion

__all__ = ["module_source", "write_module"]

WIDTH = 84
_ALWAYS = ("PARAMETERS", "PHASES", "STATE", "parameters", "to_cartesian", "to_polar")
_TAKEN = {"np", "y", "PARAMETERS", "_evaluated", *FUNCTIONS, *(f"{name}_kernel" for name in FUNCTIONS)}
_SUMMARIES = {
    "rhs": "Rate of change of the slow state",
    "jacobian": "Derivative of the rate of change by the state, row by row",
    "frequency": "Frequency at a slow state",
    "displacement": "The motion at time t from a slow state",
}


def write_module(
    expansion: Expansion,
    path: str | PathLike[str],
    *,
    functions: Sequence[str] = FUNCTIONS,
    namespace: str = "numpy",
) -> Path:
    """Write an expansion as a Python module that stands alone.

    Parameters
    ----------
    expansion : Expansion
    path : path of the file to write, which is replaced if it exists
    functions : names among "rhs", "jacobian", "frequency", "displacement"
        What the file holds. The file of a large flow is much shorter without "displacement".
    namespace : str
        The array library that the file imports: "numpy", or one with the same functions, such as "jax.numpy".

    Returns
    -------
    Path
        Where the file was written. It documents equations, order, conventions, relations, assumptions and remarks.
        Its functions have the shapes of `NumpyFunction`; ``frequency`` has one component for each mode if there are
        several, and raises where the frequency is no function of the amplitude.

    Raises
    ------
    EvaluationError
        `expansion` is no Expansion; a name in `functions` or `namespace` is none; a force is a Python function.

    Examples
    --------
    >>> import runpy, tempfile, pathlib, sympy as sp, multiscale as ms
    >>> t = sp.Symbol("t", real=True)
    >>> eps = sp.Symbol("epsilon", positive=True)
    >>> u = sp.Function("u")(t)
    >>> result = ms.expand(ms.Problem(u.diff(t, 2) + u + eps*u**3, u, small=eps), order=1)
    >>> with tempfile.TemporaryDirectory() as folder:
    ...     flow = runpy.run_path(str(ms.write_module(result, pathlib.Path(folder) / "cubic.py")))
    >>> flow["PARAMETERS"]
    ('epsilon',)
    >>> [float(x) for x in flow["rhs"](0.0, [0.5, 2.0], *flow["parameters"](epsilon=0.5))]
    [1.59375, -0.3984375]
    """
    source = module_source(expansion, functions=functions, namespace=namespace)
    target = Path(path)
    target.write_text(source, encoding="ascii", newline="\n")
    return target


def module_source(expansion: Expansion, *, functions: Sequence[str] = FUNCTIONS, namespace: str = "numpy") -> str:
    """The text that `write_module` writes."""
    if not isinstance(namespace, str) or not re.fullmatch(r"[A-Za-z_]\w*(\.[A-Za-z_]\w*)*", namespace, re.ASCII):
        raise EvaluationError(f"namespace is {namespace!r}: expected the name of a module, such as 'jax.numpy'")
    made = exported(expansion, functions, averaging=namespace == "numpy")
    called: set[str] = set()
    blocks = [
        *_flow_functions(made, called),
        *_parameter_functions(made, called),
        POLAR.strip().splitlines(),
        EVALUATED.strip().splitlines(),
    ]
    lines = [*_docstring(made, namespace), "", f"import {namespace} as np"]
    plain_functions = sorted(called - RUNTIME.keys())
    lines += [f"from {namespace} import {', '.join(plain_functions)}"] if plain_functions else []
    lines += ["", *_constants(made)]
    lines += ["", "", *averaging_runtime(called)] if called & RUNTIME.keys() else []
    for block in blocks:
        lines += ["", "", *block]
    return "\n".join(lines) + "\n"


def _docstring(made: Exported, namespace: str) -> list[str]:
    expansion = made.expansion
    unknowns = ", ".join(str(u) for u in expansion.problem.unknowns)
    title = f"Slow flow of {unknowns} to order {expansion.order} in {expansion.problem.small}."
    lines = textwrap.wrap(plain(title), WIDTH)
    for paragraph in (*describe(expansion, fields="displacement" in made.routines), _contents(made)):
        lines += ["", *wrapped(paragraph, WIDTH)]
    needs = "NumPy" if namespace == "numpy" else namespace
    lines += ["", f"Made by multiscale {multiscale.__version__}; needs {needs} only."]
    escaped = [_inside_docstring(line) for line in lines]
    return [f'"""{escaped[0]}', *escaped[1:], '"""']


def _inside_docstring(line: str) -> str:
    return line.replace("\\", "\\\\").replace('"', '\\"' if '"""' in line else '"').rstrip()


def _contents(made: Exported) -> Paragraph:
    problem, order = made.expansion.problem, made.expansion.order
    state, polar = ", ".join(made.state), ", ".join(_polar_names(made))
    unknowns = ", ".join(u.func.__name__ for u in problem.unknowns)
    what = {
        "rhs": f"d({state})/dt in physical time, all orders through {problem.small}**{order} together",
        "jacobian": "derivative of rhs by the state, row by row",
        "frequency": f"frequency of each mode at a state, through {problem.small}**{order}",
        "displacement": f"{unknowns} at time t from a state, through {problem.small}**{order}",
    }
    rows = [f"{name}: {what[name]}" for name in made.routines]
    rows += [f"{name}: not defined here; {reason}" for name, reason in made.absent.items()]
    rows += [
        f"to_polar, to_cartesian: between ({state}) and ({polar})",
        "Functions are called as f(t, y, *parameters), the parameters in the order of PARAMETERS; parameters(...) "
        "makes that tuple from names.",
        "y has shape (n,) or (n,) + S. With B the broadcast of t, S and the parameters, vectors have shape (n,) + B "
        "and Jacobians (n, n) + B. Any consistent units.",
        "The kernel of a function, such as rhs_kernel, takes and returns scalars (or arrays of one shape), without "
        "branches or in-place writes: just-in-time compilers accept it.",
    ]
    return Paragraph("Contents", formulas=tuple(plain(row) for row in rows))


def _polar_names(made: Exported) -> list[str]:
    s = made.expansion.symbols
    return [str(x) for x in (*s.a, *s.gamma, *made.expansion.slow_flow.cyclic)]


def _constants(made: Exported) -> list[str]:
    frame = made.expansion.computation.frame
    phases = [*frame.resonant, *(tuple(int(k == j) for k in range(frame.modes)) for j in frame.cyclic)]
    rows = [f"({', '.join(map(str, row))}{',' if len(row) == 1 else ''})" for row in phases]
    public = sorted([*_ALWAYS, *made.routines, *made.absent, *(f"{name}_kernel" for name in made.routines)])
    return [
        *sequence("__all__", [quoted(x) for x in public], "[]"),
        "",
        *sequence("PARAMETERS", [quoted(x) for x in made.parameters]),
        '"""Names of the parameters, in the order in which every function takes them."""',
        "",
        *sequence("STATE", [quoted(x) for x in made.state]),
        '"""Names of the components of y."""',
        "",
        *sequence("PHASES", rows),
        '"""The phases of the polar state are PHASES @ delta, delta = -arctan2(q, p)."""',
    ]


def _flow_functions(made: Exported, called: set[str]) -> list[list[str]]:
    """Each function and its kernel; the NumPy functions that they call are added to `called`."""
    blocks = []
    for name, routine in made.routines.items():
        words = words_for(routine, made.state, _TAKEN)
        time, *others = (words[x] for x in routine.arguments)
        values = others[len(made.state) :]
        lines = [*signature(name, [time, "y", *values]), f'    """{_SUMMARIES[name]}."""']
        lines += sequence("values", values, indent=4)
        lines += call("return _evaluated", [f"{name}_kernel", str(routine.shape), time, "y", "values"], indent=4)
        if averages(routine):
            inside, needed = averaging_kernel(f"{name}_kernel", routine, f"{_SUMMARIES[name]}, as scalars.")
        else:
            inside, found = kernel(f"{name}_kernel", routine, words, f"{_SUMMARIES[name]}, as scalars.")
            needed = found.functions
        called |= set(needed)
        blocks += [lines, inside]
    for name, reason in made.absent.items():
        parts = textwrap.wrap(plain(reason), 60)
        parts = [*(f"{part} " for part in parts[:-1]), parts[-1]]
        lines = [f"def {name}(t, y, *parameters):", '    """Not defined for this problem."""']
        raised = call("raise NotImplementedError", [quoted(parts[0])], indent=4)
        if len(parts) > 1:
            raised = ["    raise NotImplementedError(", *(f"        {quoted(part)}" for part in parts), "    )"]
        blocks.append([*lines, *raised])
    return blocks


def _parameter_functions(made: Exported, called: set[str]) -> list[list[str]]:
    """``parameters``, and the relations that it inverts."""
    blocks, steps = [], []
    for k, relation in enumerate(made.relations, start=1):
        words = identifiers_of(relation.arguments, _TAKEN)
        inputs = dict(zip((f"parameter {name}" for name in relation.arguments), words, strict=True))
        found = listing(relation.tape, [relation.output], inputs)
        called |= set(found.functions)
        heading = _inside_docstring(plain(f"{relation.detuning or 'The detuning'} from its relation."))
        lines = [*signature(f"_relation_{k}", words), f'    """{heading}"""']
        lines += [f"    {x.name} = {x.text}" for x in found.coefficients]
        blocks.append([*lines, f"    return {found.results[0]}"])
        names = [_tuple(relation.given), quoted(relation.detuning), _tuple(relation.arguments), f"_relation_{k}"]
        steps += call("found = _completed", ["found", *names], indent=4)
    if blocks:
        blocks.append(COMPLETED.strip().splitlines())
    eliminated = sorted({name for r in made.relations for name in r.given} - set(made.parameters))
    ready = ", ".join(f"{quoted(name)}: {value}" for name, value in made.defaults.items())
    lines, allowed = _parameters_head(eliminated)
    lines += [
        "    given = {**(mapping or {}), **by_name}",
        f"    found = {{{ready}}}",
        "    for name, value in given.items():",
        f"        if str(name) not in {allowed}:",
        f"            raise ValueError(f\"unknown parameter {{name}}: {{', '.join({allowed})}}\")",
        "        found[str(name)] = value",
        *steps,
        *MISSING.splitlines(),
    ]
    return [*blocks, lines]


def _parameters_head(eliminated: Sequence[str]) -> tuple[list[str], str]:
    """The first lines of ``parameters``, and what holds the names that it takes."""
    summary = '    """Values in the order of PARAMETERS, from their names.'
    lines = ["def parameters(mapping=None, /, **by_name):", summary]
    if not eliminated:
        lines[-1] += '"""'
        return lines, "PARAMETERS"
    told = f"{', '.join(eliminated)} may be given too: relations determine the rest, and must agree."
    text = textwrap.wrap(_inside_docstring(plain(told)), WIDTH, initial_indent="    ", subsequent_indent="    ")
    names = sequence("allowed", ["*PARAMETERS", *map(quoted, eliminated)], indent=4)
    return [*lines, "", *text, '    """', *names], "allowed"


def _tuple(names: Sequence[str]) -> str:
    return f"({', '.join(map(quoted, names))}{',' if len(names) == 1 else ''})"
