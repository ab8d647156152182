"""Systems of different kinds with numbers and starts, for the checks of motions."""

from __future__ import annotations

import warnings
from dataclasses import dataclass, field, replace
from fractions import Fraction
from functools import cache
from typing import Any

import sympy as sp

import multiscale as ms
from multiscale.convention import rebuilt

t = sp.Symbol("t", real=True)
names = "epsilon mu alpha beta f h sigma omega omega_1 omega_2 Omega lambda"
eps, mu, alpha, beta, f, h, sigma, w, w1, w2, Om, lam = sp.symbols(names, positive=True)
Om2 = sp.Symbol("Omega_2", positive=True)
u, v = sp.Function("u")(t), sp.Function("v")(t)
du, dv, ddu, ddv = u.diff(t), v.diff(t), u.diff(t, 2), v.diff(t, 2)
VALUES = {
    mu: 0.2,
    alpha: 0.8,
    beta: 0.6,
    f: 0.7,
    h: 0.5,
    sigma: 0.4,
    w: 1.1,
    w1: 0.9,
    w2: 2.3,
    Om: 1.7,
    lam: 0.3,
}


@dataclass(frozen=True)
class System:
    equations: Any
    unknowns: Any = u
    resonances: dict = field(default_factory=dict)
    ordering: dict | None = None
    start: tuple[float, ...] = (0.9, 0.3)

    @property
    def problem(self) -> ms.Problem:
        carried = {"small": eps} if self.ordering is None else {"ordering": self.ordering}
        return ms.Problem(self.equations, self.unknowns, resonances=self.resonances, **carried)

    @property
    def values(self) -> dict[sp.Symbol, float]:
        return {s: VALUES[s] for s in self.problem.parameters}

    @property
    def initial(self) -> dict[sp.Expr, float]:
        unknowns = self.problem.unknowns
        return dict(zip([x for y in unknowns for x in (y, y.diff(t))], self.start, strict=True))


cubic = ddu + w**2 * u + eps * (2 * mu * du + alpha * u**3)
SYSTEMS = {
    "self-excited": System(ddu + w**2 * u + eps * (u**2 - 1) * du),
    "quadratic and cubic": System(ddu + w**2 * u + eps * alpha * u**2 + eps**2 * beta * u**3),
    "inertial": System((1 + eps * alpha * u**2) * ddu + eps * alpha * u * du**2 + w**2 * u),
    "damped": System(cubic + eps * beta * u**2 + eps * h * du**3),
    "two oscillators": System(
        [
            ddu + w1**2 * u + eps * (mu * du + alpha * u * v + beta * v * ddv),
            ddv + w2**2 * v + eps * (mu * dv + h * u**2 + alpha * v**3),
        ],
        (u, v),
        start=(0.8, -0.3, 0.4, 0.5),
    ),
    "driven": System(cubic - eps * f * sp.cos(Om * t), resonances={Om: w + eps * sigma}),
    "driven hard": System(cubic - f * sp.cos(Om * t + 1), resonances={3 * Om: w + eps * sigma}, start=(0.5, 0.1)),
    "parametric": System(cubic + eps * h * u * sp.cos(Om * t), resonances={Om: 2 * w + eps * sigma}),
    "one to two": System(
        [ddu + w1**2 * u + eps * alpha * u * v, ddv + w2**2 * v + eps * (beta * u**2 + mu * dv)],
        (u, v),
        {w2: 2 * w1 + eps * sigma},
        start=(0.7, 0.2, -0.4, 0.5),
    ),
    "one to two, by the unknown": System(
        [ddu + w1**2 * u + eps * alpha * u * v, h * ddv + h * w2**2 * v + eps * (beta * u**2 + mu * dv)],
        (u, v),
        {v: 2 * w1 + eps * sigma},
        start=(0.7, 0.2, -0.4, 0.5),
    ),
    "ordering": System(
        ddu + w**2 * u + 2 * mu * du + alpha * u**2 + beta * u**3 - f * sp.cos(Om * t),
        resonances={Om: w + sigma},
        ordering={u: 1, mu: 1, f: 2, sigma: 1},
    ),
    "two drives": System(
        cubic - eps * f * (sp.cos(Om * t) + sp.sin(Om2 * t)), resonances={Om: w + eps * sigma, Om2: w - eps * lam}
    ),
    "slow stiffness": System(ddu + w**2 * (1 + eps * t / 4) * u + eps * (mu * du + alpha * u**3)),
}


@cache
def expanded(name: str, order: int) -> ms.Expansion:
    with warnings.catch_warnings():
        warnings.simplefilter("ignore", ms.OrderingWarning)
        return ms.expand(SYSTEMS[name].problem, order)


def perturbed(expansion: ms.Expansion, *, flow: int = 0, displacement: int = 0) -> ms.Expansion:
    """The expansion with D_n A_1 increased by iA_1/4, n = `flow`, or U_n by A² e^{2iωT_0}/4 + conjugate.

    With `ordering` powers of 5μ (μ of order 1) make the change one of level n, A itself counting as one order.
    """
    computation = expansion.computation
    tower = computation.hierarchy.tower
    ring = tower.ring
    z = ring.generators[ring.spec.first_pair]
    counted = expansion.problem.ordering is not None

    def quarter(power: int) -> Any:
        power = power if counted else 0
        return ring.read({(("mu", power),) if power else (): Fraction(5**power, 4)})

    first = computation.canonical.spec.pairs[0][0]
    levels = range(1, expansion.order + 1)
    changes = [
        [
            d.images.get(pair[0], ring.zero)
            + (quarter(n) * ring.generators[0] * z if n == flow and pair[0] == first else ring.zero)
            for pair in computation.canonical.spec.pairs[: computation.modes]
        ]
        for n, d in zip(levels, tower.time[1:], strict=True)
    ]
    wave = quarter(displacement - 1) * z * z if displacement else ring.zero
    fields = [
        [x + (wave + ring.conjugate(wave) if n == displacement and k == 0 else ring.zero) for k, x in enumerate(level)]
        for n, level in zip(levels, tower.jets[0][1:], strict=True)
    ]
    return replace(expansion, computation=rebuilt(computation, fields, changes))
