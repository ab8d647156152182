"""Large numeric models: equations in sparse matrices, carried to a slow flow of the few modes that matter.

    M u'' + (G + ε^p C) u' + (K + ε^o K_1) u + ε^q Q(u, u) + ε^r T(u, u, u) = ε^s Σ b_d g_d(t)

The hierarchy is the one of every other problem. Its fields have vectors over the degrees of freedom as coefficients
(`algebra.vector_ring`), its linear part is inverted by sparse solves (`linear_part.sparse`), its forces are multilinear
maps of vectors (`forces.multilinear`). This room states the problem (`statement`, `matrices`), finds the modes
(`eigenmodes`), joins the rooms (`reduction`, `computation`), and hands out the result (`model`), whose slow flow is
that of an ordinary `Expansion`; `residual` puts it back into the equations.
"""
