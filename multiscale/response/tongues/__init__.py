"""Boundaries of parametric instability: where a linear periodic equation has periodic solutions."""
