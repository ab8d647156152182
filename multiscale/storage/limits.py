"""What a stored text may hold at most: everything is checked before it is built, so that no text can exhaust memory.

The limits are far above what an expansion needs and far below what a machine has.
"""

from __future__ import annotations

from collections.abc import Sequence
from math import isfinite
from typing import Any

import sympy as sp

from multiscale.errors import StorageError

__all__ = [
    "BITS",
    "CHARACTERS",
    "DEPTH",
    "NODES",
    "checked_name",
    "field",
    "hexadecimal",
    "integer",
    "read_float",
    "refuse",
    "sequence",
    "shown",
    "spelled",
    "spelled_float",
]

CHARACTERS = 500_000_000
NODES = 1_000_000
DEPTH = 200
BITS = 1_000_000
PRECISION = 10_000
"""Bits of a floating-point number."""
_DECIMAL = 4000  # Python refuses decimal integers of more digits; longer ones are written in base 16.
_NAME = 100


def refuse(what: str) -> StorageError:
    """The error for a text that is not a stored expansion."""
    return StorageError(f"the text is not a stored expansion of this library: {what}")


def field(document: Any, name: str) -> Any:
    """An entry of a JSON object."""
    if not isinstance(document, dict) or name not in document:
        raise refuse(f"it has no field {name!r}")
    return document[name]


def spelled(value: int) -> int | str:
    """An integer as JSON writes it."""
    return int(value) if abs(value) < 2**53 else str(value) if value.bit_length() < 3 * _DECIMAL else hex(value)


def shown(x: Any) -> str:
    """The beginning of a value, for an error: neither a long number nor deep nesting may make an error of its own."""
    if isinstance(x, int) and x.bit_length() > 256:
        return f"a number of {x.bit_length()} bits"
    return str(x)[:40] if isinstance(x, str | int | float) or x is None else f"a {type(x).__name__}"


def integer(x: Any, what: str, least: int | None = None, most: int | None = None) -> int:
    """The integer of its JSON form, within bounds."""
    if isinstance(x, str) and len(x) <= BITS // 4:
        digits = x.removeprefix("-")
        if digits.startswith("0x") and all(c in "0123456789abcdef" for c in digits[2:]) and len(digits) > 2:
            x = int(x, 16)
        elif digits.isascii() and digits.isdigit() and len(digits) <= _DECIMAL:
            x = int(x)
    if isinstance(x, bool) or not isinstance(x, int):
        raise refuse(f"{what} is {shown(x)!r}, expected an integer")
    if (least is not None and x < least) or (most is not None and x > most):
        raise refuse(f"{what} is {shown(x)}, outside {least} … {most}")
    return x


def hexadecimal(x: Any, what: str) -> float:
    """The finite float of its hexadecimal form."""
    try:
        value = float.fromhex(x)
    except (TypeError, ValueError, OverflowError):
        raise refuse(f"{what} is {shown(x)!r}, expected a hexadecimal number") from None
    if not isfinite(value):
        raise refuse(f"{what} is {value}")
    return value


def sequence(x: Any, what: str, length: int | None = None) -> Sequence[Any]:
    """A JSON array, of a given length where one is named."""
    if not isinstance(x, list) or (length is not None and len(x) != length):
        size = "" if length is None else f" of length {length}"
        raise refuse(f"{what} is {shown(x)!r}, expected an array{size}")
    return x


def checked_name(x: Any) -> str:
    """A name of a symbol or function: printable, short, and free of what could be taken for code."""
    if not isinstance(x, str) or not x or len(x) > _NAME or not x.isprintable():
        raise refuse(f"the name {shown(x)!r} is not a short printable text")
    if any(c in "()[];:=\"'`@#" for c in x) or "__" in x:
        raise refuse(f"the name {x!r} has characters that no stored symbol has")
    return x


def spelled_float(x: sp.Float) -> list[Any]:
    """[sign, mantissa, exponent, precision] of (−1)^sign · mantissa · 2^exponent."""
    sign, mantissa, exponent, _ = x._mpf_
    return [int(sign), spelled(int(mantissa)), int(exponent), int(x._prec)]


def read_float(parts: Any) -> sp.Float:
    """The float of `spelled_float`."""
    sign, mantissa, exponent, precision = sequence(parts, "a float", 4)
    whole = integer(mantissa, "a mantissa", 0)
    least = integer(exponent, "an exponent", -100_000, 100_000)
    number = (integer(sign, "a sign", 0, 1), whole, least, whole.bit_length())
    return sp.Float._new(number, integer(precision, "a precision", 1, PRECISION))
