"""The recipe for sweeps on many cores: the same numbers wherever they are computed."""

from __future__ import annotations

import numpy as np
import pytest

from docs.examples import parameter_sweep as sweep


@pytest.fixture(scope="module")
def result():
    return sweep.expansion()


@pytest.fixture(scope="module")
def alone(result):
    found = sweep.serially(result)
    assert found.shape == (len(sweep.FORCES), len(sweep.DETUNINGS))
    assert (found > 0).all()
    assert (np.diff(found.max(axis=1)) > 0).all()
    return found


def test_joblib_gives_the_same_numbers(result, alone):
    pytest.importorskip("joblib")
    np.testing.assert_array_equal(sweep.on_joblib(result), alone)


@pytest.mark.slow
def test_a_dask_cluster_gives_the_same_numbers(result, alone):
    pytest.importorskip("dask.distributed")
    np.testing.assert_array_equal(sweep.on_dask(result), alone)


def test_the_table_is_printed(capsys):
    sweep.main()
    assert len(capsys.readouterr().out.splitlines()) == 1 + len(sweep.FORCES)
