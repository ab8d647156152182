"""Orders carried by unknowns and parameters, turned into powers of the small parameter: x of order q becomes ε^q x."""

from __future__ import annotations

from collections.abc import Mapping

import sympy as sp

from multiscale.problem.reading import unsupported

__all__ = ["with_orders"]


def with_orders(
    equations: list[sp.Expr], orders: Mapping[sp.Symbol, int], small: sp.Symbol, time: sp.Symbol
) -> list[sp.Expr]:
    """The equations with powers of `small`; an ordered symbol must stand polynomially, or in the angle of a drive."""
    for equation in equations:
        for x in sorted(equation.atoms(sp.Function, sp.Pow), key=str):
            found = x.free_symbols & orders.keys()
            if not found or time in x.free_symbols or (isinstance(x, sp.Pow) and x.exp.is_Integer and x.exp > 0):
                continue
            if isinstance(x, sp.Pow) and x.exp.is_Integer:
                raise unsupported(
                    x,
                    "an ordered symbol stands in a denominator",
                    "Order the quotient as a whole by giving it a symbol",
                )
            raise unsupported(
                x,
                f"the ordered symbol {min(found, key=str)} stands inside it",
                "Give an order to a symbol that stands for it as a whole",
            )
    powers = {s: small**q * s for s, q in orders.items()}
    return [x.subs(powers, simultaneous=True) for x in equations]
