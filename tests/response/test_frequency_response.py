"""Branches over a parameter: folds interior, islands, branchings, Hopf points, jumps, table, plot."""

from __future__ import annotations

import sys

import numpy as np
import pytest
import sympy as sp
from support.driven import Om, alpha, beta, eps, expanded, f, h, mu, plain, sigma, t, u, used, w

import multiscale as ms

VALUES = {"epsilon": 0.05, "mu": 0.1, "alpha": 1.0, "beta": 0.8, "f": 0.6, "h": 1.0, "omega": 1.0}


def response(name, order, sweep, **more):
    expansion = expanded(name, order)
    ((symbol, _),) = sweep.items()
    values = {k: v for k, v in used(expansion, VALUES | more).items() if k != str(symbol)}
    return ms.frequency_response(expansion, values, sweep=sweep)


def exact_folds(values):
    """Folds over σ by a route of its own: the detuning as a function of ρ from the first-order flow.

    With A = ½ae^{…}: σ(a) = 3αa²/(8ω) ± √(f²/(4ω²a²) − μ²), dσ/da = 0 on either sign.
    """
    scipy_optimize = pytest.importorskip("scipy.optimize")
    m, al, force, om = (values[k] for k in ("mu", "alpha", "f", "omega"))

    def detuning(a, sign):
        return 3 * al * a**2 / (8 * om) + sign * np.sqrt(force**2 / (4 * om**2 * a**2) - m**2)

    def slope(a, sign):
        root = np.sqrt(force**2 / (4 * om**2 * a**2) - m**2)
        return 3 * al * a / (4 * om) - sign * force**2 / (4 * om**2 * a**3) / root

    top = force / (2 * m * om)
    found = []
    for sign in (1, -1):
        a = np.linspace(0.05 * top, top * (1 - 1e-12), 4001)
        values_ = slope(a, sign)
        for k in np.flatnonzero(values_[:-1] * values_[1:] < 0):
            root = scipy_optimize.brentq(slope, a[k], a[k + 1], args=(sign,), xtol=1e-15, rtol=1e-15)
            found.append(detuning(root, sign))
    return sorted(found)


@pytest.mark.parametrize("points", [5, 9, 40, 400])
def test_folds_against_the_closed_form_whatever_the_grid(points):
    r = response("primary", 1, {"sigma": np.linspace(-1, 4, points)})
    assert [x.parameter for x in r.folds] == pytest.approx(exact_folds(VALUES), rel=1e-12)
    assert len(r.branches) == 1
    (branch,) = r.branches
    assert len(branch.folds) == 2
    # Ordered along the arc: up, back, up again, each fold an extremum of the parameter.
    runs = np.split(np.sign(np.diff(branch.parameter)), branch.folds)
    assert [set(x) for x in runs] == [{1.0}, {-1.0}, {1.0}]
    assert set(np.linspace(-1, 4, points)) <= set(branch.parameter)


@pytest.mark.parametrize("order", [1, 2, 3])
def test_sweeps_of_all_kinds_pass_through_the_same_states(order):
    by_detuning = response("primary", order, {"sigma": np.linspace(-1, 4, 60)})
    by_frequency = response("primary", order, {Om: 1 + 0.05 * np.linspace(-1, 4, 60)})
    assert [x.parameter for x in by_frequency.folds] == pytest.approx(
        [1 + 0.05 * x.parameter for x in by_detuning.folds], rel=1e-12
    )
    expansion = expanded("primary", order)
    fold = by_detuning.folds[0]
    fixed = {k: v for k, v in used(expansion, VALUES).items() if k not in ("f", "mu")} | {"sigma": fold.parameter}
    drive = ms.frequency_response(expansion, fixed | {"mu": 0.1}, sweep={f: np.linspace(0.05, 1, 50)})
    damping = ms.frequency_response(expansion, fixed | {"f": 0.6}, sweep={mu: np.linspace(0.02, 0.4, 50)})
    for found, wanted in ((drive, 0.6), (damping, 0.1)):
        assert min(abs(x.parameter - wanted) for x in found.folds) < 1e-11


@pytest.mark.parametrize("name", ["primary", "quadratic", "subharmonic", "parametric", "both"])
@pytest.mark.parametrize("order", [1, 2])
def test_branches_hold_exactly_the_equilibria(name, order):
    grid = np.linspace(-1, 3, 11)
    r = response(name, order, {"sigma": grid}, **({"f": 5.0, "mu": 0.02} if name == "subharmonic" else {}))
    expansion = expanded(name, order)
    values = used(expansion, VALUES | ({"f": 5.0, "mu": 0.02} if name == "subharmonic" else {}))
    for at in grid:
        wanted = sorted(s.amplitudes[0] for s in ms.equilibria(expansion, values | {"sigma": at}))
        found = []
        for b in r.branches:
            closed = slice(0, -1) if b.closed else slice(None)
            found += list(b.amplitude[closed][b.parameter[closed] == at])
        assert sorted(found) == pytest.approx(wanted, abs=1e-9)


def test_stability_and_eigenvalues_along_a_branch():
    (branch,) = response("primary", 2, {"sigma": np.linspace(-1, 4, 80)}).branches
    first, second = branch.folds
    assert branch.stable[:first].all()
    assert branch.stable[second + 1 :].all()
    assert not branch.stable[first : second + 1].any()
    expansion = expanded("primary", 2)
    slope = expansion.slow_flow.to_numpy(wrt="state")
    for k in (3, first + 5, second + 5):
        values = slope.values(used(expansion, VALUES) | {"sigma": branch.parameter[k]})
        wanted = np.linalg.eigvals(slope(0.0, branch.state[:, k], *values))
        assert np.sort_complex(branch.eigenvalues[k]) == pytest.approx(np.sort_complex(wanted), abs=1e-13)
    assert np.min(abs(branch.eigenvalues[first])) < 1e-9


def test_islands_are_found():
    """Subharmonic response over the drive: closed curves that touch nothing else, one for each phase."""
    r = response("subharmonic", 1, {f: np.linspace(0.1, 30, 100)}, mu=0.02, sigma=1.0)
    closed = [b for b in r.branches if b.closed]
    assert len(closed) == 3
    assert all(len(b.folds) == 2 for b in closed)
    assert closed[0].amplitude == pytest.approx(closed[1].amplitude, abs=1e-9)


def test_branching_from_rest():
    """Parametric resonance: rest changes its stability where (σ/2)² + μ² = (h/(4ω))², first order, by hand."""
    r = response("parametric", 1, {"sigma": np.linspace(-1, 3, 50)})
    wanted = 2 * np.sqrt((1.0 / 4) ** 2 - 0.1**2)
    assert [x.parameter for x in r.branchings] == pytest.approx([-wanted, wanted], rel=1e-14)
    assert all(x.amplitudes == (0.0,) for x in r.branchings)


def test_jumps():
    r = response("primary", 1, {"sigma": np.linspace(-1, 4, 60)})
    (up,), (down,) = r.jumps_up, r.jumps_down
    assert (up.parameter, down.parameter) == tuple(x.parameter for x in r.folds)
    assert not up.increasing
    assert down.increasing
    rate = expanded("primary", 1).slow_flow.to_numpy()
    for jump in (up, down):
        values = rate.values(used(expanded("primary", 1), VALUES) | {"sigma": jump.parameter})
        assert np.max(abs(rate(0.0, jump.to_state, *values))) < 1e-13


def test_a_slow_sweep_jumps_where_it_says():
    """The slow flow integrated while σ grows slowly leaves the upper branch at the jump down."""
    scipy_integrate = pytest.importorskip("scipy.integrate")
    r = response("primary", 1, {"sigma": np.linspace(-1, 5, 60)})
    (down,) = r.jumps_down
    rate = expanded("primary", 1).slow_flow.to_numpy()
    fixed = used(expanded("primary", 1), VALUES)
    speed = 2e-6

    def moving(time, y):
        return rate(time, y, *rate.values(fixed | {"sigma": 3.0 + speed * time}))

    start = max(ms.equilibria(expanded("primary", 1), fixed | {"sigma": 3.0}), key=lambda s: s.amplitudes[0])

    def small(time, y):
        return np.hypot(*y) - 1.0

    small.terminal = True
    found = scipy_integrate.solve_ivp(moving, (0, 1 / speed), start.state, events=small, rtol=1e-6, max_step=200)
    left_at = 3.0 + speed * found.t_events[0][0]
    assert 0 < left_at - down.parameter < 0.02


@pytest.mark.parametrize("points", [8, 200])
@pytest.mark.parametrize("order", [1, 2])
def test_peak(order, points):
    """First order: a = f/(2μω) at σ = 3αf²/(32μ²ω³); every order: no state of a fine sweep near it is higher."""
    p = response("primary", order, {"sigma": np.linspace(-1, 4, points)}).peak()
    assert p.interior
    if order == 1:
        assert p.amplitude == pytest.approx(3.0, rel=1e-14)
        assert p.parameter == pytest.approx(3 * 0.36 / (32 * 0.01), rel=1e-9)
    fine = response("primary", order, {"sigma": p.parameter + np.linspace(-1e-3, 1e-3, 101)})
    highest = max(np.max(b.amplitude) for b in fine.branches)
    assert -1e-12 < p.amplitude - highest < 1e-8


def test_peak_at_an_end():
    p = response("primary", 1, {"sigma": np.linspace(-1, 1, 20)}).peak()
    assert not p.interior
    assert p.parameter == 1


def hopf_problem():
    """One mode with a drive and negative linear, positive cubic damping: entrainment, with Hopf points."""
    equation = plain + eps * ((u**2 - 1) * u.diff(t) + alpha * u**3 - f * sp.cos(Om * t))
    return ms.expand(ms.Problem(equation, u, small=eps, resonances={Om: w + eps * sigma}), 1)


def test_hopf_points():
    """Forced van der Pol, first order: the trace of the Cartesian Jacobian vanishes at a² = 2 (Nayfeh and
    Mook, Nonlinear Oscillations, 1979, §4.3, from memory: ρ = a²/4 = ½), confirmed by the trace here."""
    expansion = hopf_problem()
    fixed = {"epsilon": 0.05, "alpha": 0.0, "omega": 1.0, "f": 1.5}
    r = ms.frequency_response(expansion, fixed, sweep={"sigma": np.linspace(-1, 1, 61)})
    assert len(r.hopf) == 2
    slope = expansion.slow_flow.to_numpy(wrt="state")
    for x in r.hopf:
        assert x.amplitudes[0] ** 2 == pytest.approx(2.0, rel=1e-12)
        jacobian = slope(0.0, x.state, *slope.values(fixed | {"sigma": x.parameter}))
        assert abs(np.trace(jacobian)) < 1e-15
        assert np.linalg.det(jacobian) > 0
    assert r.hopf[0].parameter == pytest.approx(-r.hopf[1].parameter, rel=1e-12)


def autoparametric():
    v = sp.Function("v")(t)
    equations = [
        u.diff(t, 2) + w**2 * u + eps * (2 * mu * u.diff(t) + alpha * u * v),
        v.diff(t, 2) + 4 * w**2 * v + eps * (2 * mu * v.diff(t) + alpha * u**2 - f * sp.cos(Om * t)),
    ]
    with pytest.warns(ms.OrderingWarning):
        return ms.expand(ms.Problem(equations, [u, v], small=eps, resonances={Om: 2 * w + eps * sigma}), 1)


def test_several_modes():
    """Driven one-to-two resonance: branches followed along the arc agree with equilibria found point by point."""
    expansion = autoparametric()
    fixed = used(expansion, VALUES | {"mu": 0.05})
    r = ms.frequency_response(expansion, fixed, sweep={"sigma": np.linspace(-1, 1, 41)})
    assert not r.complete
    assert len(r.branchings) == 2
    rate, slope = expansion.slow_flow.to_numpy(), expansion.slow_flow.to_numpy(wrt="state")
    for b in r.branches:
        values = rate.values(fixed | {"sigma": b.parameter})
        assert np.max(abs(rate(0.0, b.state, *values))) < 1e-12
    for x in r.folds:
        jacobian = slope(0.0, x.state, *slope.values(fixed | {"sigma": x.parameter}))
        assert np.min(abs(np.linalg.eigvals(jacobian))) < 1e-9
    for at in (-0.4, 0.1, 0.35):
        wanted = {round(s.amplitudes[0], 6) for s in ms.equilibria(expansion, fixed | {"sigma": at})}
        found = set()
        for b in r.branches:
            for k in np.flatnonzero((b.parameter[:-1] - at) * (b.parameter[1:] - at) <= 0):
                share = (at - b.parameter[k]) / (b.parameter[k + 1] - b.parameter[k])
                found.add(float(b.amplitude[0, k] + share * (b.amplitude[0, k + 1] - b.amplitude[0, k])))
        for a in wanted:
            assert min(abs(a - x) for x in found) < 5e-3
    assert r.table["amplitude"].ndim == 3


def lower_mode_driven():
    """One-to-two internal resonance with the drive on the lower mode: quasi-periodic near exact resonance."""
    v = sp.Function("v")(t)
    equations = [
        u.diff(t, 2) + w**2 * u + eps * (2 * mu * u.diff(t) + alpha * u * v - f * sp.cos(Om * t)),
        v.diff(t, 2) + 4 * w**2 * v + eps * (2 * mu * v.diff(t) + alpha * u**2),
    ]
    with pytest.warns(ms.OrderingWarning):
        return ms.expand(ms.Problem(equations, [u, v], small=eps, resonances={Om: w + eps * sigma}), 1)


@pytest.mark.parametrize(("damping", "drive", "points"), [(0.05, 1.0, 61), (0.05, 1.0, 200), (0.1, 0.5, 61)])
def test_hopf_points_of_several_modes(damping, drive, points):
    """A pair on the imaginary axis to rounding, the others off it; the places are symmetric in σ and do not depend on
    the grid."""
    expansion = lower_mode_driven()
    fixed = {"epsilon": 0.05, "mu": damping, "alpha": 1.0, "omega": 1.0, "f": drive}
    r = ms.frequency_response(expansion, fixed, sweep={"sigma": np.linspace(-1.5, 1.5, points)})
    rate, slope = expansion.slow_flow.to_numpy(), expansion.slow_flow.to_numpy(wrt="state")
    assert len(r.hopf) == 2
    assert r.hopf[0].parameter == pytest.approx(-r.hopf[1].parameter, rel=1e-10)
    for x in r.hopf:
        values = fixed | {"sigma": x.parameter}
        assert np.max(abs(rate(0.0, x.state, *rate.values(values)))) < 1e-14
        numbers = np.linalg.eigvals(slope(0.0, x.state, *slope.values(values)))
        pair = sorted(numbers, key=lambda z: abs(z.real))
        assert max(abs(z.real) for z in pair[:2]) < 1e-10 * np.max(abs(numbers))
        assert pair[0] == pytest.approx(pair[1].conjugate())
        assert abs(pair[0].imag) > 1e-3
        # Damping alone: the eigenvalues add up to −2εμ for each of the two modes, so that the other pair decays.
        assert np.sum(numbers).real == pytest.approx(-4 * 0.05 * damping, rel=1e-9)
        assert max(z.real for z in pair[2:]) < -1e-3


def test_the_motion_on_both_sides_of_a_hopf_point():
    """The slow flow integrated from beside a steady state: it decays on one side of the point and grows on the other,
    at the rate and with the period of the eigenvalue."""
    integrate = pytest.importorskip("scipy.integrate")
    expansion = lower_mode_driven()
    fixed = {"epsilon": 0.05, "mu": 0.05, "alpha": 1.0, "omega": 1.0, "f": 1.0}
    r = ms.frequency_response(expansion, fixed, sweep={"sigma": np.linspace(-1.5, 1.5, 61)})
    rate, slope = expansion.slow_flow.to_numpy(), expansion.slow_flow.to_numpy(wrt="state")
    place = max(x.parameter for x in r.hopf)
    seen = []
    for sigma_now in (place - 0.03, place + 0.03):
        at = fixed | {"sigma": sigma_now}
        (rest,) = (x for x in ms.equilibria(expansion, at))
        numbers, vectors = np.linalg.eig(slope(0.0, rest.state, *slope.values(at)))
        k = int(np.argmax(numbers.real))
        period = 2 * np.pi / abs(numbers[k].imag)
        times = np.arange(4) * period
        found = integrate.solve_ivp(
            lambda time, y, at=at: rate(time, y, *rate.values(at)),
            (0, times[-1]),
            rest.state + 1e-6 * vectors[:, k].real,
            t_eval=times,
            method="DOP853",
            rtol=1e-12,
            atol=1e-14,
        )
        distance = np.linalg.norm(found.y - np.reshape(rest.state, (-1, 1)), axis=0)
        growth = np.log(distance[-1] / distance[0]) / times[-1]
        assert growth == pytest.approx(numbers[k].real, rel=1e-3)
        assert rest.stable == (growth < 0)
        seen.append(growth)
    assert seen[0] > 0 > seen[1]


def test_islands_of_several_modes():
    """Subharmonic response of a mode with a second one at twice its frequency: uncoupled, the folds of the three
    islands are those of the first mode alone; coupled, they stay isolated, and rest loses its stability to both modes
    at once (the drive at the sum of their frequencies) at two Hopf points."""
    v = sp.Function("v")(t)
    equations = [
        u.diff(t, 2) + w**2 * u + eps * (2 * mu * u.diff(t) + alpha * u**3 + beta * u * v) - f * sp.cos(Om * t),
        v.diff(t, 2) + 4 * w**2 * v + eps * (2 * mu * v.diff(t) + beta * u**2),
    ]
    with pytest.warns(ms.OrderingWarning):
        expansion = ms.expand(ms.Problem(equations, [u, v], small=eps, resonances={Om: 3 * w + eps * sigma}), 1)
    fixed = {"epsilon": 0.05, "mu": 0.02, "alpha": 1.0, "omega": 1.0, "sigma": 1.0}
    sweep = {f: np.linspace(0.1, 30, 60)}
    alone = ms.frequency_response(expanded("subharmonic", 1), fixed, sweep=sweep)
    uncoupled = ms.frequency_response(expansion, fixed | {"beta": 0.0}, sweep=sweep)
    coupled = ms.frequency_response(expansion, fixed | {"beta": 0.5}, sweep=sweep)
    assert sorted(x.parameter for x in uncoupled.folds) == pytest.approx(
        sorted(x.parameter for x in alone.folds), rel=1e-9
    )
    slope = expansion.slow_flow.to_numpy(wrt="state")
    for r in (uncoupled, coupled):
        islands = [b for b in r.branches if b.closed]
        assert len(islands) == 3
        assert all(len(b.folds) == 2 for b in islands)
    assert len(coupled.folds) == 6
    for x in coupled.folds:
        assert x.amplitudes[1] > 1e-3
        jacobian = slope(0.0, x.state, *slope.values(fixed | {"beta": 0.5, "f": x.parameter}))
        assert np.min(abs(np.linalg.eigvals(jacobian))) < 1e-12
    assert not uncoupled.hopf
    assert len(coupled.hopf) == 2
    for x in coupled.hopf:
        assert max(x.amplitudes) < 1e-12
        jacobian = slope(0.0, x.state, *slope.values(fixed | {"beta": 0.5, "f": x.parameter}))
        assert sorted(np.linalg.eigvals(jacobian).real)[2:] == pytest.approx([0.0, 0.0], abs=1e-12)


def test_limit_cycles_over_a_parameter():
    """a = 2√α for u'' + ε(u² − α)u' + u = 0 at the first order."""
    problem = ms.Problem(u.diff(t, 2) + u + eps * (u**2 - alpha) * u.diff(t), u, small=eps)
    r = ms.frequency_response(ms.expand(problem, 1), {"epsilon": 0.1}, sweep={alpha: np.linspace(-0.5, 1, 31)})
    cycle = max(r.branches, key=lambda b: np.max(b.amplitude))
    assert cycle.amplitude == pytest.approx(2 * np.sqrt(cycle.parameter), rel=1e-12)
    assert cycle.stable.all()
    rest = min(r.branches, key=lambda b: np.max(b.amplitude))
    assert list(rest.stable) == list(rest.parameter < 0)


def test_table():
    r = response("both", 1, {"sigma": np.linspace(-1, 3, 30)})
    table = r.table
    longest = max(len(b.parameter) for b in r.branches)
    assert all(x.shape == (len(r.branches), longest) for x in table.values())
    for row, b in zip(table["amplitude"], r.branches, strict=True):
        assert np.isnan(row[len(b.parameter) :]).all()
        assert (row[: len(b.parameter)] == b.amplitude).all()


def test_many_points_at_once():
    r = response("primary", 1, {"sigma": np.linspace(-1, 4, 10_000)})
    assert len(r.branches) == 1
    assert len(r.folds) == 2


def test_results_are_frozen():
    r = response("primary", 1, {"sigma": np.linspace(-1, 4, 20)})
    with pytest.raises(AttributeError):
        r.folds = ()
    with pytest.raises(ValueError, match="read-only"):
        r.branches[0].amplitude[0] = 1


@pytest.mark.parametrize(
    ("sweep", "more", "message"),
    [
        ({"sigma": [0.0, 1.0], "mu": [0.1, 0.2]}, {}, "expected one parameter"),
        ({"sigma": 1.0}, {}, "shape"),
        ({"sigma": ["a", "b"]}, {}, "array of numbers"),
        ({"sigma": [0.0, np.inf]}, {}, "finite"),
        ({"sigma": [1.0, 1.0]}, {}, "one value only"),
        ({"tau": [0.0, 1.0]}, {}, "no parameter of this slow flow"),
        ({"sigma": [0.0, 1.0]}, {"sigma": 1.0}, "given both"),
        ({"sigma": [0.0, 1.0]}, {"mu": np.array([0.1, 0.2])}, "is an array"),
    ],
)
def test_wrong_sweeps_are_refused(sweep, more, message):
    expansion = expanded("primary", 1)
    with pytest.raises(ms.EvaluationError, match=message):
        ms.frequency_response(expansion, used(expansion, VALUES) | more, sweep=sweep)


def test_plot():
    matplotlib = pytest.importorskip("matplotlib")
    matplotlib.use("Agg")
    from matplotlib import pyplot

    ax = response("primary", 1, {"sigma": np.linspace(-1, 4, 40)}).plot()
    assert ax.get_xlabel() == r"$\sigma$"
    assert ax.get_ylabel() == "$a$"
    styles = {(line.get_linestyle(), line.get_color()) for line in ax.get_lines()}
    assert len({s for s, _ in styles}) == len({c for _, c in styles}) == 2
    pyplot.close(ax.figure)


@pytest.mark.parametrize(("module", "call"), [("matplotlib", "plot"), ("xarray", "to_xarray")])
def test_missing_extras_are_named(monkeypatch, module, call):
    r = response("primary", 1, {"sigma": np.linspace(-1, 4, 20)})
    monkeypatch.setitem(sys.modules, module, None)
    word = {"matplotlib": "plot", "xarray": "xarray"}[module]
    with pytest.raises(ImportError, match=rf"multiscale-expansions\[{word}\]"):
        getattr(r, call)()


@pytest.mark.parametrize("modes", [1, 2])
def test_to_xarray(modes):
    """Every column of the table under its name, with the right dimensions, and selectable by them."""
    xarray = pytest.importorskip("xarray")
    if modes == 1:
        r = response("primary", 1, {"sigma": np.linspace(-1, 4, 20)})
    else:
        fixed = {"epsilon": 0.05, "mu": 0.05, "alpha": 1.0, "omega": 1.0, "f": 1.0}
        r = ms.frequency_response(lower_mode_driven(), fixed, sweep={"sigma": np.linspace(-1.5, 1.5, 21)})
    data = r.to_xarray()
    assert isinstance(data, xarray.Dataset)
    assert set(data.data_vars) == set(r.table)
    assert data.attrs == {"parameter": "sigma"}
    assert data["amplitude"].dims == (("branch", "point") if modes == 1 else ("branch", "mode", "point"))
    assert data["parameter"].dims == ("branch", "point")
    assert data.sizes["branch"] == len(r.branches)
    for name, column in r.table.items():
        np.testing.assert_array_equal(data[name].values, column)
    first = data.isel(branch=0)
    length = len(r.branches[0].parameter)
    shown = first["amplitude"] if modes == 1 else first["amplitude"].isel(mode=0)
    wanted = r.branches[0].amplitude if modes == 1 else r.branches[0].amplitude[0]
    assert shown.values[:length] == pytest.approx(wanted)
    assert float(shown.max()) == pytest.approx(float(np.max(wanted)))


@pytest.mark.parametrize("symbol", [beta, h])
def test_a_parameter_of_another_problem_is_refused(symbol):
    with pytest.raises(ms.EvaluationError, match="no parameter"):
        ms.frequency_response(expanded("primary", 1), {}, sweep={symbol: np.linspace(0, 1, 5)})


def test_softening_is_the_mirror_image():
    """α → −α and σ → −σ, first order; the sweep may be given downwards."""
    hard = response("primary", 1, {"sigma": np.linspace(-1, 4, 60)})
    soft = response("primary", 1, {"sigma": np.linspace(1, -4, 60)}, alpha=-1.0)
    assert [-x.parameter for x in soft.folds[::-1]] == pytest.approx([x.parameter for x in hard.folds], rel=1e-12)
    assert soft.jumps_up[0].increasing


@pytest.mark.parametrize("order", [1, 2])
def test_a_sweep_of_the_drive_from_zero(order):
    r = response("parametric", order, {h: np.linspace(0, 3, 31)}, sigma=1.0)
    assert r.branchings
    r = response("primary", order, {f: np.linspace(0, 1, 21)}, sigma=1.0)
    assert min(b.amplitude.min() for b in r.branches) == 0
