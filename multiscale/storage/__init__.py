"""Expansions as text and back: exact, versioned, and read without ever evaluating a string."""
