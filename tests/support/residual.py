"""Residual of the user's own equations along the slow flow, by a route that shares no code with the engine.

The amplitudes are Taylor jets in time, A(t + τ) = A_0 + A_1 τ + A_2 τ², filled in from the slow flow; the published
SymPy expressions of the fields are evaluated on them in high-precision arithmetic, and the results are put into the
equations as the user wrote them. Drives keep their exact phase, detunings are held fixed.
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property

import mpmath as mp
import sympy as sp

import multiscale as ms

DIGITS = 90
SMALL = (mp.mpf(10) ** -9, mp.mpf(10) ** -10)


class Jet:
    """c_0 + c_1 τ + c_2 τ²."""

    def __init__(self, c0, c1=0, c2=0):
        self.c = (c0, c1, c2)

    @staticmethod
    def of(x):
        return x if isinstance(x, Jet) else Jet(x)

    def __add__(self, other):
        return Jet(*(a + b for a, b in zip(self.c, Jet.of(other).c, strict=True)))

    __radd__ = __add__

    def __neg__(self):
        return Jet(*(-a for a in self.c))

    def __sub__(self, other):
        return self + (-Jet.of(other))

    def __rsub__(self, other):
        return Jet.of(other) - self

    def __mul__(self, other):
        (a, b, c), (d, e, f) = self.c, Jet.of(other).c
        return Jet(a * d, a * e + b * d, a * f + b * e + c * d)

    __rmul__ = __mul__

    def __truediv__(self, other):
        return self * Jet.of(other).inverse()

    def __rtruediv__(self, other):
        return Jet.of(other) * self.inverse()

    def inverse(self):
        a, b, c = self.c
        return Jet(1 / a, -b / a**2, b * b / a**3 - c / a**2)

    def __pow__(self, n):
        if n == 0:
            return Jet(mp.mpf(1))
        if n == int(n) and n > 0:
            return self * self ** (n - 1)
        a, b, c = self.c
        slope = n * a ** (n - 1)
        return Jet(a**n, slope * b, slope * c + slope * (n - 1) / a * b * b / 2)

    def conjugate(self):
        return Jet(*map(mp.conj, self.c))


def _exp(x):
    if not isinstance(x, Jet):
        return mp.exp(x)
    a, b, c = x.c
    return Jet(mp.exp(a)) * Jet(1, b, c + b * b / 2)


def _conjugate(x):
    return x.conjugate() if isinstance(x, Jet) else mp.conj(x)


def _cos(x):
    return (_exp(x * mp.mpc(0, 1)) + _exp(x * mp.mpc(0, -1))) / 2 if isinstance(x, Jet) else mp.cos(x)


def _sin(x):
    return (_exp(x * mp.mpc(0, 1)) - _exp(x * mp.mpc(0, -1))) / mp.mpc(0, 2) if isinstance(x, Jet) else mp.sin(x)


def _integrated(rate):
    a, b, _ = rate.c
    # Linear in the rate, so that the phase of a multiple is the multiple of the phase.
    return Jet(mp.mpf("0.71") * a, a, b / 2)


def _sqrt(x):
    if not isinstance(x, Jet):
        return mp.sqrt(x)
    a, b, c = x.c
    root = mp.sqrt(a)
    return Jet(root, b / (2 * root), c / (2 * root) - b * b / (8 * root**3))


def eliminated(problem):
    """{eliminated symbol: its value}, from the relations as the user stated them."""
    found = {}
    for key, value in problem.resonances:
        left, right = sp.sympify(key).subs(found), value.subs(found)
        unknown = sorted(left.free_symbols - right.free_symbols - {problem.small, problem.time}, key=str)
        if key not in problem.unknowns and unknown:
            symbol = next((s for s in unknown if s not in problem.parameters), unknown[0])
            found[symbol] = max(sp.solve(left - right, symbol), key=lambda x: not x.could_extract_minus_sign())
    return found


@dataclass(frozen=True)
class Fields:
    """An expansion as compiled high-precision functions; `extra_*` are perturbations, (level, SymPy expression)."""

    expansion: ms.Expansion
    values: dict
    extra_flow: tuple = ()
    extra_field: tuple = ()

    @cached_property
    def _arguments(self):
        problem = self.expansion.problem
        return [*self.expansion.symbols.A, self.expansion.symbols.T[0], problem.small]

    def _compiled(self, expression):
        modules = [{"exp": _exp, "conjugate": _conjugate, "cos": _cos, "sin": _sin, "sqrt": _sqrt}, "mpmath"]
        time = {self.expansion.problem.time: self.expansion.symbols.T[0]}
        plain = expression.subs(eliminated(self.expansion.problem)).subs(self.values).subs(time)
        for k, integral in enumerate(sorted(plain.atoms(sp.Integral), key=str)):
            # A slowly varying frequency: its phase at the instant chosen is free, its derivatives are not.
            rate = sp.lambdify(
                [time[self.expansion.problem.time], self.expansion.problem.small],
                integral.diff(time[self.expansion.problem.time]),
                modules=modules,
            )
            phase = sp.Function(f"phase{k}")
            plain = plain.xreplace({integral: phase(self.expansion.symbols.T[0], self.expansion.problem.small)})
            modules[0][phase.__name__] = lambda x, e, rate=rate: _integrated(Jet.of(rate(x, e)))
        return sp.lambdify(self._arguments, plain, modules=modules)

    @cached_property
    def flow(self):
        e, order = self.expansion, self.expansion.order
        parts = {n: [e.slow_flow.by_scale[n][A] for A in e.symbols.A] for n in range(1, order + 1)}
        for n, change in self.extra_flow:
            parts[n] = [parts[n][0] + change, *parts[n][1:]]
        return {n: [self._compiled(x) for x in part] for n, part in parts.items()}

    @cached_property
    def fields(self):
        e = self.expansion
        parts = {n: [e.levels[n].corrections[u] for u in e.problem.unknowns] for n in range(e.order + 1)}
        for n, change in self.extra_field:
            parts[n] = [parts[n][0] + change, *parts[n][1:]]
        return {n: [self._compiled(x) for x in part] for n, part in parts.items()}

    def slow(self, amplitudes, eps, time):
        total = [Jet(mp.mpf(0)) for _ in amplitudes]
        for n, part in self.flow.items():
            for k, f in enumerate(part):
                total[k] = total[k] + Jet.of(f(*amplitudes, time, eps)) * eps**n
        return total

    def jets(self, start, eps, t):
        """Displacements as jets at time t, from the amplitudes `start`."""
        time = Jet(t, 1)
        amplitudes = [Jet(a) for a in start]
        first = [r.c[0] for r in self.slow(amplitudes, eps, time)]
        amplitudes = [Jet(a, b) for a, b in zip(start, first, strict=True)]
        second = [r.c[1] / 2 for r in self.slow(amplitudes, eps, time)]
        amplitudes = [Jet(a, b, c) for a, b, c in zip(start, first, second, strict=True)]
        total = [Jet(mp.mpf(0)) for _ in self.expansion.problem.unknowns]
        for n, part in self.fields.items():
            for k, f in enumerate(part):
                total[k] = total[k] + Jet.of(f(*amplitudes, time, eps)) * eps**n
        return total

    def residual(self, start, eps, t):
        """|left-hand side| of every equation."""
        problem = self.expansion.problem
        jets = self.jets(start, eps, t)
        time = problem.time
        known = {}
        for u in problem.unknowns:
            for d in (2, 1):
                known[u.diff(time, d)] = sp.Symbol(f"{u.func.__name__}_{d}")
            known[u] = sp.Symbol(f"{u.func.__name__}_0")
        words = [sp.Symbol(f"{u.func.__name__}_{d}") for u in problem.unknowns for d in range(3)]
        numbers = [value for jet in jets for value in (jet.c[0], jet.c[1], 2 * jet.c[2])]
        result = []
        for equation in problem.equations:
            hidden = equation.xreplace({k: v for k, v in known.items() if k.is_Derivative}).xreplace(known)
            plain = hidden.subs(eliminated(problem)).subs(self.values)
            f = sp.lambdify([*words, problem.small, time], plain, modules="mpmath")
            result.append(abs(f(*numbers, eps, t)))
        return result


def exponents(expansion, values, start, *, extra_flow=(), extra_field=(), t="0.37"):
    """Observed order in ε of the residual of each equation; infinity where it vanishes identically."""
    with mp.workdps(DIGITS):
        fields = Fields(expansion, values, tuple(extra_flow), tuple(extra_field))
        start = [mp.mpc(*a) for a in start]
        coarse, fine = (fields.residual(start, eps, mp.mpf(t)) for eps in SMALL)
        floor = mp.mpf(10) ** (15 - DIGITS)
        ratio = SMALL[0] / SMALL[1]
        return [mp.inf if b < floor else mp.log(a / b) / mp.log(ratio) for a, b in zip(coarse, fine, strict=True)]
