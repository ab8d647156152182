"""Exact polynomials in amplitudes and parameters; knows nothing of oscillators."""
