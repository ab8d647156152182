"""Periodic motions of one undriven oscillator: limit cycles of a slow flow, and an orbit alone to very high order."""
