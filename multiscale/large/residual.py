"""The residual of a large model along its slow flow, in double precision.

    R = M u'' + (G + ε^p C) u' + (K + ε^o K_1) u + ε^q Q(u, u) + ε^r T(u, u, u) − ε^s Σ b g(t)

u and its derivatives come from the published slow flow: z' = (dA/dt + iΦ' A) e^{iΦ}, and z'' from the same flow once
more, as Taylor polynomials in t of the monomials. The force is evaluated at the one vector u, so nothing is shared with
the hierarchy but the coefficients that are examined.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import numpy as np
import numpy.typing as npt
import sympy as sp

from multiscale.errors import MultiscaleError

if TYPE_CHECKING:
    from multiscale.large.model import ReducedModel

__all__ = ["ModelCertificate", "certify_model", "residual"]

Array = npt.NDArray[Any]
SHRINK = 0.5
TRIALS = 3
MARGIN = 0.3
SIZES = (0.01, 0.03, 0.1, 0.2, 0.4)
"""ε tried, in units of the one at which a level is as large as the leading one; the first whose R is well above
rounding is taken: a small one shows small errors."""
ROUNDING = 1e-14
CLEAR = 30


@dataclass(frozen=True)
class ModelCertificate:
    """How the residual of a reduced model falls with ε.

    Attributes
    ----------
    passed : bool
        Whether every exponent is at least order + 1, within 0.3.
    exponents : tuple of float
        log R / log ε between two values of ε, one for each random state; inf where the residual is rounding.
    small_values : tuple of float
        These two values.
    residuals : tuple of (float, float)
        The largest entry of R at each, relative to that of K u.
    """

    passed: bool
    exponents: tuple[float, ...]
    small_values: tuple[float, float]
    residuals: tuple[tuple[float, float], ...]

    def require(self) -> None:
        """Raises `MultiscaleError` unless it passed."""
        if not self.passed:
            raise MultiscaleError(
                f"the residual of the reduced model falls too slowly with ε: exponents {self.exponents}"
            )


def _product(a: Array, b: Array) -> Array:
    """Of two Taylor polynomials of degree 2 in t."""
    return np.array([a[0] * b[0], a[0] * b[1] + a[1] * b[0], a[0] * b[2] + a[1] * b[1] + a[2] * b[0]])


def _power(a: Array, e: int) -> Array:
    result = np.array([1.0, 0.0, 0.0], dtype=complex)
    for _ in range(e):
        result = _product(result, a)
    return result


def _jets(model: ReducedModel, t: float, y: Array, values: Mapping[str, Any]) -> dict[str, Array]:
    """{generator: its Taylor polynomial in time from t on}, along the Cartesian slow flow."""
    flow, slope = model.slow_flow.to_numpy("cartesian"), model.slow_flow.to_numpy("cartesian", wrt="state")
    own = [values[name] for name in flow.parameters]
    first = flow(t, y, *own)
    path = np.array([y, first, slope(t, y, *own) @ first / 2])
    jets = {}
    for k, (rate, phase) in enumerate(model.turning(values)):
        name, bar = model.computation.canonical.spec.pairs[k]
        jets[name] = np.exp(1j * (rate * t + phase)) * np.array([1.0, 1j * rate, -(rate**2) / 2])
        if k < len(model.modes):
            jets[name] = _product((path[:, 2 * k] - 1j * path[:, 2 * k + 1]) / 2, jets[name])
        jets[bar] = jets[name].conj()
    return jets


def motion(model: ReducedModel, t: float, y: Array, values: Mapping[str, Any]) -> tuple[Array, Array, Array]:
    """(u, u', u'') of the reconstruction."""
    jets = _jets(model, t, y, values)
    meanings = {name: values.get(str(x)) for name, x in model.computation.canonical.meanings}
    names = model.computation.canonical.spec.names
    small = values[str(model.expansion.problem.small.name)]
    total = np.zeros((3, model.size), dtype=complex)
    for n in range(model.order + 1):
        for exponents, c in model.computation.vectors(n).items():
            own = np.array([small**n, 0.0, 0.0], dtype=complex)
            for name, e in zip(names, exponents, strict=False):
                if e:
                    own = _product(own, _power(jets[name], e)) if name in jets else own * meanings[name] ** e
            total += np.multiply.outer(own, c)
    u = total.real
    return u[0], u[1], 2 * u[2]


def residual(model: ReducedModel, t: float, y: Array, values: Mapping[str, Any]) -> Array:
    """R at time t, from the slow state y."""
    return _left_over(model, t, y, values)[0]


def _left_over(model: ReducedModel, t: float, y: Array, values: Mapping[str, Any]) -> tuple[Array, float]:
    """(R, the largest entry of K u)."""
    displacement, velocity, acceleration = motion(model, t, y, values)
    matrices = model.matrices
    elastic = matrices["K"] @ displacement
    total = matrices["M"] @ acceleration + elastic
    if matrices["G"] is not None:
        total = total + matrices["G"] @ velocity
    for coefficient, shape in model.weak:
        total = total + _number(model, coefficient, t, values) * shape.value(displacement, velocity)
    return total, float(np.max(np.abs(elastic)))


def _number(model: ReducedModel, coefficient: sp.Expr, t: float, values: Mapping[str, Any]) -> float:
    numbers = {s: values[s.name] for s in coefficient.free_symbols if s.name in values}
    return float(coefficient.subs({**numbers, model.expansion.problem.time: t}))


def certify_model(model: ReducedModel, parameters: Mapping[Any, Any], seed: int) -> ModelCertificate:
    """Random states of the size that makes the weak terms O(ε), at two values of ε."""
    rng = np.random.default_rng(seed)
    given = {getattr(s, "name", s): float(x) for s, x in parameters.items()}
    for s in model.expansion.problem.parameters:
        given.setdefault(s.name, float(rng.uniform(0.3, 1.0)))
    states = [rng.normal(size=2 * len(model.modes)) for _ in range(TRIALS)]
    times = rng.uniform(0, 2 * np.pi / model.modes[0].frequency, TRIALS)
    for size in SIZES:
        start = size * _unit(model, given)
        pair = (start, start * SHRINK)
        found = [_pair(model, float(t), y, given, pair) for t, y in zip(times, states, strict=True)]
        if all(low > CLEAR * floor for _, low, floor in found):
            break
    exponents = tuple(
        float(np.log(low / high) / np.log(SHRINK)) if low > floor else np.inf for high, low, floor in found
    )
    passed = all(x >= model.order + 1 - MARGIN for x in exponents)
    return ModelCertificate(passed, exponents, pair, tuple((high, low) for high, low, _ in found))


def _pair(
    model: ReducedModel, t: float, y: Array, given: Mapping[str, Any], pair: tuple[float, float]
) -> tuple[float, float, float]:
    """(R at the larger ε, R at the smaller, rounding), relative to K u."""
    name = str(model.expansion.problem.small.name)
    high, scale = _left_over(model, t, y, {**given, name: pair[0]})
    low, _ = _left_over(model, t, y, {**given, name: pair[1]})
    stiffest = float(np.max(np.abs(model.matrices["K"].data))) * float(np.max(np.abs(y)))
    floor = ROUNDING * max(1.0, stiffest / scale)
    return float(np.max(np.abs(high))) / scale, float(np.max(np.abs(low))) / scale, floor


def _unit(model: ReducedModel, values: Mapping[str, Any]) -> float:
    """The ε at which some level would be as large as the leading one, at amplitudes of 1."""
    z = {g: np.asarray(1.0) for pair in model.computation.canonical.spec.pairs for g in pair}
    sizes = [
        sum(abs(model.monomial(m, z, values)) * np.max(np.abs(c)) for m, c in model.computation.vectors(n).items())
        for n in range(model.order + 1)
    ]
    growth = [(x / sizes[0]) ** (1 / n) for n, x in enumerate(sizes[1:], start=1) if x]
    frequency, flow = model.modes[0].frequency, model.slow_flow.to_numpy("cartesian")
    y = np.ones(2 * len(model.modes))
    rate = flow(0.0, y, *(1.0 if s == str(model.expansion.problem.small.name) else values[s] for s in flow.parameters))
    return float(1 / max([*growth, (np.max(np.abs(rate)) / frequency) ** (1 / model.order), 1e-300]))
