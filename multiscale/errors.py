"""The exceptions and warnings of the library, a small tree.

Every message says what was given, what was expected, and what to write instead, and names the offending term.
"""

from __future__ import annotations

__all__ = [
    "EvaluationError",
    "MultiscaleError",
    "OrderingWarning",
    "ProblemError",
    "ResonanceError",
    "SmallDivisorWarning",
    "StorageError",
    "UnsupportedTermError",
]


class MultiscaleError(ValueError):
    """Base class of every error this library raises on purpose."""


class ProblemError(MultiscaleError):
    """The statement of the problem is incomplete, contradictory or malformed."""


class UnsupportedTermError(MultiscaleError):
    """A term of the equations lies outside the class that can be expanded; the message names it and the remedy."""


class ResonanceError(MultiscaleError):
    """A combination of frequencies meets a natural frequency and no bounded solution exists as stated."""


class EvaluationError(MultiscaleError):
    """A numeric function was called with wrong, missing, contradictory or non-numeric values."""


class StorageError(MultiscaleError):
    """Stored text could not be read back, or was refused."""


class SmallDivisorWarning(UserWarning):
    """A numeric combination of frequencies is close to a natural frequency; the expansion holds only very near zero."""


class OrderingWarning(UserWarning):
    """The orders assigned to terms make a result incomplete or leave a parameter without effect."""
