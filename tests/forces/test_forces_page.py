"""The page on forces runs as printed."""

from __future__ import annotations

import doctest
from pathlib import Path

import pytest

pytest.importorskip("scipy.integrate")

PAGE = Path(__file__).parents[2] / "docs" / "forces.md"


def test_examples_on_the_page():
    found = doctest.testfile(str(PAGE), module_relative=False, optionflags=doctest.NORMALIZE_WHITESPACE)
    assert found.attempted > 15
    assert found.failed == 0
