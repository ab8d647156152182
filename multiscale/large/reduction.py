"""`reduce_model`: from matrices and tensors to a slow flow of a few modes."""

from __future__ import annotations

import warnings
from collections.abc import Callable, Mapping, Sequence
from time import thread_time
from typing import Any

import sympy as sp

from multiscale.errors import OrderingWarning, ProblemError, SmallDivisorWarning
from multiscale.expansion import Expansion, _checked_order, _taken_to
from multiscale.forces.multilinear import Load, Matrix, Shape
from multiscale.large.computation import begin_large
from multiscale.large.eigenmodes import eigenmodes
from multiscale.large.matrices import loads_of, matrix_of, orders_of, scipy_sparse, spring_shapes, tensor_shape
from multiscale.large.model import ReducedModel
from multiscale.large.statement import ModelStatement, state
from multiscale.level import Level

__all__ = ["reduce_model"]


def reduce_model(
    M: Any,
    K: Any,
    *,
    order: int,
    C: Any = None,
    G: Any = None,
    K1: Any = None,
    quadratic: Any = None,
    cubic: Any = None,
    springs: Any = None,
    drive: Any = None,
    modes: Sequence[int | float] = (0,),
    resonances: Mapping[sp.Expr, sp.Expr] | Sequence[sp.Eq] = (),
    references: Mapping[int, int] | None = None,
    scales: Mapping[str, Any] | None = None,
    orders: Mapping[str, int] | None = None,
    small: sp.Symbol | None = None,
    time: sp.Symbol | None = None,
    tolerance: float = 0.01,
    on_level: Callable[[Level], object] | None = None,
) -> ReducedModel:
    """Reduce M u'' + (ε^p C + G) u' + (K + ε^o K_1) u + ε^q Q(u, u) + ε^r T(u, u, u) = ε^s Σ b g(t) to a few modes.

    For models of hundreds to some ten thousands of degrees of freedom. Coefficients are floating-point numbers; the
    other modes are not left out but follow the carried ones at every level, by sparse solves.

    Parameters
    ----------
    M, K : sparse or dense matrices (n, n)
        Inertia and stiffness. Any consistent units.
    order : int ≥ 1
        As in `expand`.
    C, G : matrices (n, n), optional
        Weak damping, and gyroscopic or other velocity terms of leading order.
    K1 : matrix (n, n), optional
        Weak stiffness. With ``scales={"K1": h*cos(Omega*t)}`` it is a parametric excitation.
    quadratic, cubic : optional
        Q and T on the left-hand side, as ``(indices, values)`` with indices of shape (entries, 3) or (entries, 4), the
        equation first; as a mapping ``{(i, j, k): c}``; as an array; or as a symmetric multilinear function of two or
        three vectors of shape (n,), complex ones too.
    springs : Springs, optional
        Nonlinear springs, the quickest form.
    drive : pair (b, g) or sequence of pairs, optional
        b of shape (n,), g an expression such as ``f*cos(Omega*t)``. Its symbols are parameters of the result.
    modes : sequence, default (0,)
        The modes to carry: integers count from 0 by increasing frequency, floats ask for the mode nearest to them.
    resonances : mapping or sequence of Eq, optional
        As in `Problem`; ``omega_1``, ``omega_2``, … are the carried modes in the order of `modes`. A relation between
        two of them, ``{omega_2: 2*omega_1 + eps*sigma}``, splits K along the second one: M and K symmetric, no G.
    references : mapping, optional
        ``{place in modes: degree of freedom}`` in which the amplitude is measured; default: where the mode is largest.
    scales : mapping, optional
        Expressions in parameters that multiply "C", "K1", "quadratic", "cubic", such as ``{"C": mu}``.
    orders : mapping, optional
        The powers of ε, by default ``{"C": 2, "K1": 2, "quadratic": 1, "cubic": 2, "drive": 2}``.
    small, time : Symbol, optional
        Default: a positive ``epsilon``, and the ``t`` of the drives.
    tolerance : float
        Relative distance below which a combination of frequencies counts as close to a mode.
    on_level : callable, optional
        Called with each finished `Level`, as in `expand`; the logger "multiscale" reports levels too.

    Raises
    ------
    ProblemError
        Shapes, entries, a mode that does not oscillate.
    ResonanceError
        A combination of the carried frequencies meets that of a mode that is not carried.
    ImportError
        SciPy is not installed.

    Warns
    -----
    SmallDivisorWarning
        A combination that the forcing holds comes close to a mode, carried or not.
    OrderingWarning
        `order=1` with quadratic terms.

    Examples
    --------
    A chain of 200 masses between walls, on a soft foundation, its springs hardening:

    >>> import numpy as np, scipy.sparse as sparse, multiscale as ms
    >>> n = 200
    >>> stretch = sparse.diags([1.0, -1.0], [0, -1], shape=(n + 1, n))
    >>> K = stretch.T @ stretch + 0.003 * sparse.identity(n)
    >>> model = ms.reduce_model(sparse.identity(n), K, order=3, springs=ms.Springs(stretch, cubic=1.0))
    >>> model
    ReducedModel of 200 degrees of freedom, order 3, frequencies 0.0569586

    The frequency at an amplitude of 20, far less than the length of the chain (so ε may be 1), and the displacement of
    two masses in that motion:

    >>> round(float(model.expansion.frequency_to_numpy().bind(epsilon=1.0)(0.0, [20.0, 0.0])), 6)
    0.057077
    >>> model.displacement(0.0, [20.0, 0.0], {"epsilon": 1.0}, dofs=[49, 100]).round(3)
    array([13.897, 20.   ])
    >>> model.certify().passed
    True
    """
    scipy_sparse()
    order = _checked_order(order, 1)
    K = matrix_of("K", K)
    size = K.shape[0]
    M = matrix_of("M", M, size)
    C, G, K1 = (None if x is None else matrix_of(name, x, size) for name, x in (("C", C), ("G", G), ("K1", K1)))
    powers, loads = orders_of(orders), loads_of(drive, size)
    shapes: dict[str, list[Shape]] = {} if springs is None else spring_shapes(springs, size)
    if C is not None:
        shapes["C"] = [Matrix(lambda x: C @ x, 1)]
    if K1 is not None:
        shapes["K1"] = [Matrix(lambda x: K1 @ x, 0)]
    for name, given, degree in (("quadratic", quadratic, 2), ("cubic", cubic, 3)):
        if given is not None:
            shapes.setdefault(name, []).append(tensor_shape(name, given, size, degree))
    if not shapes and not loads:
        raise ProblemError("the model is linear, undamped and free: give cubic, quadratic, springs, C, K1 or drive")
    if strange := set(scales or {}) - set(shapes):
        raise ProblemError(f"scales has {', '.join(sorted(strange))}: expected some of {', '.join(sorted(shapes))}")
    begun_at = thread_time()
    found = eigenmodes(M, G, K, modes, references or {})
    finding = thread_time() - begun_at
    factors = {name: (scales or {}).get(name, 1) for name in shapes}
    statement = state([m.frequency for m in found], factors, [g for _, g in loads], powers, resonances, small, time)
    statement.check_detunings()
    matrices = {"M": M, "G": G, "K": K}
    hard = powers["drive"] == 0
    begun = begin_large(statement, order, matrices, found, shapes, [b for b, _ in loads], tolerance, hard)
    linear: Any = begun.hierarchy.linear_part
    linear.bordered.watch.finding = finding
    expansion = _taken_to(statement, begun, order, on_level)
    # Small divisors are looked for by the solves, also those of modes that are not carried.
    expansion = Expansion(statement, expansion.order, tolerance=0.0, computation=expansion.computation)
    if "quadratic" in shapes and expansion.order == 1:
        warnings.warn(
            "order=1 with quadratic terms: their part in the frequency begins at the second order", OrderingWarning, 2
        )
    weak = _weak(statement, factors, shapes, loads, powers)
    weak += [(x, Matrix(linear.bordered.along(j), 0)) for j, x in enumerate(statement.shifts) if x != 0]
    model = ReducedModel(expansion, tuple(found), matrices, tuple(weak))
    if remark := model.small_divisors:
        warnings.warn(remark, SmallDivisorWarning, stacklevel=2)
    return model


def _weak(
    statement: ModelStatement,
    factors: Mapping[str, Any],
    shapes: Mapping[str, Sequence[Shape]],
    loads: Sequence[tuple[Any, Any]],
    powers: Mapping[str, int],
) -> list[tuple[sp.Expr, Shape]]:
    """Every term of the left-hand side beside M, G and K, as it was stated."""
    small = statement.small
    terms = [(small ** powers[name] * sp.sympify(factors[name]), x) for name, maps in shapes.items() for x in maps]
    terms += [(-(small ** powers["drive"]) * sp.sympify(g), Load(b)) for b, g in loads]
    return [(statement.in_numbers(x), shape) for x, shape in terms]
