"""What a fit needs of a model: a prediction and its derivative, as functions of one vector x of unknown values."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import Any, Protocol

import numpy as np
import numpy.typing as npt

from multiscale.errors import EvaluationError

__all__ = ["Fit", "Model", "amplitude_slope", "fit"]

Array = npt.NDArray[Any]
UNDETERMINED = 1e-8
"""Combinations of parameters whose influence is smaller than this, relative to that of each, are not determined."""


class Model(Protocol):
    """A model of a measurement. Law: ``jacobian(x)[i, k]`` = ∂ ``predict(x)[i]`` / ∂ x[k], for x of `names`."""

    @property
    def names(self) -> tuple[str, ...]: ...
    def predict(self, x: npt.ArrayLike) -> Array: ...
    def jacobian(self, x: npt.ArrayLike) -> Array: ...


@dataclass(frozen=True, eq=False, repr=False)
class Fit:
    """Fitted values with their uncertainties.

    Attributes
    ----------
    values, uncertainties : {name: float}
        The uncertainty is the standard deviation for independent errors of equal size; with ``noise=None`` their size
        is taken from the misfit. It is infinite for values that the data do not determine, such as two parameters of
        which only the product matters.
    covariance : array (K, K)
        In the order of `values`.
    misfit : float
        Root mean square of data − prediction.
    """

    values: dict[str, float]
    uncertainties: dict[str, float]
    covariance: Array
    misfit: float

    def __repr__(self) -> str:
        rows = (f"{name} = {value:.6g} ± {self.uncertainties[name]:.2g}" for name, value in self.values.items())
        return f"Fit({', '.join(rows)}; misfit {self.misfit:.3g})"


def fit(
    model: Model,
    data: npt.ArrayLike,
    start: Mapping[str, float] | Sequence[float],
    *,
    noise: float | None = None,
    **options: Any,
) -> Fit:
    """Fit a model to data by least squares, with SciPy's ``least_squares`` and the model's own Jacobian.

    Parameters
    ----------
    model : RingDownModel or ResponseModel
        Or anything with ``names``, ``predict(x)`` and ``jacobian(x)``.
    data : array
        As `predict` returns it.
    start : mapping by name, or sequence in the order of ``model.names``
        Where the search begins.
    noise : float, optional
        Standard deviation of the errors of the data, where it is known.
    **options
        Handed to ``scipy.optimize.least_squares``; by default every value is scaled by its start. ``bounds`` keep the
        search among values where the model exists, positive damping for instance.

    Raises
    ------
    EvaluationError
        A start that does not name every value once; data that are not finite or of another length; a noise that is not
        positive; no convergence.
    ImportError
        SciPy (extra ``check``) is not installed.

    Examples
    --------
    >>> import numpy as np, sympy as sp, multiscale as ms
    >>> t = sp.Symbol("t", real=True)
    >>> eps, mu, alpha = sp.symbols("epsilon mu alpha", positive=True)
    >>> u = sp.Function("u")(t)
    >>> equation = u.diff(t, 2) + u + eps*(2*mu*u.diff(t) + alpha*u**3)
    >>> result = ms.expand(ms.Problem(equation, u, small=eps), order=1)
    >>> model = ms.ring_down_model(result, np.linspace(0, 100, 400), free=["mu", "alpha"], known={"epsilon": 0.05})
    >>> record = model.predict([0.3, 1.2, 1.0, 0.5])
    >>> found = ms.fit(model, record, {"mu": 0.25, "alpha": 1.0, "p": 1.1, "q": 0.4})
    >>> {name: round(value, 6) for name, value in found.values.items()}
    {'mu': 0.3, 'alpha': 1.2, 'p': 1.0, 'q': 0.5}
    """
    try:
        from scipy.optimize import least_squares
    except ImportError:
        raise ImportError("fit needs SciPy: pip install 'multiscale-expansions[check]'") from None
    record = np.asarray(data, dtype=float)
    x = _start(model.names, start)
    if record.shape != (shape := model.predict(x).shape):
        raise EvaluationError(f"the data have shape {record.shape}, the model predicts {shape}: give as many")
    if not np.isfinite(record).all():
        raise EvaluationError("the data hold values that are not finite: leave them out of data and model")
    if noise is not None and not (np.isfinite(noise) and noise > 0):
        raise EvaluationError(f"noise is {noise!r}: expected a standard deviation > 0")
    if record.size <= len(x):
        raise EvaluationError(f"{record.size} data for {len(x)} unknown values: more data are needed")
    # In units of the data, since SciPy's gtol is no ratio: records in metres may be of the size of 1e-11.
    unit = float(np.abs(record).max()) or 1.0
    # A value that starts at zero is measured by the change that makes as much of a difference as the data are large.
    effect = np.sqrt(np.mean(np.square(model.jacobian(x) / unit), axis=0)) if (x == 0).any() else np.ones(len(x))
    scale = np.where(x == 0, 1 / np.where(effect > 0, effect, 1.0), np.abs(x))
    options = {"x_scale": scale, "xtol": 1e-12, "ftol": 1e-12, "gtol": 1e-12, **options}
    if "f_scale" in options:
        options["f_scale"] = options["f_scale"] / unit
    done = least_squares(
        lambda x: (model.predict(x) - record) / unit, x, jac=lambda x: model.jacobian(x) / unit, **options
    )
    if not done.success:
        raise EvaluationError(f"the fit did not converge ({done.message}): start nearer, or give max_nfev")
    variance = (noise / unit) ** 2 if noise is not None else 2 * done.cost / (record.size - len(x))
    covariance = _covariance(done.jac * scale) * variance * np.outer(scale, scale)
    deviation = np.sqrt(np.diag(covariance))
    return Fit(
        dict(zip(model.names, done.x.tolist(), strict=True)),
        dict(zip(model.names, deviation.tolist(), strict=True)),
        covariance,
        unit * float(np.sqrt(np.mean(done.fun**2))),
    )


def _covariance(jacobian: Array) -> Array:
    """(JᵀJ)^{-1}, with infinite variances for what J does not determine, J being right to about ten digits."""
    # In units that make every column a unit vector; a parameter without influence is its own null vector.
    norms = np.linalg.norm(jacobian, axis=0)
    units = np.where(norms > 0, norms, 1.0)
    _, sizes, rows = np.linalg.svd(jacobian / units, full_matrices=False)
    kept = sizes > UNDETERMINED
    inverse = (rows[kept].T / sizes[kept] ** 2) @ rows[kept] / np.outer(units, units)
    free = np.linalg.norm(rows[~kept], axis=0) > np.sqrt(UNDETERMINED)
    inverse[free, free] = np.inf
    return np.asarray(inverse)


def amplitude_slope(p: Array, q: Array, slope_p: Array, slope_q: Array) -> Array:
    """The derivative of √(p² + q²); 0 at rest, where it has none."""
    size = np.hypot(p, q)
    return np.asarray((p * slope_p + q * slope_q) / np.where(size > 0, size, 1.0))


def _start(names: Sequence[str], start: Mapping[str, float] | Sequence[float]) -> Array:
    if isinstance(start, Mapping):
        given = {str(getattr(key, "name", key)): value for key, value in start.items()}
        if given.keys() != set(names) or len(given) < len(start):
            raise EvaluationError(f"start names {', '.join(given)}: expected one value for each of {', '.join(names)}")
        start = [given[name] for name in names]
    x = np.array(start, dtype=float)
    if x.shape != (len(names),) or not np.isfinite(x).all():
        raise EvaluationError(f"start is {start!r}: expected {len(names)} finite values, for {', '.join(names)}")
    return x
