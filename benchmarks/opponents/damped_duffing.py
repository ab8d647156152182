"""The slow flow of a damped Duffing oscillator to second order, written by hand in NumPy.

u'' + ω² u + 2 ε μ u' + ε α u³ = 0,    u = p cos ωt + q sin ωt + …,    x = ε α (p² + q²)/ω²

dp/dt = g p + h q,  dq/dt = g q − h p,    g = εμ (3x/8 − 1),    h = ω x (3/8 − 15x/256) − ε²μ²/(2ω)
"""

from __future__ import annotations

from collections.abc import Callable

import numpy as np

__all__ = ["flow", "flow_bound", "flow_of_numbers"]


def flow(t, y, alpha, epsilon, mu, omega):
    """For one state (2,) and for many (2, n)."""
    p, q = y
    x = (epsilon * alpha / omega**2) * (p * p + q * q)
    g = (0.375 * epsilon * mu) * x - epsilon * mu
    h = x * (0.375 * omega - (15 / 256 * omega) * x) - epsilon**2 * mu**2 / (2 * omega)
    return np.array([g * p + h * q, g * q - h * p])


def flow_of_numbers(t, y, alpha, epsilon, mu, omega):
    """For one state only, calculating with Python numbers."""
    p, q = y.tolist()
    x = (epsilon * alpha / omega**2) * (p * p + q * q)
    g = (0.375 * epsilon * mu) * x - epsilon * mu
    h = x * (0.375 * omega - (15 / 256 * omega) * x) - epsilon**2 * mu**2 / (2 * omega)
    return np.array([g * p + h * q, g * q - h * p])


def flow_bound(alpha: float, epsilon: float, mu: float, omega: float) -> Callable:
    """`flow` with its parameters fixed and everything that depends on them alone worked out beforehand."""
    scale, decay, first = epsilon * alpha / omega**2, epsilon * mu, 0.375 * omega
    slope, second, shift = 0.375 * decay, 15 / 256 * omega, decay**2 / (2 * omega)

    def bound(t, y):
        p, q = y
        x = scale * (p * p + q * q)
        g = slope * x - decay
        h = x * (first - second * x) - shift
        return np.array([g * p + h * q, g * q - h * p])

    return bound
