"""From what the user states to the canonical form that the hierarchy works on."""

from multiscale.problem.problem import Problem

__all__ = ["Problem"]
