"""Ring elements as FLINT multivariate rational polynomials (python-flint, optional).

Elements are `fmpq_mpoly` in lexicographic order with ``i`` first, so that the remainder on division by ``i**2 + 1``, by
``g**2 - p`` and by ``s*h - 1`` *is* the reduced element. The divisors of the latter kind share no variable with each
other, hence one pass each suffices.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from fractions import Fraction
from operator import itemgetter
from typing import Any

try:
    from flint import Ordering, fmpq, fmpq_mpoly_ctx
except ImportError as error:  # pragma: no cover - exercised by the bare-environment check
    raise ImportError(
        "the 'flint' representation needs python-flint: pip install 'multiscale-expansions[fast]'"
    ) from error

from multiscale.algebra.polynomial import Frozen
from multiscale.algebra.ring import Exponents, Key, NamedTerms, RingSpec

__all__ = ["FlintRing"]


def _ascii(name: str) -> str:
    """FLINT takes ASCII names only; the names of `spec` are ours, these are its."""
    return name.encode("ascii", "backslashreplace").decode()


class FlintRing(NamedTerms):
    """A `Ring` on FLINT; see `multiscale.algebra.ring` for the contract."""

    representation = "flint"

    def __init__(self, spec: RingSpec) -> None:
        self.spec = spec
        self._context = fmpq_mpoly_ctx.get([_ascii(name) for name in spec.names], Ordering.lex)
        self.generators: tuple[Any, ...] = tuple(self._context.gens())
        self.zero = self._context.constant(0)
        self.one = self._context.constant(1)
        self._images = [self.generators[k] for k in spec.partner]
        self._images[0] = -self.generators[0]
        self._squares = [(0, self.generators[0] ** 2 + 1)]
        for name, value in spec.roots:
            k = spec.index[name]
            self._squares.append((k, self.generators[k] ** 2 - self.read(dict(value))))
        # Moduli first: what they give may meet a reciprocal.
        generators = self.generators
        moduli = [(g, h, generators[g] * generators[h] - generators[r] ** 2) for g, h, r in spec.squared_moduli]
        self._inverses = moduli + [(g, h, self.generators[g] * self.generators[h] - 1) for g, h in spec.inverses]

    def constant(self, value: Fraction | int) -> Any:
        value = Fraction(value)
        return self._context.constant(fmpq(value.numerator, value.denominator))

    def rational(self, x: Any) -> Fraction | None:
        if not x.is_constant():
            return None
        c = x.leading_coefficient() if x else fmpq(0)
        return Fraction(int(c.p), int(c.q))

    def from_terms(self, terms: Mapping[Exponents, Fraction]) -> Any:
        return self._context.from_dict({m: fmpq(c.numerator, c.denominator) for m, c in terms.items()})

    def terms(self, x: Any) -> list[tuple[Exponents, Fraction]]:
        return [(tuple(map(int, m)), Fraction(int(c.p), int(c.q))) for m, c in zip(x.monoms(), x.coeffs(), strict=True)]

    def normal(self, x: Any) -> Any:
        degrees = x.degrees()
        # The square of a root may contain roots after it, so that degrees are looked at again when one was reduced.
        for k, relation in self._squares:
            if degrees[k] > 1:
                x = x % relation
                degrees = x.degrees()
        if self.spec.moduli and self._inverses:
            for _, _, relation in self._inverses:
                x = x % relation
            return x
        for g, h, relation in self._inverses:
            if degrees[g] and degrees[h]:
                x = x % relation
        return x

    def conjugate(self, x: Any) -> Any:
        return x.compose(*self._images)

    def diff(self, x: Any, generator: int) -> Any:
        return x.derivative(generator)

    def split(self, x: Any, indices: tuple[int, ...], key: Mapping[Exponents, Key | None]) -> dict[Key, Any]:
        groups: dict[Key, dict[Exponents, Any]] = {}
        pick = itemgetter(*indices)
        for m, c in zip(x.monoms(), x.coeffs(), strict=True):
            name = key[pick(m)]
            if name is not None:
                groups.setdefault(name, {})[m] = c
        return {name: self._context.from_dict(part) for name, part in groups.items()}

    def quotient(self, x: Any, divisor: Any) -> Any | None:
        result, remainder = divmod(x, divisor)
        return None if remainder else result

    def factor(self, x: Any) -> tuple[Fraction, list[tuple[Any, int]]]:
        content, factors = x.factor()
        return Fraction(int(content.p), int(content.q)), [(p, int(e)) for p, e in factors]

    def extended(self, reciprocals: Sequence[tuple[str, Frozen]]) -> FlintRing:
        return FlintRing(self.spec.with_reciprocals(reciprocals))

    def lift(self, x: Any) -> Any:
        return x.project_to_context(self._context)
