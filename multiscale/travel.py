"""Pickling of SymPy's undefined functions where SymPy itself looks for them by name in some module (through 1.14).

Results hold functions of time, u(t), whose class is made on the spot; it travels as its name and assumptions.
"""

from __future__ import annotations

import copyreg
from typing import Any

import sympy as sp
from sympy.core.function import UndefinedFunction

__all__ = ["rebuilt"]


def rebuilt(name: str, assumptions: dict[str, Any]) -> Any:
    """The undefined function of a name."""
    return sp.Function(name, **assumptions)


def _reduced(function: Any) -> tuple[Any, ...]:
    return rebuilt, (function.__name__, dict(function._kwargs))


if not {"__reduce__", "__reduce_ex__"} & vars(UndefinedFunction).keys():
    copyreg.pickle(UndefinedFunction, _reduced)
