"""Chains, strings and nets of masses as matrices and springs, and coefficients of slow flows as numbers."""

import numpy as np
import scipy.sparse as sparse

import multiscale as ms
from multiscale.codegen.functions import coefficient_function


def stretches(n):
    """Elongations of the n + 1 springs of a chain between walls."""
    return sparse.diags([1.0, -1.0], [0, -1], shape=(n + 1, n)).tocsr()


def chain(n, foundation, seed=1, quadratic=0.3, cubic=0.5):
    """Masses and stiffnesses scattered a little; the springs between them and to the walls are nonlinear."""
    rng = np.random.default_rng(seed)
    b = stretches(n)
    mass = sparse.diags(rng.uniform(0.9, 1.1, n))
    stiffness = b.T @ sparse.diags(rng.uniform(0.9, 1.1, n + 1)) @ b + foundation * sparse.identity(n)
    k2 = None if quadratic is None else quadratic * rng.uniform(0.5, 1.0, n + 1)
    return mass, stiffness, ms.Springs(b, k2, cubic * rng.uniform(0.5, 1.0, n + 1))


def string(n, foundation, cubic):
    """A string of unit length, tension and density on a cubic foundation, by n masses."""
    h = 1 / (n + 1)
    b, one = stretches(n), sparse.identity(n)
    return h * one, b.T @ b / h + foundation * h * one, ms.Springs(one, cubic=cubic * h)


def tensors(springs):
    """The same springs as dense arrays (quadratic, cubic)."""
    b = springs.elongation.toarray()
    ones = np.ones(len(b))
    k2 = 0 * ones if springs.quadratic is None else springs.quadratic * ones
    quadratic = np.einsum("s,si,sj,sk->ijk", k2, b, b, b)
    return quadratic, np.einsum("s,si,sj,sk,sl->ijkl", springs.cubic * ones, b, b, b, b)


def coefficients(expansion, **parameters):
    """{(level, mode, exponents): complex} of the slow flow."""
    keys, function = coefficient_function(expansion.problem, expansion.computation)
    values = function(0.0, np.zeros(0), *function.values({"epsilon": 1.0, **parameters}))
    return dict(zip(keys, values[:, 0] + 1j * values[:, 1], strict=True))


def difference(one, other):
    """The largest difference of two tables of coefficients."""
    return max(abs(one.get(key, 0) - other.get(key, 0)) for key in {*one, *other})
