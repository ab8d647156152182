"""Analytic forces of small unknowns by Taylor polynomials, and the states of rest they are taken about."""
