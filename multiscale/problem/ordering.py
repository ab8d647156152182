"""Orders carried by unknowns and parameters, turned into powers of the small parameter: x of order q becomes ε^q x."""

from __future__ import annotations

from collections.abc import Mapping

import sympy as sp

from multiscale.problem.reading import unsupported

__all__ = ["with_orders"]


def with_orders(equations: list[sp.Expr], orders: Mapping[sp.Symbol, int], small: sp.Symbol) -> list[sp.Expr]:
    """The equations with powers of `small`; an ordered symbol must not stand alone in a denominator."""
    for equation in equations:
        for x in sorted(equation.atoms(sp.Pow), key=str):
            if x.base in orders and not x.base.name.startswith("@") and x.exp.is_negative:
                raise unsupported(
                    x,
                    "an ordered symbol stands in a denominator",
                    "Order the quotient as a whole by giving it a symbol",
                )
    powers = {s: small**q * s for s, q in orders.items()}
    return [x.subs(powers, simultaneous=True) for x in equations]
