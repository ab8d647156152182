"""The script on the cost of large models."""

import runpy
from pathlib import Path

import pytest

EXAMPLE = Path(__file__).parents[2] / "docs" / "examples" / "large_chain.py"


@pytest.fixture(scope="module")
def example():
    return runpy.run_path(str(EXAMPLE))


@pytest.mark.parametrize("model", ["chain", "net"])
def test_both_models_are_certified_and_timed(example, model):
    built = example[model](64)
    assert example["reduced"](built, 3).certify().passed
    seconds, share = example["timed"](built, 1)
    assert seconds > 0
    assert 0 < share < 1


def test_the_other_modes_matter(example):
    """With quadratic springs the first mode alone misses what the others do to the shift of frequency at leading order;
    with cubic ones alone it misses nothing."""
    whole, alone = example["effective"](example["chain"](200))
    assert abs(whole / alone - 1) > 3e-3
    whole, alone = example["effective"](example["chain"](200, k2=0.0))
    assert whole == pytest.approx(alone, rel=1e-9)


def test_the_figure_is_drawn(example, tmp_path):
    pytest.importorskip("matplotlib")
    pairs = {(n, order) for n in (100, example["COMPARED"]) for order in (3, 5)}
    results = {name: {pair: (0.1 * pair[1], 0.5) for pair in pairs} for name in example["CASES"]}
    (path,) = example["figures"](results, tmp_path)
    assert path.stat().st_size > 10_000
