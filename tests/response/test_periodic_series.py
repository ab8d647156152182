"""The periodic orbit alone: against the general engine, other arithmetic and other routes, and what is refused."""

from __future__ import annotations

import pickle
import random
from fractions import Fraction as F

import numpy as np
import pytest
import sympy as sp
from published.integration import slope
from published.lindstedt import periodic_orbit as by_fractions

import multiscale as ms

t = sp.Symbol("t", real=True)
theta = sp.Symbol("theta", real=True)
eps, beta, gamma, w0 = sp.symbols("epsilon beta gamma omega_0", positive=True)
alpha = sp.Symbol("alpha", real=True)
u = sp.Function("u")(t)
v = sp.Function("v")(t)
du, ddu = u.diff(t), u.diff(t, 2)

VAN_DER_POL = ddu + u + eps * (u**2 - 1) * du
DUFFING = ddu + u + eps * u**3


def stated(equation):
    return ms.Problem(equation, u, small=eps)


def differences(found, wanted):
    """Coefficients of found − wanted, for two sequences; trailing terms of the longer are left out."""
    return [sp.simplify(x - y) for x, y in zip(found, wanted, strict=False)]


# Against the general engine

ISOLATED = {
    "van der Pol": (VAN_DER_POL, 8),
    "Rayleigh": (ddu + u + eps * (du**2 / 3 - 1) * du, 6),
    "irrational amplitude": (ddu + u + eps * (u**2 - 2) * du, 5),
    "irrational frequency": (ddu + 2 * u + eps * (u**2 - 1) * du + eps * u**3, 5),
    "cubic stiffness": (VAN_DER_POL + eps * u**3 / 3, 5),
    "quadratic": (VAN_DER_POL + eps * u**2, 5),
    "quadratic, irrational amplitude": (ddu + u + eps * (u**2 - 3) * du + eps * u**2, 4),
    "damping at the second order": (ddu + u + eps * u**2 + eps**2 * (u**2 - 1) * du, 6),
    "all at the second order": (ddu + u + eps**2 * (u**2 - 1) * du + eps**3 * u**3, 8),
    "damping at the third order": (ddu + u + eps * u**3 + eps**2 * u**2 + eps**3 * (u**2 - 1) * du, 5),
    "inertia": (VAN_DER_POL + eps * u**2 * ddu / 3, 5),
    "velocities": (ddu + u + eps * (u**2 * du - du + du**3 / 5 + du**2 + u * du**2 / 2), 5),
    "constant force": (VAN_DER_POL + eps / 3, 4),
    "several powers": (VAN_DER_POL + eps**2 * u**5 / 7 + eps**3 * du**3, 5),
    "symbolic": (ddu + w0**2 * u + eps * (beta * u**2 - gamma) * du + eps * alpha * u**3, 4),
    "symbolic, quadratic": (ddu + w0**2 * u + eps * (beta * u**2 - gamma) * du + eps * alpha * u**2, 3),
}


@pytest.mark.parametrize("name", ISOLATED)
def test_isolated_orbits_agree_with_the_slow_flow(name):
    equation, order = ISOLATED[name]
    problem = stated(equation)
    # With damping first at ε^p, the expansion is taken p − 1 orders further for the same coefficients.
    further = {"second": 1, "third": 2}.get(name.rsplit(" ", 2)[-2] if " order" in name else "", 0)
    (cycle,) = ms.limit_cycles(ms.expand(problem, order + further))
    orbit = ms.periodic_series(problem, order)
    assert len(orbit.amplitude_coefficients) == order
    for found, wanted in (
        (orbit.frequency_coefficients, cycle.frequency),
        (orbit.amplitude_coefficients, cycle.amplitude),
    ):
        wanted = sp.expand(wanted)
        assert differences(found, [wanted.coeff(eps, n) for n in range(order + 1)]) == [0] * len(found)


FREE = {
    "Duffing": (DUFFING, 7),
    "irrational stiffness": (ddu + sp.sqrt(2) * u + eps * u**3, 4),
    "symbolic stiffness": (ddu + w0**2 * u + eps * alpha * u**2 + eps**2 * beta * u**3, 5),
    "quadratic and cubic": (ddu + u + eps * u**2 + eps * u**3 / 2, 5),
    "inertia": (ddu + u + eps * (u**2 * ddu + u * du**2), 5),
    "reversible through zero": (ddu + u + eps * u * du, 6),
    "constant force": (DUFFING + eps * u**2 + eps, 4),
    "no force": (ddu + u + 0 * eps + eps**2 * u**3, 3),
}


@pytest.mark.parametrize("name", FREE)
def test_free_amplitude_agrees_with_the_general_frequency(name):
    equation, order = FREE[name]
    problem = stated(equation)
    wanted = ms.expand(problem, order).frequency_corrections()
    orbit = ms.periodic_series(problem, order)
    assert differences(orbit.frequency_coefficients, wanted) == [0] * (order + 1)
    assert orbit.amplitude_coefficients == (sp.Symbol("a", positive=True), *[0] * order)


def test_an_ordering():
    """The power of ε carried by the unknown; ε is then a bookkeeping symbol."""
    problem = ms.Problem(ddu + w0**2 * u + alpha * u**3 + beta * u**2, u, ordering={u: 1})
    wanted = ms.expand(problem, 4)
    orbit = ms.periodic_series(problem, 4)
    assert orbit.small == problem.small
    assert differences(orbit.frequency_coefficients, wanted.frequency_corrections()) == [0] * 5


def test_a_short_repr_and_a_hash():
    orbit = ms.periodic_series(stated(VAN_DER_POL), 4)
    assert repr(orbit) == "PeriodicSeries to order 4 in epsilon"
    assert hash(orbit) == hash(ms.periodic_series(stated(VAN_DER_POL), 4))
    assert pickle.loads(pickle.dumps(orbit)) == orbit


@pytest.mark.parametrize("name", ["van der Pol", "quadratic", "irrational frequency"])
def test_the_shape_agrees_with_the_fields(name):
    """u(θ) on the orbit against U_0 + εU_1 + … of the expansion on the cycle."""
    problem = stated(ISOLATED[name][0])
    expansion = ms.expand(problem, 3)
    orbit = ms.periodic_series(problem, 8, shape=2)
    (a,), (b,) = expansion.symbols.a, expansion.symbols.beta
    motion = expansion.solution("polar")[u].subs(b, 0).subs(t, theta / problem.natural_frequencies[0])
    for angle in (sp.Rational(1, 3), sp.Rational(7, 5), sp.Integer(4)):
        wanted = sp.expand(sp.N(motion.subs(theta, angle), 40).subs(a, sp.N(orbit.amplitude, 40)))
        found = sp.expand(sp.N(orbit.displacement(angle), 40))
        assert max(abs(wanted.coeff(eps, n) - found.coeff(eps, n)) for n in range(3)) < 1e-30


# Against an independent recursion, and in every arithmetic


def random_force(seed, isolated):
    """{(power, i, j, k): coefficient} of −f in u^i u'^j u''^k, and the equation."""
    pick = random.Random(seed)
    force = {}
    for _ in range(4):
        exponents = tuple(pick.choice([(2, 0, 0), (3, 0, 0), (0, 2, 0), (1, 2, 0), (2, 0, 1), (1, 0, 1), (4, 0, 0)]))
        force[(pick.choice([1, 2]), *exponents)] = F(pick.randint(-4, 4) or 1, pick.randint(1, 5))
    if isolated:
        force[1, 2, 1, 0], force[1, 0, 1, 0] = F(1), F(-1)
        force[2, 0, 3, 0] = F(pick.randint(1, 3), 4)
    equation = ddu + u
    for (p, i, j, k), c in force.items():
        equation += sp.Rational(c.numerator, c.denominator) * eps**p * u**i * du**j * ddu**k
    return force, equation


@pytest.mark.parametrize("isolated", [True, False])
@pytest.mark.parametrize("seed", range(6))
def test_random_forces(seed, isolated):
    order = 5 if isolated else 7
    force, equation = random_force(seed, isolated)
    wanted = by_fractions(force, order, amplitude=2 if isolated else F(3, 2), isolated=isolated)
    options = {} if isolated else {"amplitude": sp.Rational(3, 2)}
    orbit = ms.periodic_series(stated(equation), order, shape=order, **options)
    assert orbit.frequency_coefficients == tuple(sp.Rational(x.numerator, x.denominator) for x in wanted.frequency)
    known = len(wanted.amplitude)
    assert orbit.amplitude_coefficients == tuple(
        sp.Rational(x.numerator, x.denominator) for x in wanted.amplitude[:known]
    )
    for n, found in enumerate(orbit.harmonics):
        for k in range(9):
            cosine, sine = found.get(k, (0, 0))
            assert (cosine, sine) == (wanted.cosines(k)[n], wanted.sines(k)[n]), (n, k)


@pytest.mark.parametrize("name", ["van der Pol", "quadratic", "irrational frequency", "damping at the second order"])
def test_arithmetics_agree(name):
    pytest.importorskip("flint")
    equation, _ = ISOLATED[name]
    problem = stated(equation)
    first, second = (ms.periodic_series(problem, 9, representation=r, shape=6) for r in ("flint", "sympy"))
    assert first == second
    assert first.harmonics == second.harmonics


@pytest.mark.parametrize(
    "name",
    ["van der Pol", "quadratic", "inertia", "damping at the second order", "damping at the third order"],
)
def test_levels_multiplied_in_runs_and_one_by_one_agree(monkeypatch, name):
    """At an order where runs of several lengths occur, with one to three levels still to be changed."""
    pytest.importorskip("flint")
    from multiscale.response.orbits.waves.packed import PackedWaves

    problem = stated(ISOLATED[name][0])
    in_runs = ms.periodic_series(problem, 21, representation="flint")
    monkeypatch.setattr(PackedWaves, "gathers", False)
    one_by_one = ms.periodic_series(problem, 21, representation="flint")
    assert in_runs == one_by_one
    assert in_runs.harmonics == one_by_one.harmonics


@pytest.mark.parametrize("representation", ["auto", "sympy"])
@pytest.mark.parametrize("name", ["van der Pol", "quadratic", "irrational frequency", "irrational amplitude"])
def test_digits_are_correct(name, representation):
    problem = stated(ISOLATED[name][0])
    exact = ms.periodic_series(problem, 12)
    rounded = ms.periodic_series(problem, 12, digits=25, representation=representation)
    for x, y in (
        (exact.frequency_coefficients, rounded.frequency_coefficients),
        (exact.amplitude_coefficients, rounded.amplitude_coefficients),
    ):
        for p, q in zip(x, y, strict=True):
            assert abs(sp.N(p, 40) - q) <= 6 * abs(sp.N(p, 40)) * sp.Float(10) ** -25


def test_digits_open_irrational_amplitudes():
    problem = stated(ddu + u + eps * (1 - u**2 + u**4 / 10) * du)
    cycles = ms.limit_cycles(ms.expand(problem, 4))
    for root, cycle in enumerate(cycles):
        orbit = ms.periodic_series(problem, 4, root=root, digits=20)
        for e in (sp.Rational(1, 10), sp.Rational(1, 3)):
            assert abs(sp.N((orbit.frequency - cycle.frequency).subs(eps, e), 30)) < 1e-18
            assert abs(sp.N((orbit.amplitude - cycle.amplitude).subs(eps, e), 30)) < 1e-18


def test_the_order_asked_for_changes_nothing_below():
    """Harmonics that cannot act on the last frequency are left out: the short series begins the long one."""
    problem = stated(ISOLATED["velocities"][0])
    long = ms.periodic_series(problem, 14)
    for order in (1, 2, 3, 6, 13):
        short = ms.periodic_series(problem, order, shape=0)
        assert short.frequency_coefficients == long.frequency_coefficients[: order + 1]
        assert short.amplitude_coefficients == long.amplitude_coefficients[:order]


@pytest.mark.parametrize("shape", [0, 3, 7, 10])
def test_shape(shape):
    problem = stated(VAN_DER_POL)
    whole = ms.periodic_series(problem, 10, shape=10)
    orbit = ms.periodic_series(problem, 10, shape=shape)
    assert orbit == whole or orbit.harmonics == whole.harmonics[: shape + 1]
    assert orbit.frequency_coefficients == whole.frequency_coefficients
    assert max(whole.harmonics[6]) == 13


def van_der_pol_modulo(prime, order):
    """ω_0 … ω_order of the Van der Pol cycle modulo a prime: u = Σ εⁿ u_n, all harmonics, numbers of one word.

    With ε = iδ every level is real, as an array over k = −K … K. The prime exceeds every divisor k² − 1.
    """
    size = 2 * order + 1
    k = np.arange(-size, size + 1)
    inverse = np.array([pow(int(1 - j * j) % prime, -1, prime) if abs(j) != 1 else 0 for j in k])

    def times(x, y):
        return np.convolve(x, y, mode="full")[size : 3 * size + 1] % prime

    def at(x, n=1):
        return int(x[size + n])

    fields = [np.where(abs(k) == 1, 1, 0).astype(np.int64)]
    squares, forces = [], []
    third = pow(3, -1, prime)

    def power(n):
        squares.append(sum(times(fields[i], fields[n - i]) for i in range(n + 1)) % prime)
        cube = sum(times(squares[i], fields[n - i]) for i in range(n + 1)) % prime
        forces.append((fields[n] - third * cube) % prime)

    w, w2 = [1], [1]
    power(0)
    for n in range(1, order + 1):
        turned = k * (sum(w[m] * forces[n - 1 - m] for m in range(n)) % prime) % prime
        if n > 1:
            # e^{iθ} + e^{−iθ} added to u_{n−1} adds −2(e^{iθ} + …) to its force; only odd n need it.
            h = at(turned) * pow(2, -1, prime) % prime if n % 2 else 0
            fields[n - 1] = (fields[n - 1] + h * fields[0]) % prime
            del squares[n - 1 :], forces[n - 1 :]
            power(n - 1)
            turned = k * (sum(w[m] * forces[n - 1 - m] for m in range(n)) % prime) % prime
        rest = sum(w2[m] * at(fields[n - m]) for m in range(1, n))
        own = 0 if n % 2 else (-(at(turned) + rest)) % prime
        w2.append(own)
        w.append((own - sum(w[m] * w[n - m] for m in range(1, n))) * pow(2, -1, prime) % prime)
        bent = k * k * (sum((w2[m] * fields[n - m] for m in range(1, n)), np.zeros_like(k)) % prime) % prime
        fields.append((turned + bent) % prime * inverse % prime)
        power(n)
    return [x * (-1) ** (n // 2) % prime for n, x in enumerate(w)]


@pytest.mark.parametrize("order", [8, 40, pytest.param(80, marks=pytest.mark.slow)], ids=lambda n: f"order {n}")
def test_van_der_pol_modulo_a_prime(order):
    """Exact to ε⁸⁰, against a calculation in integers modulo a prime that knows every harmonic."""
    if order > 8:
        pytest.importorskip("flint")
    prime = 1000003
    found = ms.periodic_series(stated(VAN_DER_POL), order).frequency_coefficients
    wanted = van_der_pol_modulo(prime, order)
    assert [int(x.p) * pow(int(x.q), -1, prime) % prime for x in found] == wanted


# Against integration


def test_period_against_integration():
    """van der Pol at ε = 0.256 … 0.5: the error of the series of order 6 goes as ε⁸ (odd powers vanish)."""
    integrate = pytest.importorskip("scipy.integrate")
    orbit = ms.periodic_series(stated(VAN_DER_POL), 6)
    small, errors, controls = (0.5, 0.4, 0.32, 0.256), [], []
    for e in small:

        def rhs(_, y, e=e):
            return [y[1], -y[0] - e * (y[0] ** 2 - 1) * y[1]]

        def rising(_, y):
            return y[0]

        rising.direction = 1
        found = integrate.solve_ivp(
            rhs, (0, 40 / e + 30), [2.0, 0.0], events=rising, method="DOP853", rtol=1e-13, atol=1e-13, max_step=0.1
        )
        times = found.t_events[0][-4:]
        frequency = 2 * np.pi * 3 / (times[-1] - times[0])
        errors.append(abs(frequency - float(orbit.frequency.subs(eps, e))))
        controls.append(abs(frequency - float((orbit.frequency + eps**6 / 1000).subs(eps, e))))
    assert slope(small, errors) > 7.5
    assert max(errors) < 3e-4 * max(small) ** 8
    assert slope(small, controls) < 7


def test_residual():
    """The shape put into the equation leaves a residual of the order of the first term left out."""
    orbit = ms.periodic_series(stated(ISOLATED["velocities"][0]), 8, shape=5)
    equation = ISOLATED["velocities"][0]
    small, left, controls = (0.04, 0.02, 0.01), [], []
    for wrong, into in ((0, left), (eps**4 * sp.cos(2 * theta), controls)):
        shape = orbit.displacement(theta) + wrong
        w = orbit.frequency
        residual = equation.subs({ddu: w**2 * shape.diff(theta, 2)}).subs({du: w * shape.diff(theta)}).subs(u, shape)
        evaluate = sp.lambdify((theta, eps), residual, "mpmath")
        for e in small:
            into.append(float(max(abs(evaluate(sp.Rational(k, 3), sp.Float(e, 40))) for k in range(7))))
    assert slope(small, left) > 5.5
    assert slope(small, controls) < 4.5


# Symbols, singularities


def test_values_for_symbols():
    problem = stated(ISOLATED["symbolic"][0])
    values = {alpha: sp.Rational(2, 3), beta: 2, gamma: 3, w0: sp.Rational(5, 4)}
    given = ms.periodic_series(problem, 4).at(values)
    direct = ms.periodic_series(stated(ISOLATED["symbolic"][0].subs(values)), 4)
    assert differences(given.frequency_coefficients, direct.frequency_coefficients) == [0] * 5
    assert differences(given.amplitude_coefficients, direct.amplitude_coefficients) == [0] * 4


def test_an_amplitude_by_number_and_by_symbol():
    a = sp.Symbol("a", positive=True)
    free = ms.periodic_series(stated(DUFFING + eps * u**2), 5)
    fixed = ms.periodic_series(stated(DUFFING + eps * u**2), 5, amplitude=0.3)
    assert free.at({a: sp.Rational(3, 10)}) == fixed
    assert ms.periodic_series(stated(DUFFING), 4, amplitude=gamma).frequency_coefficients[1] == 3 * gamma**2 / 8


def test_singularities_of_a_known_series():
    """(1 + ε²/5)^{1/2} with the sign of x turned, and (1 − ε + 2ε²)^{1/3}, which has a pair."""
    from multiscale.response.orbits.singularities import nearest_singularities

    x = sp.Symbol("x")

    def coefficients(function, count=40):
        return [c for k in range(count) for c in (sp.Rational(function(k)), sp.Integer(0))]

    found = nearest_singularities(coefficients(lambda k: sp.binomial(sp.Rational(1, 2), k) * sp.Rational(-1, 5) ** k))
    assert found.stride == 2
    assert found.points == pytest.approx((5,), rel=1e-12)
    assert found.radius == pytest.approx(5**0.5)
    series = sp.Poly(sp.series((1 - x + 2 * x**2) ** sp.Rational(1, 3), x, 0, 30).removeO(), x).all_coeffs()[::-1]
    found = nearest_singularities(series)
    assert sorted(found.points, key=lambda z: z.imag) == pytest.approx([(1 - 7**0.5 * 1j) / 4, (1 + 7**0.5 * 1j) / 4])
    assert found.radius == pytest.approx(0.5**0.5)
    assert nearest_singularities(coefficients(lambda k: 1, 6)) is None


def test_radius_needs_numbers():
    with pytest.raises(ms.ProblemError, match="contain a: put in numbers by `at`"):
        ms.periodic_series(stated(DUFFING), 4).singularities  # noqa: B018
    assert ms.periodic_series(stated(DUFFING), 4, amplitude=1).radius is None


# Refusals


@pytest.mark.parametrize(
    ("equation", "options", "error", "message"),
    [
        (ddu + u - eps * du + eps * u**3, {}, ms.ProblemError, "no limit cycle"),
        (ddu + u - eps * du + eps * u**3, {"amplitude": 1}, ms.ProblemError, "order 1 changes its amplitude"),
        (VAN_DER_POL, {"amplitude": 2, "order": 3}, ms.ProblemError, "order 3 changes its amplitude"),
        (VAN_DER_POL, {"root": 1}, ms.ProblemError, "root=1: the leading amplitudes are root=0: 2"),
        (DUFFING, {"root": 0}, ms.ProblemError, "periodic motions of every amplitude"),
        (DUFFING, {"amplitude": -1}, ms.ProblemError, "expected a positive number"),
        (DUFFING, {"order": 0}, ms.ProblemError, "order=0: expected an integer ≥ 1"),
        (DUFFING, {"digits": 0}, ms.ProblemError, "digits=0"),
        (DUFFING, {"representation": "fast"}, ms.ProblemError, "representation is 'fast'"),
        (DUFFING + eps * u**2, {"digits": 10}, ms.UnsupportedTermError, "substitute them for the amplitude"),
        (DUFFING + eps * sp.cos(t), {}, ms.UnsupportedTermError, "depends on time"),
        (ddu + u + eps * (1 - u**2 + u**4 / 10) * du, {}, ms.ProblemError, "2 limit cycles.*choose one by `root`"),
        (
            ddu + u + eps * (1 - u**2 + u**4 / 10) * du,
            {"root": 1},
            ms.UnsupportedTermError,
            "is not the square root of a rational number.*give `digits`",
        ),
        (ddu + u + eps * (1 - u**2 + u**4 / 8) * du, {}, ms.ProblemError, "repeated root"),
        (
            ddu + u + eps * u**2 + eps**2 * (beta * u**2 - 1) * du,
            {},
            ms.UnsupportedTermError,
            "substitute numbers for them",
        ),
        (
            ddu + u + eps * (beta - u**2 + u**4 - gamma * u**6) * du,
            {},
            ms.UnsupportedTermError,
            "no closed form",
        ),
    ],
)
def test_refusals(equation, options, error, message):
    options = {"order": 4} | options
    with pytest.raises(error, match=message):
        ms.periodic_series(stated(equation), **options)


def test_several_unknowns_are_refused():
    problem = ms.Problem([ddu + u + eps * v, v.diff(t, 2) + 3 * v], [u, v], small=eps)
    with pytest.raises(ms.UnsupportedTermError, match="2 unknowns"):
        ms.periodic_series(problem, 2)


def test_an_expansion_is_not_a_problem():
    with pytest.raises(ms.ProblemError, match=r"state a multiscale\.Problem"):
        ms.periodic_series(ms.expand(stated(DUFFING), 1), 2)
