"""Approximants of series: exact algebra, singularities, and how many digits they add where the series fails."""

from __future__ import annotations

import pickle
from fractions import Fraction

import mpmath
import numpy as np
import pytest
import sympy as sp
from hypothesis import given, settings
from hypothesis import strategies as st
from published.integration import TOLERANCE

import multiscale as ms

x, a, b = sp.symbols("x a b")
t = sp.Symbol("t", real=True)
eps = sp.Symbol("epsilon", positive=True)
u = sp.Function("u")(t)


def expanded(above: sp.Expr, below: sp.Expr, count: int) -> list[sp.Expr]:
    """The first coefficients of above/below by long division: below·c = above, power by power."""
    p = [*reversed(sp.Poly(above, x).all_coeffs()), *[sp.Integer(0)] * count]
    q = [*reversed(sp.Poly(below, x).all_coeffs()), *[sp.Integer(0)] * count]
    c: list[sp.Expr] = []
    for n in range(count):
        c.append(sp.cancel((p[n] - sum(q[k] * c[n - k] for k in range(1, n + 1))) / q[0]))
    return c


def polynomials(degree: int, lead: bool = False):
    fractions = st.integers(-9, 9).flatmap(lambda n: st.integers(1, 5).map(lambda d: Fraction(n, d)))
    first = fractions.filter(bool) if lead else fractions
    return st.tuples(first, st.lists(fractions, max_size=degree)).map(
        lambda parts: (
            sum((sp.Rational(c.numerator, c.denominator) * x**k for k, c in enumerate([parts[0], *parts[1]])))
            + sp.Integer(0)
        )
    )


@settings(max_examples=40, deadline=None, derandomize=True)
@given(polynomials(4), polynomials(4, lead=True))
def test_a_rational_function_is_recovered_from_its_series(above, below):
    coefficients = expanded(above, below, 10)
    found = ms.pade(coefficients, x)
    assert sp.cancel(found.expression - above / below) == 0
    assert sp.gcd(found.numerator, found.denominator).is_number


@settings(max_examples=40, deadline=None, derandomize=True)
@given(polynomials(7, lead=True), st.integers(0, 4), st.integers(0, 3))
def test_the_re_expansion_reproduces_the_series(series, above, below):
    coefficients = [sp.Poly(series, x).coeff_monomial(x**n) for n in range(8)]
    # No P/Q of these degrees agrees with the series where the equations for Q force Q(0) = 0.
    rows = [
        [coefficients[n - j] if n >= j else 0 for j in range(below + 1)] for n in range(above + 1, above + below + 1)
    ]
    kernel = sp.Matrix(rows).nullspace() if rows else [[1]]
    if all(v[0] == 0 for v in kernel):
        with pytest.raises(ms.EvaluationError, match="does not exist"):
            ms.pade(coefficients, x, (above, below))
        return
    found = ms.pade(coefficients, x, (above, below))
    assert found.degrees[0] <= above
    assert found.degrees[1] <= below
    assert expanded(found.numerator, found.denominator, above + below + 1) == coefficients[: above + below + 1]
    assert found.order >= above + below


def test_a_degenerate_table_names_degrees_that_exist():
    with pytest.raises(ms.EvaluationError, match=r"\[3/3\] does not exist .* take degrees=\(3, 2\)"):
        ms.pade(sp.cos(x).series(x, 0, 8), x, (3, 3))
    assert ms.pade(sp.cos(x).series(x, 0, 8), x, (3, 2)).degrees == (2, 2)


def test_symbolic_coefficients():
    found = ms.pade([1, a, a**2 + b], x)
    assert sp.series(found.expression, x, 0, 3).removeO().expand() == sp.expand(1 + a * x + (a**2 + b) * x**2)
    with pytest.raises(ms.EvaluationError, match="put in numbers by `at`"):
        found.poles  # noqa: B018
    at = found.at({a: 1, "b": 2})
    assert at.poles == pytest.approx([1 / 3])
    assert at(0.1) == pytest.approx(float(found.expression.subs({a: 1, b: 2, x: sp.Rational(1, 10)})))
    with pytest.raises(ms.EvaluationError, match="unknown symbol"):
        found.at({"c": 1})


def test_algebraic_coefficients_stay_exact():
    coefficients = expanded(1 + sp.sqrt(2) * x, 1 - sp.sqrt(3) * x, 6)
    found = ms.pade(coefficients, x)
    assert found.degrees == (1, 1)
    assert sp.simplify(found.expression - (1 + sp.sqrt(2) * x) / (1 - sp.sqrt(3) * x)) == 0


def test_an_even_series_is_treated_in_its_square():
    """The diagonal in x does not exist for an even series of degree 6; that in x² does."""
    found = ms.pade(sp.cos(x).series(x, 0, 9), x)
    assert found.degrees == (4, 4)
    assert expanded(found.numerator, found.denominator, 9) == [
        sp.cos(x).diff(x, n).subs(x, 0) / sp.factorial(n) for n in range(9)
    ]


TANGENT = sp.tan(x).series(x, 0, 20)


def test_poles_and_zeros_of_the_tangent():
    found = ms.pade(TANGENT, x, (9, 10))
    near = sorted((z for z in found.poles if abs(z) < 5), key=lambda z: (abs(z), z.real))
    assert near[:2] == pytest.approx([-np.pi / 2, np.pi / 2], rel=1e-12)
    assert near[2:4] == pytest.approx([-1.5 * np.pi, 1.5 * np.pi], rel=1e-5)
    assert found.zeros[:3] == pytest.approx([0, np.pi, -np.pi], rel=1e-8, abs=1e-12)
    assert found.doublets == ()
    points = np.linspace(-4, 4, 7)
    assert found(points) == pytest.approx(np.tan(points), rel=1e-6)


def test_noise_makes_doublets_and_exact_coefficients_none():
    exact = expanded(1 + x, (1 - 2 * x) * (1 + 3 * x), 13)
    assert ms.pade(exact, x).degrees == (1, 2)
    noise = np.random.default_rng(5).normal(size=13)
    found = ms.pade([float(c) * (1 + 1e-10 * n) for c, n in zip(exact, noise, strict=True)], x)
    assert found.degrees == (6, 6)
    assert len(found.doublets) >= 3
    paired = {z for pair in found.doublets for z in pair}
    assert sorted(z.real for z in found.poles if z not in paired and abs(z) < 0.6) == pytest.approx(
        [-1 / 3, 1 / 2], rel=1e-6
    )


@pytest.mark.parametrize("kind", ["rational", "quadratic"])
def test_shapes_and_types_of_values(kind):
    found = ms.pade(sp.exp(x).series(x, 0, 12), x, kind=kind)
    points = np.linspace(-2, 2, 6).reshape(2, 3)
    assert found(points).shape == (2, 3)
    assert found(points) == pytest.approx(np.exp(points), rel=2e-6)
    assert np.ndim(found(1)) == 0
    assert found(1j) == pytest.approx(np.exp(1j), rel=1e-9)
    with pytest.raises(ms.EvaluationError, match="expected numbers"):
        found("1")


# Quadratic approximants


@pytest.mark.parametrize(
    ("function", "points", "beyond"),
    [
        (sp.sqrt(1 - 4 * x), [0.25], 0.3),
        ((1 - sp.sqrt(1 - 4 * x)) / 2, [0.25], 0.3),
        ((1 + x) * sp.sqrt((1 + x) / (1 - 2 * x)) - x, [0.5, -1], 0.6),
    ],
    ids=str,
)
def test_a_quadratic_function_is_recovered_with_its_branch(function, points, beyond):
    found = ms.pade(function.series(x, 0, 14), x, kind="quadratic")
    numeric = sp.lambdify(x, function)
    where = np.linspace(-0.9, 0.24, 30)
    assert found(where) == pytest.approx(numeric(where), rel=1e-12)
    assert found.branch_points == pytest.approx(points)
    assert np.isnan(found(beyond))
    assert found.doublets == ()
    difference = sp.N((found.expression - function).subs(x, sp.Rational(1, 10)), 30)
    assert abs(difference) < 1e-25


def test_the_defining_equation_of_a_quadratic_approximant_holds():
    series = sp.exp(a * x).series(x, 0, 9).removeO()
    found = ms.pade(series, x, (2, 2, 2), kind="quadratic")
    rest = sp.Poly(found.P + found.Q * series + found.R * series**2, x)
    assert found.order == 7
    assert all(sp.cancel(rest.coeff_monomial(x**n)) == 0 for n in range(8))
    branch = found.at({a: 1}).expression
    assert [branch.diff(x, n).subs(x, 0) for n in range(4)] == [1, 1, 1, 1]


@pytest.mark.parametrize("series", [[0, 1], [0, 0, 0], [3, 0, 0, 0, 0], [1, 2]], ids=str)
def test_quadratic_approximants_of_very_short_series(series):
    """They agree at least with the first coefficient."""
    assert ms.pade(series, x, kind="quadratic")(0.0) == series[0]


def test_complex_coefficients_give_complex_values():
    series = [1 / sp.factorial(n) * sp.I**n for n in range(9)]
    for kind in ("rational", "quadratic"):
        assert ms.pade(series, x, kind=kind)(0.5) == pytest.approx(np.exp(0.5j), rel=1e-6)


def test_a_frequency_in_physical_parameters():
    m, k = sp.symbols("m k", positive=True)
    result = ms.expand(ms.Problem(m * u.diff(t, 2) + k * u + eps * a * u**3, u, small=eps), 4)
    found = ms.pade(result.frequency(), eps)
    assert found.degrees == (2, 2)
    difference = sp.series(found.expression - result.frequency(), eps, 0, 5).removeO()
    assert sp.simplify(difference) == 0


def test_copies_are_equal_and_repr_is_short():
    for found in (ms.pade([1, 2, 5, 7], x), ms.pade([1, 2, 5, 7], x, kind="quadratic")):
        copy = pickle.loads(pickle.dumps(found))
        assert copy == found
        assert hash(copy) == hash(found)
        assert len(repr(found)) < 60


def test_a_rational_function_is_a_quadratic_approximant_too():
    found = ms.pade(expanded(1 + x, 1 - 2 * x, 11), x, kind="quadratic")
    where = np.array([-3.0, 0.3, 0.7, 2.0])
    assert found(where) == pytest.approx((1 + where) / (1 - 2 * where), rel=1e-10)
    assert found.poles == pytest.approx([0.5])


REFUSED = {
    "too few coefficients": (([1, 2], x, (2, 2)), r"need the series through power 4, but it is known through power 1"),
    "wrong count": (([1, 2, 3], x, (1, 1, 0)), r"expected 2 integers \(L, M\)"),
    "negative degree": (([1, 2, 3], x, (2, -1)), "expected 2 integers"),
    "no polynomial": ((sp.sin(x), x), r"is no polynomial in x: give the series"),
    "negative powers": ((1 / x + x, x), "is no polynomial in x"),
    "no symbol": (([1, 2], "x"), "expected the SymPy symbol"),
    "text": (("1 + x", x), "expected a polynomial or series"),
    "infinite": (([1, sp.oo], x), "expected finite"),
    "roots of symbols": (([1, sp.sqrt(a), a], x), "replace the roots"),
    "empty": (([], x), "no coefficients"),
    "strange entries": (([1, "2"], x), "expected a number"),
}


@pytest.mark.parametrize(("arguments", "message"), REFUSED.values(), ids=REFUSED)
def test_what_is_refused(arguments, message):
    with pytest.raises(ms.EvaluationError, match=message):
        ms.pade(*arguments)


def test_unknown_kinds_are_refused():
    with pytest.raises(ms.EvaluationError, match="expected 'rational' or 'quadratic'"):
        ms.pade([1, 2, 3], x, kind="cubic")


# Digits


def digits(value: float, exact: float) -> float:
    return -np.log10(max(abs(value / exact - 1), 1e-16))


@pytest.fixture(scope="module")
def limit_cycle():
    return ms.periodic_series(ms.Problem(u.diff(t, 2) + u + eps * (u**2 - 1) * u.diff(t), u, small=eps), 60)


def cycle_frequency(e: float) -> float:
    """2π over the time between two rising passages of u' = 0, long after the transient; integrated to 1e-13."""
    integrate = pytest.importorskip("scipy.integrate")

    def rhs(_, y):
        return [y[1], -y[0] - e * (y[0] ** 2 - 1) * y[1]]

    def rising(_, y):
        return y[1]

    rising.direction = 1
    options = TOLERANCE | {"rtol": 1e-13}
    found = integrate.solve_ivp(rhs, (0, 60 / e + 30), [2.0, 0.0], events=rising, max_step=0.1, **options)
    times = found.t_events[0][-4:]
    return float(2 * np.pi * 3 / (times[-1] - times[0]))


# ε, order, digits of the series, of the rational and of the quadratic approximant: measured, rounded down.
CYCLE = [
    (1.0, 20, 8.3, 10.4, 10.8),
    (2.0, 20, 2.0, 5.3, 3.1),
    (2.0, 40, 1.5, 8.7, 10.2),
    (2.0, 60, 1.3, 12.5, 12.9),
    (3.0, 40, -5.6, 5.1, 6.1),
    (3.0, 60, -9.5, 7.3, 7.9),
]


@pytest.mark.parametrize(("e", "order", "plain", "rational", "quadratic"), CYCLE)
def test_digits_of_the_van_der_pol_frequency(limit_cycle, e, order, plain, rational, quadratic):
    """The radius of convergence in ε is 1.85: at 2 and 3 the series is useless, its approximants are not."""
    exact = cycle_frequency(e)
    coefficients = limit_cycle.frequency_coefficients[: order + 1]
    series = float(sum(c * sp.Integer(int(e)) ** n for n, c in enumerate(coefficients)))
    found = ms.pade(coefficients, eps), ms.pade(coefficients, eps, kind="quadratic")
    assert digits(series, exact) < plain + 0.2
    assert digits(found[0](e), exact) > rational - 0.2
    assert digits(found[1](e), exact) > quadratic - 0.2


def test_branch_points_of_the_van_der_pol_frequency(limit_cycle):
    """Nearest in ε² at modulus 3.42, angle ±1.79 rad: Andersen & Geer 1982, SIAM J. Appl. Math. 42, 678."""
    found = ms.pade(limit_cycle.frequency_coefficients, eps, kind="quadratic")
    paired = {z for pair in found.doublets for z in pair}
    lone = [z**2 for z in found.branch_points if z not in paired]
    nearest = min(lone, key=abs)
    assert abs(nearest) == pytest.approx(3.4197, rel=1e-3)
    assert abs(np.angle(nearest)) == pytest.approx(1.792, abs=2e-3)


def pendulum_series(order: int) -> list[sp.Expr]:
    """ω = π/(2K(m)), m = sin²(θ_0/2), in θ_0, exact (DLMF 19.5.1, 22.19.3): coefficients through θ_0^order."""
    m = sp.sin(x / 2).series(x, 0, order + 2).removeO() ** 2
    m = sp.Poly(m, x).as_expr()
    count = order // 2 + 1
    inner = [sp.Integer(0)] * (order + 1)
    power = sp.Poly(1, x)
    own = sp.Poly({k: c for k, c in sp.Poly(m, x).as_dict().items() if k[0] <= order}, x)
    for n in range(count):
        weight = (sp.binomial(2 * n, n) / sp.Integer(4) ** n) ** 2
        for k in range(order + 1):
            inner[k] += weight * power.coeff_monomial(x**k)
        power = sp.Poly({k: c for k, c in (power * own).as_dict().items() if k[0] <= order} or {(0,): 0}, x)
    return expanded(sp.Integer(1), sum(c * x**k for k, c in enumerate(inner)), order + 1)


@pytest.mark.parametrize(
    ("order", "plain", "rational", "quadratic"), [(8, 3.2, 4.3, 3.8), (16, 5.0, 7.0, 7.3), (24, 6.6, 10.3, 10.7)]
)
def test_digits_of_the_pendulum_frequency_at_120_degrees(order, plain, rational, quadratic):
    angle = 2 * np.pi / 3
    exact = float(mpmath.pi / (2 * mpmath.ellipk(mpmath.sin(mpmath.pi / 3) ** 2)))
    coefficients = pendulum_series(order)
    assert coefficients[2:7:2] == [-sp.Rational(1, 16), sp.Rational(1, 3072), -sp.Rational(23, 737280)]
    series = float(np.polyval([float(c) for c in reversed(coefficients)], angle))
    found = ms.pade(coefficients, x), ms.pade(coefficients, x, kind="quadratic")
    assert digits(series, exact) < plain + 0.2
    assert digits(found[0](angle), exact) > rational - 0.2
    assert digits(found[1](angle), exact) > quadratic - 0.2


def test_degrees_may_be_numpy_integers():
    """As counts from an array are."""
    coefficients, (above, below) = [1, 1, 2, 3], np.array([1, 2])
    assert ms.pade(coefficients, x, (above, below)).degrees == ms.pade(coefficients, x, (1, 2)).degrees
    with pytest.raises(ms.EvaluationError, match="2 integers"):
        ms.pade(coefficients, x, (1.0, 2.0))
