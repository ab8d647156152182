"""An expansion as one JSON text.

    {"format": …, "version": 1, "library": …, "expressions": [nodes], "problem": {references},
     "order": N, "amplitude": …, "tolerance": …, "representation": …, "generators": [names],
     "reciprocals": …, "fields": …, "changes": …, "digest": SHA-256 of the rest}

The problem is stored as stated and the levels as exact polynomials; everything else follows from these two.
"""

from __future__ import annotations

import hashlib
import json
import warnings
from collections.abc import Mapping
from typing import TYPE_CHECKING, Any

from multiscale.algebra.polynomial import Frozen
from multiscale.computed import Snapshot, restore
from multiscale.errors import MultiscaleError, OrderingWarning, StorageError
from multiscale.expansion import Expansion
from multiscale.storage.expressions import Reader, Writer
from multiscale.storage.limits import CHARACTERS, field, hexadecimal, integer, refuse, sequence, shown
from multiscale.storage.polynomials import PolynomialReader, PolynomialWriter
from multiscale.storage.statement import read_problem, written_problem

if TYPE_CHECKING:
    from collections.abc import Iterable

__all__ = ["from_json", "to_json"]

FORMAT = "multiscale expansion"
VERSION = 1


def to_json(expansion: Expansion) -> str:
    """An expansion as text: exact, the same on every run, and readable by `from_json` in any later version.

    Parameters
    ----------
    expansion : Expansion

    Returns
    -------
    str
        JSON. The problem is stored as it was stated, the levels as exact polynomials.

    Raises
    ------
    StorageError
        The equations hold something that has no exact text, such as a Python function.

    Examples
    --------
    >>> import sympy as sp, multiscale as ms
    >>> t, eps = sp.symbols("t epsilon", positive=True)
    >>> u = sp.Function("u")(t)
    >>> result = ms.expand(ms.Problem(u.diff(t, 2) + u + eps*u**3, u, small=eps), order=2)
    >>> text = ms.to_json(result)
    >>> ms.from_json(text) == result
    True
    >>> ms.extend(ms.from_json(text), 3).frequency_corrections()[3]
    123*a**6/8192
    """
    from multiscale import __version__

    expressions, polynomials = Writer(), PolynomialWriter()
    snapshot = expansion.computation.snapshot()
    document = {
        "format": FORMAT,
        "version": VERSION,
        "library": __version__,
        "problem": written_problem(expansion.problem, expressions),
        "order": expansion.order,
        "amplitude": expansion.amplitude,
        "tolerance": float(expansion.tolerance).hex(),
        "representation": snapshot.representation,
        "reciprocals": [[name, polynomials.rows(p)] for name, p in snapshot.reciprocals],
        "fields": [[polynomials.rows(p) for p in level] for level in snapshot.fields],
        "changes": [[polynomials.rows(p) for p in level] for level in snapshot.changes],
    }
    document |= {"generators": polynomials.names, "expressions": expressions.nodes}
    return _spelled(document | {"digest": _digest(document)})


def _spelled(document: Mapping[str, Any]) -> str:
    return json.dumps(document, separators=(",", ":"), sort_keys=True)


def _digest(document: Mapping[str, Any]) -> str:
    """Tells damage, not malice: whoever alters a text can renew it."""
    return hashlib.sha256(_spelled(document).encode()).hexdigest()


def from_json(text: str) -> Expansion:
    """The expansion that `to_json` wrote.

    Nothing in the text is evaluated: it names functions from a fixed list and integers, all bounded in size.

    Parameters
    ----------
    text : str

    Returns
    -------
    Expansion
        Equal to the stored one; `extend` goes on from it.

    Raises
    ------
    StorageError
        The text is not a stored expansion, is of a later version, or was damaged.

    Examples
    --------
    >>> import multiscale as ms
    >>> ms.from_json("{}")
    Traceback (most recent call last):
    multiscale.errors.StorageError: the text is not a stored expansion of this library: it has no field 'format'
    """
    document = _document(text)
    expressions, polynomials = Reader(field(document, "expressions")), PolynomialReader(field(document, "generators"))
    order = integer(field(document, "order"), "the order", 0, 500)
    amplitude = field(document, "amplitude")
    if amplitude not in ("fundamental", "peak"):
        raise refuse(f"amplitude is {shown(amplitude)!r}")
    snapshot = _snapshot(document, polynomials)
    if len(snapshot.fields) != order + 1 or len(snapshot.changes) != order:
        raise refuse(f"order {order} with {len(snapshot.fields)} levels")
    try:
        with warnings.catch_warnings():
            warnings.simplefilter("ignore", OrderingWarning)  # given when the problem was stated
            problem = read_problem(field(document, "problem"), expressions)
        computation = restore(problem.canonical(max(order, 1)), snapshot)
    except StorageError:
        raise
    except MultiscaleError as error:
        raise refuse(f"its problem is not valid: {error}") from error
    except (KeyError, ValueError, TypeError, IndexError, AttributeError, ZeroDivisionError) as error:
        raise refuse(f"problem and levels do not fit together ({type(error).__name__}: {error})") from error
    return Expansion(problem, order, amplitude, _tolerance(document), computation=computation)


def _document(text: Any) -> Mapping[str, Any]:
    if not isinstance(text, str):
        raise StorageError(f"from_json was given a {type(text).__name__}: pass the text that to_json returned")
    if len(text) > CHARACTERS:
        raise refuse(f"{len(text)} characters, more than {CHARACTERS}")
    try:
        document = json.loads(text, parse_constant=_no_constant)
    except (ValueError, RecursionError) as error:
        raise refuse(f"it is not JSON ({error})") from None
    if not isinstance(document, dict):
        raise refuse("it is no JSON object")
    if field(document, "format") != FORMAT:
        raise refuse(f"its format is {shown(document['format'])!r}, expected {FORMAT!r}")
    version = integer(field(document, "version"), "the version", 1)
    if version > VERSION:
        raise StorageError(
            f"the text is of version {shown(version)}, this library reads up to version {VERSION}: install a newer one"
        )
    if field(document, "digest") != _digest({name: x for name, x in document.items() if name != "digest"}):
        raise refuse("its digest does not fit, so it was damaged on the way")
    return document


def _no_constant(name: str) -> Any:
    raise ValueError(f"{name} is not a number")


def _tolerance(document: Mapping[str, Any]) -> float:
    value = hexadecimal(field(document, "tolerance"), "the tolerance")
    if not 0 <= value < 1e6:
        raise refuse(f"the tolerance is {value}")
    return value


def _snapshot(document: Mapping[str, Any], polynomials: PolynomialReader) -> Snapshot:
    def levels(name: str) -> tuple[tuple[Frozen, ...], ...]:
        return tuple(_frozen(sequence(x, name), polynomials) for x in sequence(field(document, name), name))

    reciprocals = []
    for pair in sequence(field(document, "reciprocals"), "the reciprocals"):
        name, rows = sequence(pair, "a reciprocal", 2)
        if not isinstance(name, str):
            raise refuse(f"{shown(name)!r} where the name of a reciprocal was expected")
        reciprocals.append((name, polynomials.polynomial(rows)))
    representation = field(document, "representation")
    if representation not in ("auto", "complex", "mpmath"):
        raise refuse(f"its representation is {shown(representation)!r}")
    return Snapshot(tuple(reciprocals), levels("fields"), levels("changes"), representation)


def _frozen(rows: Iterable[Any], polynomials: PolynomialReader) -> tuple[Frozen, ...]:
    return tuple(polynomials.polynomial(x) for x in rows)
