"""Forces averaged over a cycle in a module of its own: the text of `multiscale.codegen.runtime` travels with it.

A kernel that calls quadratures is written as it is generated for use here, with the integrands in front of it.
"""

from __future__ import annotations

import inspect
import re

from multiscale.codegen import runtime
from multiscale.codegen.functions import Routine
from multiscale.codegen.printer import source

__all__ = ["averaging_kernel", "averaging_runtime"]

_LEFT_OUT = re.compile(r"^(from __future__ .*|__all__ = .*|import numpy as np)\n", re.MULTILINE)


def averaging_kernel(name: str, routine: Routine, heading: str) -> tuple[list[str], tuple[str, ...]]:
    """(lines of the kernel `name` with its integrands, the functions that they call)."""
    text, functions = source(routine.program.tape, routine.outputs, routine.arguments, heading)
    text = re.sub(r"\b_integrand(\d+)\b", rf"_{name}_integrand\1", text).replace("def kernel(", f"def {name}(", 1)
    return text.rstrip("\n").split("\n"), functions


def averaging_runtime(functions: set[str]) -> list[str]:
    """The lines that define those of `functions` that are no plain NumPy functions."""
    text = inspect.getsource(runtime)
    text = _LEFT_OUT.sub("", text.removeprefix(f'"""{inspect.getdoc(runtime)}').partition('"""\n')[2])
    named = [x for x in sorted(functions & runtime.RUNTIME.keys()) if not callable(getattr(runtime, x, None))]
    return [*text.encode("ascii", "replace").decode().strip().split("\n"), *(f'{x} = RUNTIME["{x}"]' for x in named)]
