"""The README's examples run as printed, and its example script does the main job."""

from __future__ import annotations

import doctest
import runpy
from pathlib import Path

import numpy as np

ROOT = Path(__file__).parent.parent


def test_examples_in_the_readme():
    found = doctest.testfile(str(ROOT / "README.md"), module_relative=False, optionflags=doctest.NORMALIZE_WHITESPACE)
    assert found.attempted > 8
    assert found.failed == 0


def test_pulling_of_the_timing_resonator_against_the_energy_integral():
    """The fourth order is closer to the exact frequency than the second, and both are close where the drive is weak."""
    example = runpy.run_path(str(ROOT / "docs" / "examples" / "timing_resonator.py"))
    second, fourth = example["expansion"](2), example["expansion"](4)
    levels = example["amplitudes"](example["DRIVE_LEVELS"])
    exact = np.array([example["exact_pulling"](fourth, a) for a in levels])
    errors = [abs(example["pulling"](r, levels) / exact - 1) for r in (second, fourth)]
    assert (errors[0] < 4e-3).all()
    assert (errors[1] < 1e-4).all()
    assert (errors[1][2:] < errors[0][2:] / 20).all()


def test_the_table_has_a_row_for_each_drive_level(capsys, monkeypatch, tmp_path):
    monkeypatch.chdir(tmp_path)
    runpy.run_path(str(ROOT / "docs" / "examples" / "timing_resonator.py"), run_name="__main__")
    printed = capsys.readouterr().out
    assert "9*k_1*k_3 - 10*k_2**2" in printed
    assert sum(line.strip()[:2].strip().isdigit() for line in printed.splitlines()) == 6
