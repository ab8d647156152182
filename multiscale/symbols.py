"""The symbols in which results are written; a name the user has taken is changed by appending the unknown's name."""

from __future__ import annotations

from dataclasses import dataclass

import sympy as sp

from multiscale.problem import Problem

__all__ = ["Symbols", "symbols_of"]


@dataclass(frozen=True)
class Symbols:
    """One entry for each mode, but for T: one for each slow time T_0 … T_N.

    A complex amplitude, a and beta its polar form A = ½ a e^{iβ}, gamma the resonant phases, p and q the Cartesian form
    A = ½ (p − iq) in the rotating frame.
    """

    A: tuple[sp.Symbol, ...]
    a: tuple[sp.Symbol, ...]
    beta: tuple[sp.Symbol, ...]
    gamma: tuple[sp.Symbol, ...]
    p: tuple[sp.Symbol, ...]
    q: tuple[sp.Symbol, ...]
    T: tuple[sp.Symbol, ...]


class _Names:
    def __init__(self, problem: Problem) -> None:
        self._unknowns = [u.func.__name__ for u in problem.unknowns]
        self._taken = set(problem.names)

    def series(self, stem: str, count: int, **assumptions: bool) -> tuple[sp.Symbol, ...]:
        result = []
        for k in range(count):
            name = stem if count == 1 else f"{stem}_{k + 1}"
            while name in self._taken:
                name = f"{name}_{self._unknowns[min(k, len(self._unknowns) - 1)]}"
            self._taken.add(name)
            result.append(sp.Symbol(name, **assumptions))
        return tuple(result)

    def free(self, name: str) -> sp.Symbol:
        while name in self._taken:
            name = f"{name}_{self._unknowns[0]}"
        self._taken.add(name)
        return sp.Symbol(name, real=True)


def symbols_of(problem: Problem, modes: int, phases: int, order: int) -> Symbols:
    names = _Names(problem)
    return Symbols(
        A=names.series("A", modes, complex=True),
        a=names.series("a", modes, positive=True),
        beta=names.series("beta", modes, real=True),
        gamma=names.series("gamma", phases, real=True),
        p=names.series("p", modes, real=True),
        q=names.series("q", modes, real=True),
        T=tuple(names.free(f"T_{n}") for n in range(order + 1)),
    )
