"""Derivatives of the functions that steps on a tape call."""

from __future__ import annotations

from collections.abc import Callable, Mapping, Sequence
from fractions import Fraction
from typing import TYPE_CHECKING, Any

from multiscale.errors import EvaluationError

if TYPE_CHECKING:
    from multiscale.codegen.tape import Tape

__all__ = ["slope", "slope_of_several"]


def _over_root(t: Tape, x: int, sign: int) -> int:
    """±1/√(1 − x²), zero where x is cut off at ±1."""
    root = t.call("sqrt", t.sub(t.constant(1), t.mul(x, x)))
    return t.mul(t.constant(sign), t.call("inverse_or_zero", root))


def _bessel(t: Tape, name: str, x: int, order: int) -> int:
    """J_n' = ½ (J_{n−1} − J_{n+1}), J_0' = −J_1;  I_n' = ½ (I_{n−1} + I_{n+1}), I_0' = I_1 (DLMF 10.6.1, 10.29.1)."""
    if order == 0:
        above = t.call(name, x, 1)
        return t.neg(above) if name == "besselj" else above
    below, above = t.call(name, x, order - 1), t.call(name, x, order + 1)
    return t.mul(t.constant(Fraction(1, 2)), t.sub(below, above) if name == "besselj" else t.add(below, above))


_SLOPES: dict[str, Callable[[Any, int, int], int]] = {
    "sin": lambda t, x, value: t.call("cos", x),
    "cos": lambda t, x, value: t.neg(t.call("sin", x)),
    "exp": lambda t, x, value: value,
    "log": lambda t, x, value: t.div(t.constant(1), x),
    "sqrt": lambda t, x, value: t.div(t.constant(Fraction(1, 2)), value),
    # An amplitude, whose slope at rest counts as zero.
    "root": lambda t, x, value: t.mul(t.constant(Fraction(1, 2)), t.call("inverse_or_zero", value)),
    "tanh": lambda t, x, value: t.sub(t.constant(1), t.mul(value, value)),
    "absolute": lambda t, x, value: t.call("sign", x),
    "sign": lambda t, x, value: t.constant(0),
    "nonzero": lambda t, x, value: t.constant(0),
    "or_one": lambda t, x, value: t.call("nonzero", x),
    "inverse_or_zero": lambda t, x, value: t.neg(t.mul(value, value)),
    "reciprocal": lambda t, x, value: t.neg(t.power(t.call("inverse_or_zero", x), 2)),
    "clipped": lambda t, x, value: t.call("within", x),
    "within": lambda t, x, value: t.constant(0),
    "arcsin": lambda t, x, value: _over_root(t, x, 1),
    "arccos": lambda t, x, value: _over_root(t, x, -1),
    "arctan": lambda t, x, value: t.div(t.constant(1), t.add(t.constant(1), t.mul(x, x))),
    "arcsinh": lambda t, x, value: t.div(t.constant(1), t.call("sqrt", t.add(t.constant(1), t.mul(x, x)))),
    "gamma_function": lambda t, x, value: t.mul(value, t.call("digamma", x)),
    "positive": lambda t, x, value: t.constant(0),
}


def slope(tape: Tape, step: tuple[Any, ...], value: int) -> int:
    """The derivative of a function of one argument, from the step that calls it and its value."""
    name, x, literals = step[1], step[2], step[3:]
    if name in ("besselj", "besseli"):
        return _bessel(tape, name, x, *literals)
    if name not in _SLOPES:
        raise EvaluationError(f"no derivative of {name} is known here")
    return _SLOPES[name](tape, x, value)


def slope_of_several(tape: Tape, name: str, arguments: Sequence[int], rates: Mapping[int, int]) -> int:
    """d/ds of a function of several nodes: the chosen branch of a case, or a force law with its own derivative."""
    if name == "where":
        condition, first, second = arguments
        return tape.apply("where", condition, rates[first], rates[second])
    if name == "wave_zero":
        return _slope_of_zero(tape, arguments, rates)
    law = next((law for key, law in tape.laws.items() if _word(key) == name), None)
    if law is None or law.derivative is None or len(arguments) != 1:
        raise EvaluationError(
            f"the Jacobian needs the derivative of the force law {name.removeprefix('law_')}: "
            "pass ForceLaw(function, derivative=…) (a function of one argument), or do without the Jacobian"
        )
    return tape.mul(tape.apply(f"{name}_slope", *arguments), rates[arguments[0]])


def _slope_of_zero(t: Tape, arguments: Sequence[int], rates: Mapping[int, int]) -> int:
    """−(∂h/∂s)/(∂h/∂θ) at an angle where h = c_0 + Σ (a_k cos kθ + b_k sin kθ) vanishes."""
    angle = t.apply("wave_zero", *arguments)
    _, mean, *waves = arguments
    change, slope_there = rates[mean], t.constant(0)
    for k, (a, b) in enumerate(zip(waves[::2], waves[1::2], strict=True), start=1):
        number = t.constant(k)
        turned = t.mul(number, angle)
        cosine, sine = t.call("cos", turned), t.call("sin", turned)
        change = t.add(change, t.add(t.mul(rates[a], cosine), t.mul(rates[b], sine)))
        slope_there = t.add(slope_there, t.mul(number, t.sub(t.mul(b, cosine), t.mul(a, sine))))
    return t.neg(t.mul(change, t.call("inverse_or_zero", slope_there)))


def _word(name: str) -> str:
    from multiscale.problem.force_law import law_name

    return law_name(name)
