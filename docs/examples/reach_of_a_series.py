"""How far does a series reach, and how does one go on beyond it?

Two questions about the same result. The frequency of the van der Pol limit cycle is a power series in ε with a finite
radius of convergence; its rational and quadratic approximants go on where the series fails. And an expansion of given
order describes the motion of an oscillator within a tenth of one per cent up to some amplitude: which one?

Run it with ``python docs/examples/reach_of_a_series.py``; the first table needs a second or two with python-flint.
"""

from __future__ import annotations

import sympy as sp

import multiscale as ms

t = sp.Symbol("t", real=True)
eps, alpha = sp.symbols("epsilon alpha", positive=True)
u = sp.Function("u")(t)

STRENGTHS = (1.0, 2.0, 3.0)
ORDERS = (1, 2, 3, 4)


def frequencies(order: int = 60) -> list[tuple[float, float, float, float]]:
    """(ε, series, rational, quadratic approximant) of the frequency of the limit cycle."""
    orbit = ms.periodic_series(ms.Problem(u.diff(t, 2) + eps * (u**2 - 1) * u.diff(t) + u, u, small=eps), order)
    rational = ms.pade(orbit.frequency_coefficients, eps)
    quadratic = ms.pade(orbit.frequency_coefficients, eps, kind="quadratic")
    rows = []
    for e in STRENGTHS:
        series = float(orbit.frequency.subs(eps, sp.Rational(e)))
        rows.append((e, series, float(rational(e)), float(quadratic(e))))
    return rows


def reach(order: int, tolerance: float = 0.001) -> ms.Validity:
    """The range of amplitudes of u'' + u + εu³ = 0 at ε = 0.1 over a time of 1/ε."""
    problem = ms.Problem(u.diff(t, 2) + u + eps * alpha * u**3, u, small=eps)
    return ms.validity(ms.expand(problem, order), {eps: 0.1, alpha: 1.0}, tolerance)


def main() -> None:
    print("Frequency of the van der Pol limit cycle, series to order 60 (radius of convergence about 1.85)")
    print("epsilon          series        rational       quadratic")
    for e, *values in frequencies():
        print(f"{e:7.1f}", *(f"{x:15.10g}" for x in values))
    print("\nAmplitude up to which u'' + u + 0.1 u³ = 0 is described within 0.1 % over a time of 10")
    for order in ORDERS:
        print(f"order {order}: {reach(order).amplitude:.2f}")


if __name__ == "__main__":
    main()
