"""Steady states of a slow flow: all of them at given parameters, and how they change along a sweep."""
