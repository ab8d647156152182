"""What a benchmark hands back, and how it is printed and stored."""

from __future__ import annotations

import json
import os
import platform
import sys
from collections.abc import Callable, Iterable, Mapping
from dataclasses import asdict, dataclass, field
from datetime import UTC, datetime
from importlib.metadata import PackageNotFoundError, version
from importlib.util import find_spec
from pathlib import Path
from typing import Any, Literal

from benchmarks.timing import Rounds

__all__ = [
    "FLINT_MISSING",
    "Figure",
    "Report",
    "Result",
    "Sense",
    "against",
    "alone",
    "environment",
    "has_flint",
    "note",
    "table",
]

Sense = Literal["times faster", "times the opponent"]
RECORDED = ("multiscale-expansions", "sympy", "numpy", "mpmath", "python-flint", "scipy", "matplotlib")
FLINT_MISSING = "skipped: needs python-flint, which is not installed"


@dataclass(frozen=True)
class Result:
    """One line of the table; `ratio` in the sense of `sense`, `target` its bound in the same sense."""

    case: str
    library: float | None = None
    opponent: float | None = None
    ratio: float | None = None
    sense: Sense = "times the opponent"
    target: float | None = None
    note: str = ""
    rounds: Mapping[str, list[float]] = field(default_factory=dict)

    @property
    def verdict(self) -> str:
        if self.ratio is None or self.target is None:
            return ""
        met = self.ratio >= self.target if self.sense == "times faster" else self.ratio <= self.target
        return f"{'≥' if self.sense == 'times faster' else '≤'} {self.target:g} {'met' if met else 'missed'}"


@dataclass(frozen=True)
class Figure:
    """A plot to be drawn with the results, when matplotlib is installed."""

    name: str
    draw: Callable[[Any], None]


def against(
    case: str,
    rounds: Rounds,
    *,
    library: str = "library",
    opponent: str = "opponent",
    sense: Sense = "times the opponent",
    target: float | None = None,
    note: str = "",
) -> Result:
    """The library compared with an opponent of the same rounds."""
    ratio = rounds.ratio(opponent, library) if sense == "times faster" else rounds.ratio(library, opponent)
    raw = {name: rounds.seconds[name] for name in (library, opponent)}
    return Result(case, rounds.median(library), rounds.median(opponent), ratio, sense, target, note, raw)


def alone(case: str, rounds: Rounds, library: str = "library", note: str = "") -> Result:
    """A time reported beside the comparisons."""
    return Result(case, rounds.median(library), note=note, rounds={library: rounds.seconds[library]})


def note(case: str, text: str) -> Result:
    return Result(case, note=text)


def has_flint() -> bool:
    return find_spec("flint") is not None


def environment() -> dict[str, Any]:
    """Versions and machine."""
    versions: dict[str, str | None] = {}
    for name in RECORDED:
        try:
            versions[name] = version(name)
        except PackageNotFoundError:
            versions[name] = None
    from sympy.external.gmpy import GROUND_TYPES

    machine = {"cpus": os.cpu_count(), "platform": platform.platform(), "processor": platform.processor()}
    return {
        "python": sys.version,
        "versions": versions,
        "sympy_ground_types": GROUND_TYPES,
        "machine": machine,
        "date": datetime.now(UTC).isoformat(timespec="seconds"),
    }


@dataclass
class Report:
    """Results by benchmark; figures are results too."""

    results: dict[str, list[Result | Figure]] = field(default_factory=dict)

    def rows(self, name: str) -> Iterable[Result]:
        return (x for x in self.results[name] if isinstance(x, Result))

    def write(self, folder: Path, stem: str) -> list[Path]:
        """The JSON and the figures; returns the paths written."""
        folder.mkdir(parents=True, exist_ok=True)
        data = {
            "environment": environment(),
            "results": {n: [asdict(r) | {"verdict": r.verdict} for r in self.rows(n)] for n in self.results},
        }
        written = [folder / f"{stem}.json"]
        written[0].write_text(json.dumps(data, indent=1, ensure_ascii=False) + "\n", encoding="utf-8")
        figures = [x for found in self.results.values() for x in found if isinstance(x, Figure)]
        if figures and find_spec("matplotlib"):
            from matplotlib.figure import Figure as Canvas

            for figure in figures:
                canvas = Canvas(figsize=(6, 4), layout="constrained")
                figure.draw(canvas.subplots())
                written.append(folder / f"{figure.name}.png")
                canvas.savefig(written[-1], dpi=150)
        return written


def _time(seconds: float | None) -> str:
    if seconds is None:
        return ""
    size, unit = next((x for x in ((1.0, "s"), (1e-3, "ms")) if seconds >= x[0]), (1e-6, "µs"))
    return f"{seconds / size:.3g} {unit}"


def table(report: Report) -> str:
    """The report as plain text."""
    lines = []
    for name in report.results:
        lines += ["", name, f"  {'case':66} {'library':>9} {'opponent':>9} {'ratio':>8}  target"]
        for r in report.rows(name):
            ratio = "" if r.ratio is None else f"{r.ratio:.3g}" if r.ratio < 100 else f"{r.ratio:.0f}"
            line = f"  {r.case:66} {_time(r.library):>9} {_time(r.opponent):>9} {ratio:>8}  {r.verdict}"
            lines += [line.rstrip(), *([f"      {r.note}"] if r.note else [])]
    return "\n".join(lines)
