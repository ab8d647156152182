"""The residual of the user's own equations along the slow flow, in high precision.

The room reads the statement as the user wrote it and the SymPy expressions that an expansion publishes, nothing else:
no ring, no hierarchy, no force, no linear part.

    u = Σ εⁿ U_n(A, t),    dA/dt = Σ εⁿ D_nA    ⟹    equations = O(ε^{N+1})

`statement` and `claim` say what is given, `draws` chooses where it is looked at, `jets` and `evaluation` are the
arithmetic, `motion` follows the slow flow and measures, `amplitudes` looks at what a residual cannot see.
"""
