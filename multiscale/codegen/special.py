"""Functions beyond the elementary ones, and averages over a phase, as steps on a tape.

An integral over θ from 0 to 2π becomes a function of its own in the generated source, whose parameters are the symbols
in it, and a call of the quadrature in `multiscale.codegen.runtime`. Where the integrand has a kink or a jump, at h = 0
for an h that is affine in cos θ and sin θ, the angle is worked out beforehand:

    h = α cos θ + β sin θ + γ = R cos(θ − θ_0) + γ,     θ = θ_0 ± arccos(−γ/R)
"""

from __future__ import annotations

from collections.abc import Callable
from fractions import Fraction

import sympy as sp

from multiscale.codegen.tape import Integrand, Node, Tape
from multiscale.errors import EvaluationError
from multiscale.problem.averaged.guarded import Clipped, Inverse, Magnitude, Power, Reciprocal, Root
from multiscale.problem.force_law import law_name

__all__ = ["special"]

Symbols = Callable[[sp.Symbol], Node]
Evaluate = Callable[[Tape, sp.Expr, Symbols], Node]

_CALLS = {
    Inverse: "inverse_or_zero", Reciprocal: "reciprocal", Root: "root", Clipped: "clipped",
    sp.gamma: "gamma_function", sp.Abs: "absolute", Magnitude: "absolute", sp.sign: "sign", sp.tanh: "tanh",
    sp.asin: "arcsin", sp.acos: "arccos", sp.atan: "arctan", sp.asinh: "arcsinh",
}  # fmt: skip
_HALF = Fraction(1, 2)


def special(tape: Tape, x: sp.Expr, symbol: Symbols, evaluate: Evaluate) -> Node | None:
    """The node of an expression that `multiscale.codegen.calls` does not know, None where this does not either."""

    def node(y: sp.Expr) -> Node:
        return evaluate(tape, y, symbol)

    if x.func in _CALLS:
        return tape.call(_CALLS[x.func], node(x.args[0]))
    if isinstance(x, sp.besselj | sp.besseli) and x.args[0].is_Integer:
        return tape.call(x.func.__name__, node(x.args[1]), int(x.args[0]))
    if isinstance(x, Power):
        base = node(x.args[0])
        power = tape.call("exp", tape.mul(node(x.args[1]), tape.call("log", tape.call("or_one", base))))
        return tape.mul(tape.call("nonzero", base), power)
    if isinstance(x, sp.Max | sp.Min):
        result = node(x.args[0])
        for arg in x.args[1:]:
            result = _larger(tape, result, node(arg), 1 if isinstance(x, sp.Max) else -1)
        return result
    if isinstance(x, sp.Heaviside):
        half = tape.constant(_HALF)
        return tape.add(half, tape.mul(half, tape.call("sign", node(x.args[0]))))
    if isinstance(x, sp.Piecewise):
        return _piecewise(tape, x, node)
    if isinstance(x, sp.core.function.AppliedUndef) and str(x.func) in tape.laws:
        return tape.apply(law_name(x.func), *(node(arg) for arg in x.args))
    if isinstance(x, sp.Integral):
        return _integral(tape, x, symbol, evaluate)
    return None


def _larger(tape: Tape, x: Node, y: Node, sign: int) -> Node:
    """max or min of two values: ½ (x + y ± |x − y|), exact where one of them is zero."""
    distance = tape.call("absolute", tape.sub(x, y))
    total = tape.add(tape.add(x, y), distance if sign > 0 else tape.neg(distance))
    return tape.mul(tape.constant(_HALF), total)


def _piecewise(tape: Tape, x: sp.Piecewise, node: Callable[[sp.Expr], Node]) -> Node:
    if x.args[-1].args[1] != sp.true:
        raise EvaluationError(f"{x} has no value where no condition holds: end it with (value, True)")
    result = node(x.args[-1].args[0])
    for value, condition in reversed(x.args[:-1]):
        beyond = _beyond(condition)
        if beyond is None:
            raise EvaluationError(f"{x} has the condition {condition}: expected comparisons of two expressions")
        result = tape.apply("where", tape.call("positive", node(beyond)), node(value), result)
    return result


def _beyond(condition: sp.Basic) -> sp.Expr | None:
    """h, where the condition is h > 0."""
    if isinstance(condition, sp.Gt | sp.Ge):
        return condition.lhs - condition.rhs
    if isinstance(condition, sp.Lt | sp.Le):
        return condition.rhs - condition.lhs
    return None


def _integral(tape: Tape, x: sp.Integral, symbol: Symbols, evaluate: Evaluate) -> Node:
    integrand, *inner_limits, (theta, lower, upper) = x.args
    if inner_limits:
        # Over several phases: the inner averages first.
        integrand = sp.Integral(integrand, *inner_limits)
    if lower != 0 or upper != 2 * sp.pi:
        raise EvaluationError(f"{x} cannot be evaluated in generated code: only averages over a phase, 0 … 2π, can")
    names = sorted(integrand.free_symbols - {theta}, key=lambda s: str(s.name))
    inner = Tape(tape.laws)
    phase = inner.input("theta")
    inputs = {s: inner.input(f"x{k}") for k, s in enumerate(names)}
    output = evaluate(inner, integrand.replace(sp.Abs, Magnitude), lambda s: phase if s == theta else inputs[s])
    body = Integrand(inner, output, len(names), sp.srepr(x), _force_in(integrand, theta))
    kinks = _kinks(tape, integrand, theta, symbol, evaluate)
    return tape.quadrature(body, kinks, [symbol(s) for s in names])


def _force_in(integrand: sp.Expr, theta: sp.Symbol) -> str:
    """How an error spells the force: the integrand without its bare cosine or sine."""
    integrand = integrand.replace(Magnitude, sp.Abs)
    factors = [f for f in sp.Mul.make_args(integrand) if not isinstance(f, sp.cos | sp.sin)]
    if isinstance(integrand, sp.Integral):
        return _force_in(integrand.function, theta)
    return str(sp.Mul(*factors)).replace("@", "").encode("ascii", "replace").decode()


def _edges(x: sp.Expr, laws: dict[str, tuple[float, ...]]) -> set[sp.Expr]:
    """The h at whose zeros the integrand has a kink or a jump."""
    if isinstance(x, sp.Integral):
        return _grazing(x, laws)
    found: set[sp.Expr] = set()
    for f in x.atoms(sp.Abs, Magnitude, sp.sign, sp.Heaviside):
        found.update(sp.Mul.make_args(f.args[0]))
    for f in x.atoms(sp.Max, sp.Min):
        found.update(a - b for k, a in enumerate(f.args) for b in f.args[k + 1 :])
    for f in x.atoms(sp.Piecewise):
        found.update(h for _, c in f.args if (h := _beyond(c)) is not None)
    for f in x.atoms(sp.core.function.AppliedUndef):
        found.update(f.args[0] - sp.Float(k) for k in laws.get(str(f.func), ()))
    return found


def _grazing(x: sp.Integral, laws: dict[str, tuple[float, ...]]) -> set[sp.Expr]:
    """An average over one phase has its kinks in the others where h = R cos(θ − θ_0) + γ only just reaches zero."""
    integrand, *inner_limits, (theta, _, _) = x.args
    inner = sp.Integral(integrand, *inner_limits) if inner_limits else integrand
    found = set()
    for h in _edges(inner, laws):
        if theta not in h.free_symbols:
            found.add(h)
        elif (parts := _affine(h, theta)) is not None:
            radius = Magnitude(parts[0]) if parts[1] == 0 else sp.sqrt(parts[0] ** 2 + parts[1] ** 2)
            radius = Magnitude(parts[1]) if parts[0] == 0 else radius
            found |= {parts[2] - radius, parts[2] + radius}
    return found


def _affine(h: sp.Expr, theta: sp.Symbol) -> tuple[sp.Expr, sp.Expr, sp.Expr] | None:
    """(α, β, γ) with h = α cos θ + β sin θ + γ."""
    cosine, sine = sp.symbols("@cos @sin")
    flat = sp.expand(h.xreplace({sp.cos(theta): cosine, sp.sin(theta): sine}))
    if theta in flat.free_symbols or not flat.is_polynomial(cosine, sine):
        return None
    alpha, beta = flat.coeff(cosine, 1).coeff(sine, 0), flat.coeff(sine, 1).coeff(cosine, 0)
    gamma = flat.subs({cosine: 0, sine: 0})
    return None if sp.expand(flat - alpha * cosine - beta * sine - gamma) != 0 else (alpha, beta, gamma)


def _waves(h: sp.Expr, theta: sp.Symbol) -> list[sp.Expr] | None:
    """[c_0, a_1, b_1, a_2, …] with h = c_0 + Σ (a_k cos kθ + b_k sin kθ), None where h is no such sum."""
    parts: dict[int, list[sp.Expr]] = {0: [sp.Integer(0), sp.Integer(0)]}
    for term in sp.Add.make_args(sp.expand(h)):
        factor, wave = term.as_independent(theta, as_Add=False)
        if wave == 1:
            parts[0][0] += factor
            continue
        if not isinstance(wave, sp.cos | sp.sin):
            return None
        angle = sp.expand(wave.args[0])
        number = angle.coeff(theta, 1)
        phase = angle - number * theta
        if not number.is_Integer or theta in phase.free_symbols:
            return None
        cosine, sine = sp.cos(phase), -sp.sin(phase)
        if isinstance(wave, sp.sin):
            cosine, sine = sp.sin(phase), sp.cos(phase)
        own = parts.setdefault(abs(int(number)), [sp.Integer(0), sp.Integer(0)])
        own[0] += factor * cosine
        own[1] += factor * sine * sp.sign(number)
    highest = max(parts)
    rows = [parts.get(k, [sp.Integer(0), sp.Integer(0)]) for k in range(highest + 1)]
    return [rows[0][0], *(x for row in rows[1:] for x in row)] if highest else None


def _kinks(tape: Tape, integrand: sp.Expr, theta: sp.Symbol, symbol: Symbols, evaluate: Evaluate) -> list[Node]:
    result: list[Node] = []
    known = {name: law.kinks for name, law in tape.laws.items()}
    edges = {h for h in _edges(integrand, known) if theta in h.free_symbols}
    for h in sorted(edges, key=sp.default_sort_key):
        if (parts := _affine(h, theta)) is not None:
            a, b, c = (evaluate(tape, part, symbol) for part in parts)
            result += [angle for angle in _zeros(tape, a, b, c) if angle not in result]
        elif (waves := _waves(h, theta)) is not None:
            nodes = [evaluate(tape, part, symbol) for part in waves]
            result += [tape.apply("wave_zero", tape.constant(k), *nodes) for k in range(len(nodes) - 1)]
    return result


def _zeros(tape: Tape, alpha: Node, beta: Node, gamma: Node) -> tuple[Node, Node]:
    """The two angles where α cos θ + β sin θ + γ changes sign, or a harmless pair where it does not."""
    zero, one = tape.constant(0), tape.constant(1)
    if beta == zero:
        middle, radius = zero, alpha
    elif alpha == zero:
        middle, radius = tape.mul(tape.constant(2), tape.call("arctan", one)), beta
    else:
        radius = tape.call("root", tape.add(tape.mul(alpha, alpha), tape.mul(beta, beta)))
        # tan(θ_0/2) = β/(R + α)
        slope = tape.mul(beta, tape.call("inverse_or_zero", tape.add(radius, alpha)))
        middle = tape.mul(tape.constant(2), tape.call("arctan", slope))
    cosine = tape.call("clipped", tape.neg(tape.mul(gamma, tape.call("inverse_or_zero", radius))))
    half = tape.call("arccos", cosine)
    return tape.add(middle, half), tape.sub(middle, half)
