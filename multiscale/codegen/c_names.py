"""Identifiers of C for names that users give: neither C's own, nor reserved, nor like the names of the file itself."""

from __future__ import annotations

import re
from collections.abc import Iterable

from multiscale.codegen.c_functions import WORDS
from multiscale.codegen.printer import identifiers

__all__ = ["words_of"]

_TAKEN = frozenset([
    "auto", "break", "case", "char", "const", "continue", "default", "do", "double", "else", "enum", "extern",
    "float", "for", "goto", "if", "inline", "int", "long", "register", "restrict", "return", "short", "signed",
    "sizeof", "static", "struct", "switch", "typedef", "union", "unsigned", "void", "volatile", "while", "y", "w",
    "parameters", "result", "main", "NAN", "INFINITY", "HUGE_VAL", "HUGE_VALF", "HUGE_VALL", "linux", "unix", "asm",
    "typeof", "bool", "true", "false", "nullptr", "constexpr", "alignas", "alignof", "static_assert",
    "thread_local",
])  # fmt: skip
"""Keywords of C99 and of later standards, macros of math.h and of common compilers, names of the arguments."""
_MACROS = r"_[A-Z_]|(FP|MATH|HUGE|INT|FLT)_|math_errhandling"
"""How reserved names and further macros of math.h begin."""


def words_of(names: Iterable[str], stem: str) -> list[str]:
    """An identifier for each name in the file called `stem`."""
    own = re.compile(rf"(?i:{stem})_|{_MACROS}")
    found = []
    for name in names:
        (word,) = identifiers([name])
        found.append(f"x_{name}" if own.match(word) else name)
    return identifiers(found, _TAKEN | WORDS)
