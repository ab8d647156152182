"""Steady response and its boundaries: where a motion of a given kind exists, and where it changes stability."""
