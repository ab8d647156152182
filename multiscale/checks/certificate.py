"""Certificate of an expansion: its residual in the user's own equations is of the order promised.

    u = U_0 + … + εᴺU_N,  dA/dt = εD_1A + … + εᴺD_NA    ⟹    |equations| = O(ε^{N+1})

That is what an expansion of order N means; how far the motion is in error follows from it by theorems, and is measured
elsewhere. Parts of U_n at a natural frequency redefine the amplitude and can leave no residual; they are held against
the amplitude convention.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from math import isinf

import sympy as sp

from multiscale.checks.residual.claim import Claim, claim_of
from multiscale.checks.residual.examination import Examination
from multiscale.checks.residual.statement import stated
from multiscale.errors import EvaluationError, UnsupportedTermError
from multiscale.expansion import Expansion

__all__ = ["Certificate", "certify"]


@dataclass(frozen=True, repr=False)
class Certificate:
    """What `certify` found.

    Attributes
    ----------
    order : int
        N of the expansion.
    equations : tuple of Expr
        The equations as the user stated them.
    exponents : tuple of float
        For each equation the observed power of ε in its residual, at its worst point; ``inf`` where the residual is
        zero to rounding. A power common to an equation, as orders of unknowns give it, is divided out.
    departures : tuple of str
        Where the fields depart from the amplitude convention of the expansion; empty when they keep it.
    points : tuple of mappings
        The random parameters, amplitudes and times at which the expansion was looked at; a parameter that carries an
        order q stands in the equations as ε^q times the value given here.
    small : tuple of float
        The two values of the small parameter.
    digits : int
        Decimal digits to which the residual was known.
    tolerance : float
        By how much an exponent may fall short.
    """

    order: int
    equations: tuple[sp.Expr, ...]
    exponents: tuple[float, ...]
    departures: tuple[str, ...]
    points: tuple[Mapping[sp.Symbol, sp.Expr], ...]
    small: tuple[float, float]
    digits: int
    tolerance: float

    @property
    def expected(self) -> int:
        """N + 1, the least exponent of a residual."""
        return self.order + 1

    @property
    def convention(self) -> bool:
        """Whether the amplitudes are what the expansion says they are."""
        return not self.departures

    @property
    def passed(self) -> bool:
        """Whether every exponent is a whole number, at least N + 1, and the amplitude convention is kept."""
        return self.convention and all(map(self._suffices, self.exponents))

    def _suffices(self, exponent: float) -> bool:
        # With floats the small parameter is not so tiny that exponents are whole to many digits.
        whole = self.digits == 16 or isinf(exponent) or abs(exponent - round(exponent)) <= self.tolerance
        return whole and exponent >= self.expected - self.tolerance

    def require(self) -> None:
        """Nothing if the certificate passed; else an error that names the equation and both exponents.

        Raises
        ------
        EvaluationError
            The certificate did not pass. (That class, as a numerical evaluation did not come out as it must.)
        """
        for equation, exponent in zip(self.equations, self.exponents, strict=True):
            if not self._suffices(exponent):
                text = str(equation)
                shown = text if len(text) < 200 else f"{text[:190]} …"
                raise EvaluationError(
                    f"the residual of the equation {shown} = 0 falls as the power {exponent:.3g} of the small "
                    f"parameter, expected a whole power of at least {self.expected} for an expansion of order "
                    f"{self.order}: a term of the slow flow or of a field is wrong"
                )
        if self.departures:
            raise EvaluationError(f"the amplitude convention is not kept; {'; '.join(self.departures)}")

    def __repr__(self) -> str:
        verdict = "passed" if self.passed else "failed"
        shown = ", ".join("exact" if isinf(x) else f"{x:.3g}" for x in self.exponents)
        kept = "kept" if self.convention else "not kept"
        return (
            f"Certificate({verdict}: exponents {shown} of at least {self.expected}, convention {kept}, "
            f"{len(self.points)} points, {self.digits} digits)"
        )


def certificate_of(examination: Examination, claim: Claim, equations: tuple[sp.Expr, ...]) -> Certificate:
    """The certificate of a claim before an examination."""
    points = []
    for draw in examination.draws:
        amplitudes = {A: x + sp.I * y for A, (x, y) in zip(claim.amplitudes, draw.amplitudes, strict=True)}
        points.append({**draw.values, **amplitudes, examination.statement.time: draw.time})
    coarse, fine = map(float, examination.small)
    return Certificate(
        claim.order,
        equations,
        examination.exponents(claim),
        examination.departures(claim),
        tuple(points),
        (coarse, fine),
        examination.digits,
        examination.tolerance,
    )


def _refuse_averages(expansion: Expansion) -> None:
    canonical, problem = expansion.computation.canonical, expansion.problem
    if not (canonical.harmonics or canonical.torus or canonical.left_out):
        return
    atoms = set().union(*(x.atoms(sp.core.function.Application, sp.Pow) for x in problem.equations))
    rough = [f for f in atoms - set(problem.unknowns) if not _is_polynomial(f, problem.unknowns)]
    # The largest of them says most.
    named = f" ({max(map(str, rough), key=lambda x: (len(x), x))})" if rough else ""
    raise UnsupportedTermError(
        f"certify needs a residual that falls as a power of {problem.small}; this expansion averages a force that is "
        f"not polynomial{named} over a cycle and leaves its other harmonics in the equations. Use compare(expansion, "
        "…), which integrates the equations as stated and gives the order of the error of the motion"
    )


def _is_polynomial(x: sp.Expr, unknowns: Sequence[sp.Expr]) -> bool:
    plain = x.xreplace({d: sp.Dummy() for d in x.atoms(sp.Derivative)} | {u: sp.Dummy() for u in unknowns})
    return not plain.atoms(sp.Dummy) or plain.is_polynomial(*plain.atoms(sp.Dummy)) is True


def certify(expansion: Expansion, *, seed: int = 0) -> Certificate:
    """Check an expansion against the equations as they were stated, by a route that does not go through the engine.

    The published expressions of slow flow and fields are evaluated at random exact parameters and states, with many
    digits and at two tiny values of the small parameter; the amplitudes follow the slow flow as Taylor series in time.
    Drives keep their exact phase, detunings are held fixed, symbols keep their assumptions. A function of slow time
    that the equations leave undefined stands for an exponential with random coefficients. For "peak" amplitudes the
    peak of the fields is compared with the amplitude.

    Where floats of the equations enter the result, it is known to about 16 digits: the small parameter is then less
    tiny, ``tolerance`` 0.3 and ``digits`` 16, and amplitudes are taken where the corrections are about as large as the
    leading motion. An error of a few per cent of the last level may then stay unseen, most of all in modes without a
    closed form; state numbers as rationals where a sharp answer is wanted.

    Parameters
    ----------
    expansion : Expansion
    seed : int
        Of the random points; one seed gives one certificate.

    Returns
    -------
    Certificate
        ``passed``, ``exponents``, ``points``, ``digits``, …; ``require()`` raises if it did not pass.

    Raises
    ------
    EvaluationError
        No admissible parameters were found, or an expression has no value in high precision.
    UnsupportedTermError
        The slow flow holds averages of a force that is not polynomial, such as ``|u'|u'``: only
        the harmonics that meet a natural frequency are carried, so that the residual is not small. See `compare`.

    Examples
    --------
    >>> import sympy as sp, multiscale as ms
    >>> t = sp.Symbol("t", real=True)
    >>> eps, mu, f, w, sigma, Omega = sp.symbols("epsilon mu f omega sigma Omega", positive=True)
    >>> u = sp.Function("u")(t)
    >>> equation = u.diff(t, 2) + w**2*u + eps*(2*mu*u.diff(t) + u**3 - f*sp.cos(Omega*t))
    >>> problem = ms.Problem(equation, u, small=eps, resonances={Omega: w + eps*sigma})
    >>> certificate = ms.certify(ms.expand(problem, order=2))
    >>> certificate
    Certificate(passed: exponents 3 of at least 3, convention kept, 2 points, 130 digits)
    >>> certificate.require()
    """
    if not isinstance(expansion, Expansion):
        raise EvaluationError(f"certify was given a {type(expansion).__name__}: call expand first")
    _refuse_averages(expansion)
    examination = Examination(stated(expansion.problem), claim_of(expansion), seed)
    return certificate_of(examination, examination.claim, expansion.problem.equations)
