"""The finished result and the call that makes it."""

from __future__ import annotations

import logging
import warnings
from collections.abc import Callable, Iterator, Mapping, Sequence
from dataclasses import dataclass, field, replace
from functools import cached_property, partial
from operator import index
from time import perf_counter
from typing import TYPE_CHECKING, Any, SupportsIndex

import sympy as sp

from multiscale.computed import Computation, Finished, Snapshot, begin, restore
from multiscale.convention import to_fundamental, to_peak
from multiscale.errors import (
    EvaluationError,
    MultiscaleError,
    OrderingWarning,
    ProblemError,
    ResonanceError,
    SmallDivisorWarning,
)
from multiscale.level import Level, PendingLevel, Views, polynomials_below
from multiscale.problem import Problem
from multiscale.remarks import incomplete_cubic, remarks, small_divisors
from multiscale.shapes import ModeShape, mode_shapes
from multiscale.slow_flow import SlowFlow
from multiscale.solution import FORMS, field_writer, solution
from multiscale.symbols import Symbols, symbols_of

if TYPE_CHECKING:
    from multiscale.codegen.numpy_function import NumpyFunction

__all__ = ["Expansion", "expand", "extend"]

_LOG = logging.getLogger("multiscale")
_LOG.addHandler(logging.NullHandler())


class _Levels(Mapping[int, Level]):
    """Levels by number, each made when it is first asked for."""

    def __init__(self, views: Views, order: int) -> None:
        self.views, self._order, self._made = views, order, dict[int, Level]()

    def __getitem__(self, n: int) -> Level:
        if n not in range(self._order + 1):
            raise KeyError(f"level {n}: this expansion has the levels 0 … {self._order}")
        if n not in self._made:
            self._made[n] = self.views.level(n)
        return self._made[n]

    def __iter__(self) -> Iterator[int]:
        return iter(range(self._order + 1))

    def __len__(self) -> int:
        return self._order + 1


@dataclass(frozen=True, eq=False, repr=False)
class Expansion:
    """A multiple-scale expansion to a given order; made by `expand`.

    Attributes
    ----------
    problem : Problem
    order : int
        N: the levels 0 … N, the slow derivatives D_1 … D_N.
    amplitude : str
        "fundamental": ``|2A|`` is the amplitude of the fundamental harmonic, to all orders. "peak", made by
        `with_amplitude`: it is half the distance from peak to peak, to the order of the expansion.
    tolerance : float
        Relative distance below which numeric frequencies count as close to resonance (`warnings`).
    """

    problem: Problem
    order: int
    amplitude: str = "fundamental"
    tolerance: float = 0.05
    computation: Computation = field(repr=False, kw_only=True)

    @cached_property
    def symbols(self) -> Symbols:
        """The symbols of the result, ``symbols.A``, ``.a``, ``.beta``, … as tuples."""
        return symbols_of(self.problem, self.computation.modes, len(self.computation.frame.resonant), self.order)

    @cached_property
    def views(self) -> Views:
        """How finished coefficients are written; for functions that work on an expansion."""
        return Views(self.problem, self.computation, self.symbols)

    @cached_property
    def modes(self) -> tuple[ModeShape, ...]:
        """Frequency, shape and reference of each mode; where the unknowns are uncoupled, one for each unknown."""
        return mode_shapes(self.problem, self.computation, self.views.writer)

    @property
    def representation(self) -> str:
        """The arithmetic that computed the coefficients: "sympy" or "flint" (exact), "complex" or "mpmath"."""
        return self.computation.representation

    @cached_property
    def levels(self) -> Mapping[int, Level]:
        """``levels[n]``, n = 0 … N."""
        return _Levels(self.views, self.order)

    @cached_property
    def slow_flow(self) -> SlowFlow:
        return SlowFlow(self.problem, self.computation, self.views, self.symbols)

    @property
    def relations(self) -> dict[sp.Expr, sp.Expr]:
        """All relations in force: those declared, and exact ones, {frequency: rational multiple of an earlier one}."""
        bases = self.computation.canonical.bases
        expressed = dict(self.problem.resonances)
        for k, rate in enumerate(bases.rates):
            multiples = [j for j in range(k) if _parallel(bases.rates[j], rate)]
            if multiples:
                j = multiples[0]
                first = next(b for b, r in enumerate(rate) if r)
                ratio = sp.Rational(rate[first], bases.rates[j][first])
                names = self.problem.frequency_names
                if names[k] not in {str(key) for key in expressed}:
                    expressed[sp.Symbol(names[k])] = ratio * sp.Symbol(names[j])
        return expressed

    def _check_frequency(self, mode: int) -> None:
        modes = self.computation.modes
        if not isinstance(mode, int) or mode not in range(modes):
            raise MultiscaleError(f"mode is {mode!r}: this expansion has the modes 0 … {modes - 1}")
        if self.slow_flow.phases or not self.slow_flow.autonomous:
            raise ResonanceError(
                "the slow flow depends on phases or on time "
                f"({', '.join(map(str, self.slow_flow.phases.values())) or self.problem.time}), so the frequency is no "
                "function of the amplitude: use slow_flow.polar"
            )

    def _frequency_parts(self, mode: int) -> tuple[sp.Expr, ...]:
        self._check_frequency(mode)
        turns = [self.slow_flow._polar_part(n, mode)[1] for n in range(1, self.order + 1)]
        return (self.problem.natural_frequencies[mode], *turns)

    def frequency_corrections(self, mode: int = 0) -> tuple[sp.Expr, ...]:
        """Coefficients of ω(a) = Σ εⁿ ω_n, index = power of ε; what a means is said by `amplitude`."""
        return self._frequency_parts(mode)

    def frequency(self, mode: int = 0) -> sp.Expr:
        """ω(a) as a series in ε, for modes not in internal resonance (`ResonanceError` otherwise)."""
        return sp.Add(*(self.problem.small**n * w for n, w in enumerate(self._frequency_parts(mode))))

    def solution(self, form: str = "polar", order: int | None = None) -> dict[sp.Expr, sp.Expr]:
        """{unknown: U_0 + εU_1 + …} through U_order (default N) in the slow variables of `form` and time.

        The variables are those of the slow flow in the same form; A, p and q refer to the rotating frame.
        """
        if form not in FORMS:
            raise MultiscaleError(f"form is {form!r}: expected one of {', '.join(map(repr, FORMS))}")
        order = self.order if order is None else order
        if order not in range(self.order + 1):
            raise MultiscaleError(
                f"order is {order!r}: this expansion has the levels 0 … {self.order}; `extend` it for more"
            )
        return solution(self.problem, self.computation, self.views, self.symbols, form, order)

    def field_expression(self, finished: Finished, form: str) -> sp.Expr:
        """A finished real field in the slow variables of `form` and time."""
        return field_writer(self.computation, self.views, self.symbols, form)(finished)

    @cached_property
    def nonresonance(self) -> tuple[sp.Expr, ...]:
        """Divisors assumed non-zero, in slow flow and fields, that no assumption on the symbols makes positive."""
        c = self.computation
        finished = [c.change(n, a) for n in range(1, self.order + 1) for a in range(c.modes)]
        finished += [c.field(n, k) for n in range(self.order + 1) for k in range(c.unknowns)]
        own = {p for _, p in c.canonical.spec.reciprocals}
        divisors = [self.views.writer.polynomial(p) for p in polynomials_below(finished) if p not in own]
        return tuple(d for d in divisors if not d.is_positive)

    @cached_property
    def warnings(self) -> tuple[str, ...]:
        """What a careful analyst would say about this result."""
        return remarks(self.problem, self.computation, self.tolerance, lambda f: self.field_expression(f, "polar"))

    def warnings_at(self, parameters: Mapping[Any, float]) -> tuple[str, ...]:
        """`warnings`, and the small divisors that these values of parameters bring, by Symbol or name.

        `equilibria`, `frequency_response` and `validity` give the latter as `SmallDivisorWarning`.
        """
        named = {s.name: s for s in (*self.problem.parameters, self.problem.small)}
        given = {named.get(k, k) if isinstance(k, str) else k: float(v) for k, v in parameters.items()}
        if strange := [k for k in given if k not in named.values()]:
            raise EvaluationError(f"unknown parameter {strange[0]}: expected {', '.join(named)}")
        more = small_divisors(self.problem, self.computation, self.tolerance, given)
        return (*self.warnings, *(x for x in more if x not in self.warnings))

    def equals(self, other: Expansion) -> bool:
        """Whether slow flow and fields are the same, coefficient by coefficient, to the same order."""
        return self.order == other.order and self.amplitude == other.amplitude and self._finished == other._finished

    @cached_property
    def _finished(self) -> tuple[Any, ...]:
        c = self.computation
        changes = tuple(tuple(c.change(n, a).items()) for n in range(1, self.order + 1) for a in range(c.modes))
        return changes, tuple(tuple(c.field(n, k).items()) for n in range(self.order + 1) for k in range(c.unknowns))

    def __eq__(self, other: object) -> bool:
        return isinstance(other, Expansion) and self.problem == other.problem and self.equals(other)

    def __hash__(self) -> int:
        return hash((self.problem, self.order, self.amplitude))

    def __repr__(self) -> str:
        unknowns = ", ".join(str(u) for u in self.problem.unknowns)
        how = ", in floating point" if self.representation in ("complex", "mpmath") else ""
        return f"Expansion of {unknowns} to order {self.order} in {self.problem.small}"[: 199 - len(how)] + how

    def __reduce__(self) -> tuple[Any, ...]:
        return _rebuilt, (self.problem, self.order, self.amplitude, self.tolerance, self.computation.snapshot())

    def to_numpy(self, derivative: int = 0, wrt: str | None = None) -> NumpyFunction:
        """The unknowns, or a time derivative, from a slow state: ``f(t, y, *parameters)``, shape (unknowns,) + B.

        y is Cartesian in the rotating frame, as in ``slow_flow.to_numpy("cartesian")``. With `wrt` "state" or
        "parameters" it is the Jacobian by these, at fixed time: (unknowns, n) + B.
        """
        from multiscale.codegen.functions import displacement_function

        if derivative not in (0, 1, 2):
            raise MultiscaleError(f"derivative is {derivative!r}: expected 0, 1 or 2")
        if wrt not in (None, "state", "parameters"):
            raise MultiscaleError(f"wrt is {wrt!r}: expected None, 'state' or 'parameters'")
        return displacement_function(self.problem, self.computation, derivative, wrt)

    def frequency_to_numpy(self, mode: int = 0) -> NumpyFunction:
        """ω at a slow state y (Cartesian in the rotating frame): ``f(t, y, *parameters)``, shape B."""
        from multiscale.codegen.functions import frequency_function

        self._check_frequency(mode)
        return frequency_function(self.problem, self.computation, mode)

    def latex(self, full: bool = False) -> str:
        """The slow flow in polar form as LaTeX; results that would be very long are cut unless `full`."""
        return self.slow_flow.latex(full)

    def _repr_latex_(self) -> str:
        return self.latex()


def _parallel(x: tuple[int, ...], y: tuple[int, ...]) -> bool:
    return all(a * d == b * c for a, b in zip(x, y, strict=True) for c, d in zip(x, y, strict=True))


def _rebuilt(problem: Problem, order: int, amplitude: str, tolerance: float, snapshot: Snapshot) -> Expansion:
    return Expansion(problem, order, amplitude, tolerance, computation=restore(problem.canonical(order), snapshot))


def _taken_to(
    problem: Problem, computation: Computation, order: int, on_level: Callable[[Level], object] | None
) -> Expansion:
    while computation.order < order:
        start = perf_counter()
        computation = computation.further()
        if _LOG.isEnabledFor(logging.INFO):
            n = computation.order
            numbers = (n, order, *computation.size(n), perf_counter() - start)
            _LOG.info("level %d of %d: %d terms in the fields, %d in the slow flow, %.3g s", *numbers)
        if on_level is not None:
            so_far = Expansion(problem, computation.order, computation=computation)
            if on_level(PendingLevel(so_far.order, partial(so_far.levels.__getitem__, so_far.order))) is False:
                break
    return Expansion(problem, computation.order, computation=computation)


def _checked_order(order: object, least: int) -> int:
    if isinstance(order, bool) or not isinstance(order, SupportsIndex) or index(order) < least:
        raise ProblemError(f"order is {order!r}: expected an integer ≥ {least}")
    return index(order)


def expand(
    problem: Problem,
    order: int,
    *,
    on_level: Callable[[Level], object] | None = None,
    representation: str = "auto",
    tolerance: float = 0.05,
) -> Expansion:
    """Expand a problem by the method of multiple scales to any order.

    Parameters
    ----------
    problem : Problem
    order : int ≥ 1
        N: the slow flow holds D_1 … D_N, the fields U_0 … U_N, and the residual of the equations is O(ε^{N+1}).
    on_level : callable, optional
        Called with each finished `Level`; returning False ends the expansion there. A `Level` is written out when it is
        looked at, so a progress bar costs nothing::

            with tqdm.tqdm(total=order) as bar:
                result = ms.expand(problem, order, on_level=lambda level: bar.update())

        The logger "multiscale" reports each level too, with its number of terms and its time, at the level INFO.
    representation : "auto", "flint", "sympy", "complex" or "mpmath"
        The polynomial arithmetic; the exact ones, "flint" and "sympy", give identical results. "auto" takes FLINT when
        python-flint is installed. Where frequencies have no closed form, "auto" takes "complex" (double precision), and
        "mpmath" has 50 digits.
    tolerance : float
        Relative distance below which numeric frequencies count as close to resonance.

    Raises
    ------
    ProblemError
        `order` is not an integer ≥ 1.

    Warns
    -----
    OrderingWarning
        `order=1` with quadratic terms, whose contribution to the frequency begins at the second order.
    SmallDivisorWarning
        Numeric frequencies close to a resonance that no relation declares; the message has the line to add.

    Examples
    --------
    >>> import sympy as sp, multiscale as ms
    >>> t = sp.Symbol("t", real=True)
    >>> eps, w0, a2, a3 = sp.symbols("epsilon omega_0 alpha_2 alpha_3", positive=True)
    >>> u = sp.Function("u")(t)
    >>> problem = ms.Problem(u.diff(t, 2) + w0**2*u + eps*a2*u**2 + eps**2*a3*u**3, u, small=eps)
    >>> ms.expand(problem, order=2).frequency_corrections()
    (omega_0, 0, a**2*(-10*alpha_2**2 + 9*alpha_3*omega_0**2)/(24*omega_0**3))
    """
    if not isinstance(problem, Problem):
        raise ProblemError(f"expand was given a {type(problem).__name__}: state a multiscale.Problem first")
    order = _checked_order(order, 1)
    expansion = _taken_to(problem, begin(problem.canonical(order), representation), order, on_level)
    if remark := incomplete_cubic(problem, expansion.computation):
        warnings.warn(remark, OrderingWarning, stacklevel=2)
    return _warned(replace(expansion, tolerance=tolerance), ())


def _warned(expansion: Expansion, known: Sequence[str]) -> Expansion:
    """The expansion, with warnings for the small divisors that are not known yet."""
    for remark in small_divisors(expansion.problem, expansion.computation, expansion.tolerance):
        if remark not in known:
            warnings.warn(remark, SmallDivisorWarning, stacklevel=3)
    return expansion


def extend(expansion: Expansion, order: int, *, on_level: Callable[[Level], object] | None = None) -> Expansion:
    """The same expansion to a higher order; no level is computed again.

    One in the peak amplitude is taken further in that of the fundamental (which is what `on_level` sees) and changed
    back.
    """
    order = _checked_order(order, expansion.order)
    if expansion.amplitude == "peak":
        plain = replace(expansion, amplitude="fundamental", computation=to_fundamental(expansion.computation))
        longer = extend(plain, order, on_level=on_level)
        return replace(longer, amplitude="peak", computation=to_peak(longer.computation))
    computation, canonical = expansion.computation, expansion.problem.canonical(order)
    if canonical.numeric != computation.canonical.numeric:
        # Forces that are not polynomial have other generators at the higher order: everything is computed anew.
        computation = begin(canonical, computation.representation)
    elif canonical != computation.canonical:
        # The statement was expanded in ε to a lower order; what is known goes on under the longer form.
        computation = restore(canonical, computation.snapshot(), computation.representation)
    longer = _taken_to(expansion.problem, computation, order, on_level)
    known = small_divisors(expansion.problem, expansion.computation, expansion.tolerance)
    return _warned(replace(longer, tolerance=expansion.tolerance), known)
