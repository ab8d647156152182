"""The amplitude in which a result is written: of the fundamental harmonic, or the peak."""

from __future__ import annotations

from dataclasses import replace

from multiscale.convention import CONVENTIONS, obstacle, to_fundamental, to_peak
from multiscale.errors import EvaluationError, UnsupportedTermError
from multiscale.expansion import Expansion

__all__ = ["with_amplitude"]


def with_amplitude(expansion: Expansion, amplitude: str) -> Expansion:
    """The same expansion written in another amplitude, for one undriven oscillator.

    The "peak" is half the distance from the largest to the smallest displacement over one turn of the phase at constant
    amplitude; for an odd motion it is the largest displacement. Slow flow, frequency, fields and everything made from
    them change together, through the order of the expansion; the phase is the same. Going there and back gives exactly
    what one began with.

    Parameters
    ----------
    expansion : Expansion
    amplitude : "fundamental" or "peak"

    Returns
    -------
    Expansion
        Its `Expansion.amplitude` says which it is.

    Raises
    ------
    UnsupportedTermError
        Several modes, a drive or slow parameters: the extremum of the motion is no function of one amplitude.
    EvaluationError
        Another word.

    Examples
    --------
    >>> import sympy as sp, multiscale as ms
    >>> t = sp.Symbol("t", real=True)
    >>> eps = sp.Symbol("epsilon", positive=True)
    >>> u = sp.Function("u")(t)
    >>> result = ms.expand(ms.Problem(u.diff(t, 2) + u + eps*u**3, u, small=eps), order=2)
    >>> result.frequency_corrections()
    (1, 3*a**2/8, -15*a**4/256)
    >>> peak = ms.with_amplitude(result, "peak")
    >>> peak.frequency_corrections()
    (1, 3*a**2/8, -21*a**4/256)
    """
    if not isinstance(expansion, Expansion):
        raise EvaluationError(f"with_amplitude was given a {type(expansion).__name__}: call expand first")
    if amplitude not in CONVENTIONS:
        raise EvaluationError(f"amplitude is {amplitude!r}: expected one of {', '.join(map(repr, CONVENTIONS))}")
    if amplitude == expansion.amplitude:
        return expansion
    if reason := obstacle(expansion.computation):
        raise UnsupportedTermError(
            f"the peak is defined for one undriven oscillator; {reason}. Use the amplitude of the fundamental, and "
            "`solution` or `to_numpy` for the displacement itself"
        )
    change = to_peak if amplitude == "peak" else to_fundamental
    return replace(expansion, amplitude=amplitude, computation=change(expansion.computation))
