"""Checks on finished expansions, by routes that do not go through the engine."""
