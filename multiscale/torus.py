"""Forces that depend on several phases: their average over the torus of the leading motion.

    G_k = (2π)^{-d} ∫ … ∫ g(U_0, V_0) e^{−iΦ_k} dφ_1 … dφ_d,      Φ_j = n_j · φ + (constant phases)

The rates of the oscillators and hard drives that g depends on span a lattice of rank d; φ are the angles of a basis of
it, so that a resonance is fewer angles than oscillators, and what remains are the phases γ of the slow flow. With
A_k = ½ a_k e^{iδ_k} in the rotating frame, G_k is a function of the A's that is regular where an amplitude is zero.
"""

from __future__ import annotations

from collections.abc import Callable, Sequence
from functools import cached_property

import sympy as sp

from multiscale.computed import Computation, Finished
from multiscale.expressions import Writer
from multiscale.frame import turns
from multiscale.problem.averaged.projection import TorusMean
from multiscale.problem.lattice import lattice_basis

__all__ = ["Torus"]

Pair = tuple[sp.Expr, sp.Expr]


class Torus:
    """Averages of one computation, written with the parameters of the user; `stem` names the angles φ."""

    def __init__(self, computation: Computation, stem: str) -> None:
        self._computation, self._stem = computation, stem

    @cached_property
    def _writer(self) -> Writer:
        return Writer(dict(self._computation.canonical.meanings))

    def cartesian(self, mean: TorusMean, state: Sequence[Pair]) -> Pair:
        """Real and imaginary part of G in the Cartesian state (p_j, q_j)."""

        def wave(j: int, angle: sp.Expr) -> Pair:
            p, q = state[j]
            return p * sp.cos(angle) + q * sp.sin(angle), p * sp.sin(angle) - q * sp.cos(angle)

        return self._mean(mean, wave, lambda angle: angle)

    def polar(self, mean: TorusMean, amplitudes: Sequence[sp.Expr], deviations: Sequence[sp.Expr]) -> Pair:
        """Real and imaginary part of G/A_k, A_k = ½ a_k e^{iδ_k}."""

        def wave(j: int, angle: sp.Expr) -> Pair:
            a, turned = amplitudes[j], angle + deviations[j]
            return a * sp.cos(turned), a * sp.sin(turned)

        k = mean.mode
        real, imag = self._mean(mean, wave, lambda angle: angle + deviations[k])
        return 2 * real / amplitudes[k], 2 * imag / amplitudes[k]

    def _mean(
        self, mean: TorusMean, wave: Callable[[int, sp.Expr], Pair], reference: Callable[[sp.Expr], sp.Expr]
    ) -> Pair:
        angles, phases = self._angles(mean)
        motion = {}
        for symbol, (unknown, derivative) in mean.jets:
            motion[symbol] = self._leading(self._computation.field(0, unknown, derivative), angles, wave)
        force, own = mean.force.xreplace(motion), reference(angles[mean.mode])
        limits = [(phi, 0, 2 * sp.pi) for phi in phases]
        scale = (2 * sp.pi) ** len(phases)
        return tuple(
            sign * sp.Integral(force * wave_of(own), *limits) / scale for sign, wave_of in ((1, sp.cos), (-1, sp.sin))
        )

    def _leading(self, field: Finished, angles: dict[int, sp.Expr], wave: Callable[[int, sp.Expr], Pair]) -> sp.Expr:
        """A field of level 0: Σ c z_j and drives, with their conjugates."""
        modes, terms = self._computation.modes, []
        for m, c in field.items():
            own = turns(m)
            if own < tuple(-n for n in own):
                continue
            real, imag = self._writer.quotient(c.real), self._writer.quotient(c.imag)
            mode = next((j for j in range(modes) if own[j]), None)
            if mode is not None:
                cosine, sine = wave(mode, angles[mode])
            else:
                angle = sp.Add(*(n * angles[g] for g, n in enumerate(own) if n))
                size = 2 if any(own) else 1
                cosine, sine = size * sp.cos(angle), size * sp.sin(angle)
            terms.append(real * cosine - imag * sine)
        return sp.Add(*terms)

    def _angles(self, mean: TorusMean) -> tuple[dict[int, sp.Expr], list[sp.Symbol]]:
        """(fast angle of every generator involved as a point of the torus, the angles φ)."""
        canonical = self._computation.canonical
        rates = [*canonical.bases.rates, *(d.rate for d in canonical.drives)]
        moving = [g for g in mean.generators if any(rates[g])]
        basis, coordinates = lattice_basis([tuple(rates[g]) for g in moving])
        names = [self._stem] if len(basis) == 1 else [f"{self._stem}_{i + 1}" for i in range(len(basis))]
        phases = [sp.Symbol(name, real=True) for name in names]
        modes = self._computation.modes
        constant = {modes + n: d.angle for n, d in enumerate(canonical.drives) if not any(d.rate)}
        angles = dict(constant)
        for g, row in zip(moving, coordinates, strict=True):
            angle = sp.Add(*(n * phi for n, phi in zip(row, phases, strict=True)))
            if g < modes:
                frame = self._computation.frame.angles[g]
                angle += sp.Add(*(sp.Rational(frame[n]) * phase for n, phase in constant.items()))
            angles[g] = angle
        return angles, phases
