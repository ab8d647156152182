"""Checks of a result: how far it is to be trusted."""
