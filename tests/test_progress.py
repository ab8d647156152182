"""What one sees while an expansion runs, and how long results look in a notebook."""

from __future__ import annotations

import logging
import pickle
import subprocess
import sys

import pytest
import sympy as sp

import multiscale as ms
from benchmarks.problems import one_to_two, van_der_pol

t = sp.Symbol("t", real=True)
eps, omega = sp.symbols("epsilon omega", positive=True)
u = sp.Function("u")(t)


class Bar:
    """What a progress bar needs to have."""

    def __init__(self, total):
        self.total, self.done = total, 0

    def update(self, n=1):
        self.done += n


def test_a_progress_bar_moves_with_the_levels():
    bar, seen = Bar(4), []

    def step(level):
        bar.update()
        seen.append((level.order, bar.done))

    result = ms.expand(van_der_pol(), 4, on_level=step)
    assert seen == [(1, 1), (2, 2), (3, 3), (4, 4)]
    assert bar.done == bar.total == result.order


def test_tqdm():
    tqdm = pytest.importorskip("tqdm")
    with tqdm.tqdm(total=3, disable=True) as bar:
        assert ms.expand(van_der_pol(), 3, on_level=lambda level: bar.update()).order == 3


def test_levels_are_written_only_when_looked_at(monkeypatch):
    from multiscale.level import Views

    written, write = [], Views.level
    monkeypatch.setattr(Views, "level", lambda self, n: written.append(n) or write(self, n))
    kept = []
    result = ms.expand(van_der_pol(), 3, on_level=kept.append)
    assert written == []
    assert kept[1].solvability == result.levels[2].solvability
    assert isinstance(kept[0], ms.Level)
    assert written == [2, 2]
    assert pickle.loads(pickle.dumps(kept[2])).forcing == result.levels[3].forcing
    assert "solvability" in repr(kept[0])


def test_log_has_one_line_for_each_level(caplog):
    with caplog.at_level(logging.INFO, logger="multiscale"):
        result = ms.expand(one_to_two(), 2)
        ms.extend(result, 3)
    lines = [record.getMessage() for record in caplog.records]
    assert [line.partition(":")[0] for line in lines] == ["level 1 of 2", "level 2 of 2", "level 3 of 3"]
    fields, flow = result.computation.size(2)
    assert f"{fields} terms in the fields, {flow} in the slow flow" in lines[1]


def test_quiet_by_default():
    code = "from benchmarks.problems import van_der_pol\nimport multiscale as ms\nms.expand(van_der_pol(), 2)"
    done = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, check=True)
    assert (done.stdout, done.stderr) == ("", "")


def test_short_results_are_shown_in_full():
    result = ms.expand(van_der_pol(), 1)
    assert result._repr_latex_() == result.latex(full=True) == result.slow_flow._repr_latex_()
    assert r"\dot{a} &= " in result._repr_latex_()


def long_problem(powers):
    force = sum(
        sp.Symbol(f"c_{j}_{k}") * u**j * u.diff(t) ** k
        for j in range(powers)
        for k in range(powers)
        if 1 < j + k < powers
    )
    return ms.Problem(u.diff(t, 2) + omega**2 * u + eps * force, u, small=eps)


@pytest.mark.filterwarnings("ignore::multiscale.OrderingWarning")
def test_long_results_are_cut():
    result = ms.expand(long_problem(7), 2)
    for shown in (long_problem(15), result, result.slow_flow, result.levels[1]):
        text = shown._repr_latex_()
        assert text.startswith(r"$\displaystyle")
        assert text.endswith("$")
        assert r"\cdots" in text
        assert len(text) < 10_000
    assert r"\cdots" not in result.latex(full=True)
    assert len(result.latex(full=True)) > len(result.latex())


def test_very_long_results_are_not_written_at_all(monkeypatch):
    result = ms.expand(long_problem(9), 3)
    monkeypatch.setattr(ms.SlowFlow, "polar", property(lambda self: pytest.fail("the SymPy form was made")))
    assert "terms; use latex(full=True)" in result._repr_latex_()
    assert "terms; use latex(full=True)" in result.slow_flow._repr_latex_()
