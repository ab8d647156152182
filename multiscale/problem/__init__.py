"""From what the user states to the canonical form that the hierarchy works on."""

from multiscale.problem.problem import Problem
from multiscale.problem.small.states_of_rest import RestState, states_of_rest

__all__ = ["Problem", "RestState", "states_of_rest"]
