"""The problems that are timed."""

from __future__ import annotations

from itertools import combinations_with_replacement

import sympy as sp

import multiscale as ms

__all__ = [
    "damped_duffing",
    "driven_cubic",
    "one_to_two",
    "quadratic_and_cubic",
    "three_resonant",
    "two_coupled",
    "van_der_pol",
]

t = sp.Symbol("t", real=True)
eps, mu, omega, omega_1, omega_2 = sp.symbols("epsilon mu omega omega_1 omega_2", positive=True)
alpha_2, alpha_3, a, b = sp.symbols("alpha_2 alpha_3 a b", real=True)
f, sigma, Omega = sp.symbols("f sigma Omega", positive=True)
u, u1, u2 = (sp.Function(name)(t) for name in ("u", "u1", "u2"))


def van_der_pol() -> ms.Problem:
    """u'' + ε (u² − 1) u' + u = 0."""
    return ms.Problem(u.diff(t, 2) + eps * (u**2 - 1) * u.diff(t) + u, u, small=eps)


def quadratic_and_cubic() -> ms.Problem:
    """u'' + ω² u + 2 ε μ u' + ε α_2 u² + ε² α_3 u³ = 0, all four parameters symbolic."""
    equation = u.diff(t, 2) + omega**2 * u + 2 * eps * mu * u.diff(t) + eps * alpha_2 * u**2 + eps**2 * alpha_3 * u**3
    return ms.Problem(equation, u, small=eps)


COUPLED = (
    u1.diff(t, 2) + omega_1**2 * u1 + eps * a * u1 * u2,
    u2.diff(t, 2) + omega_2**2 * u2 + eps * b * u1**2,
)


def two_coupled() -> ms.Problem:
    """u_1'' + ω_1² u_1 + ε a u_1 u_2 = 0, u_2'' + ω_2² u_2 + ε b u_1² = 0, the frequencies without a relation."""
    return ms.Problem(COUPLED, [u1, u2], small=eps)


def damped_duffing() -> ms.Problem:
    """u'' + ω² u + 2 ε μ u' + ε α_3 u³ = 0."""
    return ms.Problem(u.diff(t, 2) + omega**2 * u + 2 * eps * mu * u.diff(t) + eps * alpha_3 * u**3, u, small=eps)


def driven_cubic() -> ms.Problem:
    """u'' + ω² u + 2 ε μ u' + ε α_3 u³ = ε f cos Ωt with Ω = ω + εσ, everything symbolic."""
    equation = (
        u.diff(t, 2) + omega**2 * u + 2 * eps * mu * u.diff(t) + eps * alpha_3 * u**3 - eps * f * sp.cos(Omega * t)
    )
    return ms.Problem(equation, u, small=eps, resonances={Omega: omega + eps * sigma})


def one_to_two() -> ms.Problem:
    """The two coupled oscillators of `two_coupled` with ω_2 = 2ω_1 + εσ."""
    return ms.Problem(COUPLED, [u1, u2], small=eps, resonances={omega_2: 2 * omega_1 + eps * sigma})


def three_resonant() -> ms.Problem:
    """Three oscillators with frequencies ω, ω, 3ω, linear damping and every quartic term in their potential.

    The fifteen coefficients of the potential and the three of damping are symbolic, so the slow flow is long.
    """
    unknowns = [sp.Function(f"u{k}")(t) for k in (1, 2, 3)]
    quartic = combinations_with_replacement(range(3), 4)
    potential = sum(
        sp.Symbol("c_" + "".join(str(k + 1) for k in ks), real=True) * sp.prod([unknowns[k] for k in ks])
        for ks in quartic
    )
    damping = sp.symbols("mu_1 mu_2 mu_3", positive=True)
    equations = [
        x.diff(t, 2) + (n * omega) ** 2 * x + 2 * eps * c * x.diff(t) + eps * sp.diff(potential, x)
        for x, n, c in zip(unknowns, (1, 1, 3), damping, strict=True)
    ]
    return ms.Problem(equations, unknowns, small=eps)
