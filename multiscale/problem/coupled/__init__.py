"""Equations coupled at leading order: the roots of det L_0(s), the shapes of modes, relations between them."""
