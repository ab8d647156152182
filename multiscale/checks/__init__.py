"""Checks of a result: its start, its amplitude, and its motion beside that of the equations as stated."""
