"""How far a result is to be trusted."""
