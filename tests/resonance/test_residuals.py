"""Driven, resonant and slowly varying problems: the residual of the user's equations is of the order promised.

Detunings are held fixed and drives keep their exact phase. The slow flows are also perturbed, which must be seen.
"""

from __future__ import annotations

import pytest
import sympy as sp
from support.claims import examination_of, flow_raised

import multiscale as ms

t = sp.Symbol("t", real=True)
names = "epsilon mu alpha beta f h sigma delta phi omega omega_1 omega_2 Omega Omega_1 Omega_2 lambda"
eps, mu, alpha, beta, f, h, sigma, delta, phi, w, w1, w2, Om, Om1, Om2, lam = sp.symbols(names, positive=True)
u, v, x = (sp.Function(name)(t) for name in "uvx")
plain = u.diff(t, 2) + w**2 * u
cubic = plain + eps * 2 * mu * u.diff(t) + eps * alpha * u**3


def problem(equations, unknowns=u, resonances=()):
    return ms.Problem(equations, unknowns, small=eps, resonances=resonances)


CASES = {
    "primary": lambda: problem(cubic - eps * f * sp.cos(Om * t), resonances={Om: w + eps * sigma}),
    "primary with a phase": lambda: problem(cubic - eps * f * sp.sin(Om * t + phi), resonances={Om: w + eps * sigma}),
    "primary, phase a number": lambda: problem(cubic - eps * f * sp.cos(Om * t + 1), resonances={Om: w + eps * sigma}),
    "primary, natural frequency eliminated": lambda: problem(
        cubic - eps * f * sp.cos(Om * t), resonances={w: Om - eps * sigma}
    ),
    "primary, squares": lambda: problem(cubic - eps * f * sp.cos(Om * t), resonances={w**2: Om**2 + eps * delta}),
    "primary, squares the other way": lambda: problem(
        cubic - eps * f * sp.cos(Om * t), resonances={Om**2: w**2 + eps * delta}
    ),
    "detuning of second order": lambda: problem(
        plain + eps * beta * u**2 + eps**2 * (2 * mu * u.diff(t) + alpha * u**3 - f * sp.cos(Om * t)),
        resonances={Om: w + eps**2 * sigma},
    ),
    "frequency in coefficients": lambda: problem(
        cubic - eps * f * Om**2 / (1 + Om) * sp.cos(Om * t), resonances={Om: w + eps * sigma}
    ),
    "superharmonic": lambda: problem(cubic - f * sp.cos(Om * t), resonances={Om: w / 3 + eps * sigma}),
    "superharmonic, tripled": lambda: problem(cubic - f * sp.cos(Om * t), resonances={3 * Om: w + eps * sigma}),
    "subharmonic": lambda: problem(cubic - f * sp.cos(Om * t), resonances={Om: 3 * w + eps * sigma}),
    "hard, off resonance": lambda: problem(cubic - f * sp.cos(Om * t)),
    "constant force": lambda: problem(cubic + eps * beta * u**2 - f - eps * h),
    "parametric": lambda: problem(cubic + eps * h * u * sp.cos(Om * t), resonances={Om: 2 * w + eps * sigma}),
    "parametric on velocity and acceleration": lambda: problem(
        cubic + eps * h * (u.diff(t) + u.diff(t, 2)) * sp.cos(Om * t), resonances={Om: 2 * w + eps * sigma}
    ),
    "drive and parametric": lambda: problem(
        cubic + eps * h * u * sp.cos(2 * Om * t + phi) - eps * f * sp.cos(Om * t), resonances={Om: w + eps * sigma}
    ),
    "two drives, combination": lambda: problem(
        cubic - f * sp.cos(Om1 * t) - h * sp.sin(Om2 * t), resonances={2 * Om1 + Om2: w + eps * sigma}
    ),
    "two drives near one mode": lambda: problem(
        cubic - eps * f * sp.cos(Om1 * t) - eps * h * sp.cos(Om2 * t),
        resonances={Om1: w + eps * sigma, Om2: w + eps * delta},
    ),
    "squared drive": lambda: problem(cubic - eps * f * sp.cos(Om * t) ** 2, resonances={Om: w / 2 + eps * sigma}),
    "one to two": lambda: problem(
        [u.diff(t, 2) + w1**2 * u + eps * alpha * u * v, v.diff(t, 2) + w2**2 * v + eps * beta * u**2],
        [u, v],
        {w2: 2 * w1 + eps * sigma},
    ),
    "one to two, by the unknown": lambda: problem(
        [u.diff(t, 2) + w1**2 * u + eps * alpha * u * v, v.diff(t, 2) + w2**2 * v + eps * beta * u**2],
        [u, v],
        {w2: 2 * w1 + eps * sigma},
    ),
    "one to three with a drive": lambda: problem(
        [
            u.diff(t, 2) + w1**2 * u + eps * alpha * u**2 * v,
            v.diff(t, 2) + w2**2 * v + eps * (beta * u**3 - f * sp.cos(Om * t) + mu * v.diff(t)),
        ],
        [u, v],
        {w2: 3 * w1 + eps * sigma, Om: w2 + eps * delta},
    ),
    "sum of two modes": lambda: problem(
        [
            u.diff(t, 2) + w1**2 * u + eps * h * v * sp.cos(Om * t),
            v.diff(t, 2) + w2**2 * v + eps * (beta * u * sp.cos(Om * t) + alpha * v**3),
        ],
        [u, v],
        {Om: w1 + w2 + eps * sigma},
    ),
    "three modes": lambda: problem(
        [
            u.diff(t, 2) + w1**2 * u + eps * alpha * v * x,
            v.diff(t, 2) + w2**2 * v + eps * beta * u * x,
            x.diff(t, 2) + w**2 * x + eps * h * u * v,
        ],
        [u, v, x],
        {w: w1 + w2 + eps * sigma},
    ),
    "decaying drive": lambda: problem(
        cubic - eps * f * sp.exp(-eps * lam * t) * sp.cos(Om * t), resonances={Om: w + eps * sigma}
    ),
    "slow parameter": lambda: problem(plain + eps * alpha * u**3 * (1 + sp.sin(eps * t) / 2)),
    "slow frequency": lambda: problem(u.diff(t, 2) + (1 + eps * t) * u + eps * alpha * u**3),
    "slow stiffness over a mass": lambda: problem(
        h * u.diff(t, 2) + f * (2 + sp.sin(eps * t)) * u + eps * alpha * u**3
    ),
    "chirp": lambda: problem(
        cubic - eps * f * sp.cos(Om * t + eps**2 * lam * t**2 / 2), resonances={Om: w + eps * sigma}
    ),
    "drive at a detuned number": lambda: problem(
        u.diff(t, 2) + u + eps * u**3 - eps * f * sp.cos((1 + eps * sigma) * t)
    ),
}


@pytest.mark.parametrize("name", CASES)
def test_residual_has_the_order_promised(name):
    stated = CASES[name]()
    order = 2 if len(stated.unknowns) > 1 or name.startswith("two drives") else 3
    certificate = ms.certify(ms.expand(stated, order))
    certificate.require()
    assert min(certificate.exponents) > order + 1 - 0.01


@pytest.mark.parametrize("name", CASES)
@pytest.mark.parametrize("level", [1, 2])
def test_a_perturbed_slow_flow_is_seen(name, level):
    examination = examination_of(ms.expand(CASES[name](), 2))
    change = examination.claim.amplitudes[0] * sp.I / 1000
    assert min(examination.exponents(flow_raised(examination.claim, level, change))) < level + 0.01
