"""The scripts behind the pages give the numbers that the pages print."""

from __future__ import annotations

import runpy
from pathlib import Path

import numpy as np
import pytest

import multiscale as ms

DOCS = Path(__file__).parent.parent / "docs"


@pytest.fixture(scope="module")
def study():
    return runpy.run_path(str(DOCS / "examples" / "drive_level_study.py"))


@pytest.fixture(scope="module")
def result(study):
    return study["expansion"]()


def test_the_table_of_the_page_is_the_one_computed(study, result):
    page = (DOCS / "drive_level_study.md").read_text()
    for row in study["table"](result).splitlines()[1:]:
        force, peak, pulling, *interval = row.split(maxsplit=3)
        assert f"| {force} | {peak} | {pulling} | {interval[0]} |" in page


def test_two_stable_motions_begin_at_the_critical_drive(study, result):
    onset = ms.critical_drive(result, study["PARAMETERS"], drive=study["F"], detuning=study["sigma"])
    assert f"**{onset.drive * 1e9:.2f} nN**" in (DOCS / "drive_level_study.md").read_text()
    below, above = (study["response"](result, onset.drive * factor, 801).folds for factor in (0.97, 1.03))
    assert not below
    assert len(above) == 2


def test_peaks_lie_on_the_backbone(study, result):
    """Damping this light moves the peak from the backbone by far less than the width of the resonance."""
    width = study["PARAMETERS"][study["c"]] / study["PARAMETERS"][study["m"]]
    peaks = [study["response"](result, force).peak() for force in study["FORCES"]]
    shift = [float(study["backbone_shift"](result, p.amplitude)) for p in peaks]
    np.testing.assert_allclose([p.parameter for p in peaks], shift, atol=0.01 * width)


def test_figures_are_written_where_matplotlib_is(study, result, tmp_path):
    pytest.importorskip("matplotlib")
    written = study["figures"](result, tmp_path)
    assert [path.stat().st_size > 10_000 for path in written] == [True, True]


@pytest.fixture(scope="module")
def loop():
    module = runpy.run_path(str(DOCS / "examples" / "phase_locked_loop.py"))
    result = module["expansion"]()
    return module, result, module["by_slow_flow"](result), module["by_full_equation"]()


def test_the_slow_flow_in_a_loop_follows_the_full_equation(loop):
    """Through all transients; the frequency moves by 1.4e-3 in all."""
    _, _, slow, full = loop
    assert np.abs(slow.frequency - full.frequency).max() < 5e-5
    assert np.ptp(full.frequency) > 1.3e-3


def test_the_loop_settles_on_phase_resonance(loop):
    module, result, slow, full = loop
    ends = [*(start for start, _ in module["STEPS"][1:]), module["END"] + 1]
    for (_, level), end in zip(module["STEPS"], ends, strict=True):
        k = int(np.searchsorted(module["TIMES"], end)) - 1
        frequency, amplitude = module["resonance"](result, level)
        for run in (slow, full):
            assert run.frequency[k - module["WINDOW"]] == pytest.approx(frequency, abs=3e-6)
        assert slow.amplitude[k] == pytest.approx(amplitude, rel=2e-3)


def test_the_comparison_of_the_loop_sees_a_wrong_coefficient(loop):
    module, result, _, full = loop
    wrong = module["by_slow_flow"](result, module["PARAMETERS"] | {"alpha": 0.75})
    assert np.abs(wrong.frequency - full.frequency).max() > 8e-5


def test_approximants_reach_beyond_the_series():
    reach = runpy.run_path(str(DOCS / "examples" / "reach_of_a_series.py"))
    rows = {e: values for e, *values in reach["frequencies"]()}
    # By integration to 13 digits: tests/checks/test_pade.py.
    exact = {1.0: 0.942955847442, 2.0: 0.823497860144, 3.0: 0.709235531706}
    for e, (series, rational, quadratic) in rows.items():
        assert rational == pytest.approx(exact[e], abs=1e-7)
        assert quadratic == pytest.approx(exact[e], abs=2e-8)
        assert (abs(series - exact[e]) < 1e-8) == (e == 1.0)
    amplitudes = [reach["reach"](order).amplitude for order in reach["ORDERS"]]
    assert amplitudes == sorted(amplitudes)


@pytest.fixture(scope="module")
def drawn():
    pytest.importorskip("matplotlib")
    return runpy.run_path(str(DOCS / "examples" / "figures.py"))


def test_every_figure_of_the_script_stands_on_a_page(drawn):
    pages = "".join(page.read_text() for page in DOCS.glob("*.md"))
    assert [name for name in drawn["FIGURES"] if f"(figures/{name})" not in pages] == []


@pytest.mark.parametrize("name", ["tour_response.png", "decay.png", "exchange.png", "tongues.png"])
def test_figures_are_drawn_again(drawn, name, tmp_path):
    """The other figures take seconds each, for what they integrate."""
    (path,) = drawn["write"](tmp_path, [name])
    assert path.stat().st_size > 10_000


def test_the_driven_oscillator_settles_where_the_figure_shows_it(drawn):
    values = {"epsilon": 0.02, "mu": 0.15, "alpha": 1.0, "f": 0.6, "omega_0": 1.0, "Omega": 0.99}
    (state,) = (s for s in ms.equilibria(drawn["driven"](3), values) if not s.spurious)
    assert drawn["settled"](0.99, 1.6)[1] == pytest.approx(state.amplitudes[0], rel=2e-3)


def test_the_cycle_has_the_frequency_that_the_figure_shows(drawn):
    assert drawn["cycle_frequency"](1.0) == pytest.approx(0.942955847442, abs=1e-7)


@pytest.fixture(scope="module")
def fork():
    module = runpy.run_path(str(DOCS / "examples" / "ring_down_identification.py"))
    return module, module["record"]()


def test_drag_damping_and_stiffness_are_identified(fork):
    """The truth lies within three standard deviations, which are a small part of each value."""
    module, data = fork
    found = module["identify"](module["expansion"](), data)
    for name, true in module["TRUTH"].items():
        assert abs(found.values[name] - true) < 3 * found.uncertainties[name]
        assert found.uncertainties[name] < 0.01 * true
    assert found.misfit == pytest.approx(module["NOISE"], rel=0.03)


def test_the_record_shows_that_there_is_drag(fork):
    """Viscous damping alone leaves a misfit well above the noise."""
    module, data = fork
    guess = module["start"](data)
    guess["c"] += guess.pop("d") * module["PLUCK"] * np.sqrt(guess["k"] / module["MASS"]) / 2
    known = {"m": module["MASS"], "epsilon": 1.0, "d": 0.0}
    short = len(data) // 10
    for count in (short, len(data)):
        model = ms.ring_down_model(module["expansion"](), module["TIMES"][:count], free=["c", "k", "k_3"], known=known)
        found = ms.fit(model, data[:count], guess)
        guess = found.values
    assert found.misfit > 2 * module["NOISE"]
