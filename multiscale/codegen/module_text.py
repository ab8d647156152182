"""The fixed parts of a generated module: what does not depend on the flow."""

from __future__ import annotations

__all__ = ["COMPLETED", "EVALUATED", "MISSING", "POLAR"]

EVALUATED = '''
def _evaluated(kernel, shape, t, y, parameters):
    """A kernel at arrays; the shapes are those stated at the head of the module."""
    t, *parameters = (np.asarray(x, dtype=float)[()] for x in (t, *parameters))
    y = np.asarray(y, dtype=float)
    if y.ndim < 1 or y.shape[0] != len(STATE):
        raise ValueError(f"y has shape {y.shape}: expected ({len(STATE)},) + S")
    shapes = [np.shape(x) for x in (t, *parameters)]
    batch = np.broadcast_shapes(y.shape[1:], *shapes)
    rows = [np.broadcast_to(x, batch) for x in kernel(t, *y, *parameters)]
    return np.stack(rows).reshape(shape + batch)
'''

POLAR = '''
def to_polar(y):
    """The polar state from the Cartesian one, components along axis 0."""
    y = np.asarray(y, dtype=float)
    p, q = y[0::2], y[1::2]
    phases = np.asarray(PHASES, dtype=float)
    turned = np.tensordot(phases, -np.arctan2(q, p), axes=1)
    return np.concatenate([np.hypot(p, q), turned])


def to_cartesian(y):
    """The Cartesian state from the polar one, components along axis 0."""
    y = np.asarray(y, dtype=float)
    a, turned = y[: len(PHASES)], y[len(PHASES) :]
    phases = np.asarray(PHASES, dtype=float)
    delta = np.tensordot(np.linalg.inv(phases), turned, axes=1)
    pairs = np.stack([a * np.cos(delta), -a * np.sin(delta)], axis=1)
    return pairs.reshape(y.shape)
'''

COMPLETED = '''
def _completed(found, given, detuning, arguments, formula):
    """`found` with a detuning worked out from its relation, and checked if given."""
    known = [name for name in given if name in found]
    lacking = [name for name in arguments if name not in found]
    if lacking:
        if known and known != [detuning]:
            raise ValueError(f"{known[0]} is given, but not {', '.join(lacking)}")
        return found
    values = [np.asarray(found[name], dtype=float)[()] for name in arguments]
    value = formula(*values)
    if detuning in found:
        # A small difference of frequencies is known as well as these: twelve digits.
        changed = [
            [*values[:k], x * (1 + 1e-12), *values[k + 1 :]]
            for k, x in enumerate(values)
        ]
        slack = sum(abs(formula(*others) - value) for others in changed)
        off = abs(found[detuning] - value)
        if not np.all(off <= 1e-9 * abs(value) + slack):
            text = f"{detuning} = {found[detuning]}, but the relation needs {value}"
            raise ValueError(f"{text}: give fewer of {', '.join(given)}, {detuning}")
        return found
    if not np.isfinite(value).all():
        raise ValueError(f"{detuning} has no finite value here: give it directly")
    return {**found, detuning: value}
'''

MISSING = """\
    missing = [name for name in PARAMETERS if name not in found]
    if missing:
        raise ValueError(f"missing: {', '.join(missing)}")
    return tuple(found[name] for name in PARAMETERS)
"""
