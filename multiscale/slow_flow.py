"""The slow flow: dA/dt, reconstituted over all levels, in complex, polar and Cartesian form.

In the rotating frame (`multiscale.frame`), A_j = ½ a_j e^{iδ_j} and dA_j/dt = Σ c · Π A_l^{p_l} Ā_l^{q_l}; writing K
for the phase of a term relative to A_j:

    da_j/dt      = Σ 2 Π (a_l/2)^{p_l+q_l} (Re c · cos K − Im c · sin K)
    a_j dδ_j/dt  = Σ 2 Π (a_l/2)^{p_l+q_l} (Im c · cos K + Re c · sin K)

With A_j = ½ (p_j − i q_j):

    dp_j/dt = 2 Re dA_j/dt,      dq_j/dt = −2 Im dA_j/dt
"""

from __future__ import annotations

from collections.abc import Callable
from fractions import Fraction
from functools import cached_property
from typing import TYPE_CHECKING, Any

import sympy as sp

from multiscale.computed import Computation, Snapshot, restore
from multiscale.errors import EvaluationError
from multiscale.frame import turns
from multiscale.latex import LONGEST, aligned, note
from multiscale.level import Views
from multiscale.problem import Problem
from multiscale.symbols import Symbols, symbols_of

if TYPE_CHECKING:
    from multiscale.codegen.numpy_function import NumpyFunction

__all__ = ["SlowFlow"]

FORMS = ("complex", "polar", "cartesian")
LATEX_TERMS = 400
"""A notebook shows longer slow flows as a note: already their SymPy form takes long to make."""


class SlowFlow:
    """Slow evolution equations in physical time t, all orders reconstituted: dA/dt = Σ εⁿ D_nA, n = 1 … N.

    Examples
    --------
    >>> import sympy as sp, multiscale as ms
    >>> t = sp.Symbol("t", real=True)
    >>> eps = sp.Symbol("epsilon", positive=True)
    >>> u = sp.Function("u")(t)
    >>> flow = ms.expand(ms.Problem(u.diff(t, 2) + u + eps*u**3, u, small=eps), order=1).slow_flow
    >>> flow.polar
    {a: 0, beta: 3*a**2*epsilon/8}
    """

    def __init__(self, problem: Problem, computation: Computation, views: Views, symbols: Symbols) -> None:
        self._problem, self._computation, self._views, self._symbols = problem, computation, views, symbols
        self._frame = computation.frame

    def __repr__(self) -> str:
        order, modes = self._computation.order, self._computation.modes
        return f"SlowFlow(order {order}, {modes} mode{'s' if modes > 1 else ''}, phases {list(self.phases)})"

    def __reduce__(self) -> tuple[Any, ...]:
        return _rebuilt, (self._problem, self._computation.order, self._computation.snapshot())

    @property
    def _levels(self) -> range:
        return range(1, self._computation.order + 1)

    @cached_property
    def by_scale(self) -> dict[int, dict[sp.Symbol, sp.Expr]]:
        """{n: {A: D_nA}}, the rate of change on each slow time alone."""
        return {
            n: {A: self._views.amplitudes(self._computation.flow(n, a), a) for a, A in enumerate(self._symbols.A)}
            for n in self._levels
        }

    def _summed(self, build: Callable[[int, int], sp.Expr], mode: int) -> sp.Expr:
        return sp.Add(*(self._problem.small**n * build(n, mode) for n in self._levels))

    @cached_property
    def complex(self) -> dict[sp.Symbol, sp.Expr]:
        """{A: dA/dt} for u = A e^{iωt} + conjugate + …."""
        return {
            A: self._summed(lambda n, a: self.by_scale[n][self._symbols.A[a]], k) for k, A in enumerate(self._symbols.A)
        }

    @property
    def autonomous(self) -> bool:
        """Whether time does not appear explicitly; slow parameters and beats between drives make it appear."""
        return self._computation.autonomous

    @property
    def phases(self) -> dict[sp.Symbol, sp.Expr]:
        """{γ: its definition} for the phases that drive the flow, with β as in u = a cos(ωt + β) + … for every mode."""
        own = [self._views.lead(j) + b for j, b in enumerate(self._symbols.beta)]
        return {
            g: sp.expand(sp.Add(*(n * d for n, d in zip(row, own, strict=True))))
            for g, row in zip(self._symbols.gamma, self._frame.resonant, strict=True)
        }

    @property
    def cyclic(self) -> tuple[sp.Symbol, ...]:
        """The phases that drive nothing, each relative to the fast angle of its mode in `frame`."""
        return tuple(self._symbols.beta[j] for j in self._frame.cyclic)

    @property
    def frame(self) -> dict[sp.Symbol, sp.Expr]:
        """{A: the fast angle that is removed}."""
        return {A: self._views.fast_angle(j) for j, A in enumerate(self._symbols.A)}

    @cached_property
    def polar(self) -> dict[sp.Symbol, sp.Expr]:
        """{a: da/dt, …}, then the resonant phases γ, then the cyclic phases β."""
        modes = range(self._computation.modes)
        amplitude = {self._symbols.a[j]: self._summed(lambda n, a: self._polar_part(n, a)[0], j) for j in modes}
        turning = [self._summed(lambda n, a: self._polar_part(n, a)[1], j) for j in modes]
        gamma = {
            g: sp.Add(*(k * d for k, d in zip(row, turning, strict=True)))
            for g, row in zip(self._symbols.gamma, self._frame.resonant, strict=True)
        }
        return amplitude | gamma | {self._symbols.beta[j]: turning[j] for j in self._frame.cyclic}

    def _polar_part(self, n: int, mode: int) -> tuple[sp.Expr, sp.Expr]:
        """(da/dt, dδ/dt) of one mode at one level."""
        rate, turn = [], []
        write = self._views.writer.quotient
        amplitudes = self._symbols.a
        for exponents, c in self._computation.flow(n, mode).items():
            powers = [exponents[2 * k] + exponents[2 * k + 1] for k in range(len(amplitudes))]
            size = sp.Mul(sp.Rational(2, 2 ** sum(powers)), *(a**e for a, e in zip(amplitudes, powers, strict=True)))
            combination = self._frame.relative(exponents, mode)
            angle = self._angle(combination) + self._views.angle(combination)
            real, imag = write(c.real), write(c.imag)
            rate.append(size * (real * sp.cos(angle) - imag * sp.sin(angle)))
            turn.append(size / amplitudes[mode] * (imag * sp.cos(angle) + real * sp.sin(angle)))
        return self._views.placed(sp.Add(*rate), "polar"), self._views.placed(sp.Add(*turn), "polar")

    def _angle(self, combination: tuple[int, ...]) -> sp.Expr:
        numbers = self._frame.coordinates(combination)
        return sp.Add(*(n * g for n, g in zip(numbers, self._symbols.gamma, strict=True)))

    @cached_property
    def cartesian(self) -> dict[sp.Symbol, sp.Expr]:
        """{p: dp/dt, q: dq/dt, …} for the leading motion p cos(fast) + q sin(fast); regular at zero amplitude."""
        result = {}
        for j, (p, q) in enumerate(zip(self._symbols.p, self._symbols.q, strict=True)):
            result[p] = self._summed(lambda n, a: self._cartesian_part(n, a)[0], j)
            result[q] = self._summed(lambda n, a: self._cartesian_part(n, a)[1], j)
        return result

    def _cartesian_part(self, n: int, mode: int) -> tuple[sp.Expr, sp.Expr]:
        """(dp/dt, dq/dt) of one mode at one level, grouped by phase factor."""
        write = self._views.writer.quotient
        groups: dict[tuple[tuple[int, ...], sp.Expr], list[tuple[sp.Expr, sp.Expr]]] = {}
        p, q = self._symbols.p, self._symbols.q
        for exponents, c in self._computation.flow(n, mode).items():
            own = turns(exponents)[: len(p)]
            radii = [min(exponents[2 * k], exponents[2 * k + 1]) for k in range(len(p))]
            square = [(x**2 + y**2) ** e for x, y, e in zip(p, q, radii, strict=True)]
            c = c.scaled(Fraction(2, 2 ** sum(exponents[: 2 * len(p)])))
            rest = self._views.angle(self._frame.relative(exponents, mode))
            parts = sp.Mul(write(c.real), *square), sp.Mul(write(c.imag), *square)
            groups.setdefault((own, rest), []).append(parts)
        p_rate, q_rate = [], []
        for (own, rest), terms in groups.items():
            cosine, sine = self._views.phase_factor(own)
            if rest != 0:
                wave = sp.cos(rest), sp.sin(rest)
                cosine, sine = cosine * wave[0] - sine * wave[1], cosine * wave[1] + sine * wave[0]
            real, imag = (sp.Add(*column) for column in zip(*terms, strict=True))
            p_rate.append(real * cosine - imag * sine)
            q_rate.append(-(imag * cosine) - real * sine)
        return self._views.placed(sp.Add(*p_rate), "cartesian"), self._views.placed(sp.Add(*q_rate), "cartesian")

    def _form(self, form: str) -> dict[sp.Symbol, sp.Expr]:
        _check_form(form)
        return getattr(self, form)  # type: ignore[no-any-return]

    def jacobian(self, form: str = "cartesian") -> sp.Matrix:
        """Derivative of the slow flow in the given real form by its own variables, rows in the order of the form."""
        if form == "complex":
            raise EvaluationError(
                "the complex form depends on A and its conjugate and has no Jacobian: use 'cartesian' or 'polar'"
            )
        flow = self._form(form)
        return sp.Matrix([[sp.diff(value, x) for x in flow] for value in flow.values()])

    def to_numpy(self, form: str = "cartesian", wrt: str | None = None) -> NumpyFunction:
        """The slow flow, or its Jacobian, as a NumPy function ``f(t, y, *parameters)``.

        Parameters
        ----------
        form : "cartesian", "polar" or "complex"
            y is (p_1, q_1, p_2, …), the variables of `polar` in their order, or the complex amplitudes.
        wrt : None, "state" or "parameters"
            The flow itself, of shape (n,) + B; its derivative by y, (n, n) + B; or by the parameters in the order of
            ``.parameters``, (n, number of parameters) + B. B is the broadcast shape of time, states and parameters.
        """
        from multiscale.codegen.functions import slow_flow_function

        _check_form(form)
        if wrt not in (None, "state", "parameters"):
            raise EvaluationError(f"wrt is {wrt!r}: expected None, 'state' or 'parameters'")
        if form == "complex" and wrt == "state":
            raise EvaluationError(
                "the complex form depends on A and its conjugate and has no Jacobian: use 'cartesian' or 'polar'"
            )
        return slow_flow_function(self._problem, self._computation, form, wrt)

    def latex(self, full: bool = False) -> str:
        """The polar form as displayed equations; long sums are cut after their first terms unless `full`."""
        size = sum(self._computation.size(n)[1] for n in self._levels)
        if size > LATEX_TERMS and not full:
            return note(f"slow flow of order {self._computation.order} with {size} terms; use latex(full=True)")
        return aligned(((rf"\dot{{{sp.latex(x)}}}", v) for x, v in self.polar.items()), None if full else LONGEST)

    def _repr_latex_(self) -> str:
        return self.latex()


def _check_form(form: str) -> None:
    if form not in FORMS:
        raise EvaluationError(f"form is {form!r}: expected one of {', '.join(map(repr, FORMS))}")


def _rebuilt(problem: Problem, order: int, snapshot: Snapshot) -> SlowFlow:
    computation = restore(problem.canonical(order), snapshot)
    symbols = symbols_of(problem, computation.modes, len(computation.frame.resonant), order)
    return SlowFlow(problem, computation, Views(problem, computation, symbols), symbols)
