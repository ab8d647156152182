"""``python -m benchmarks.page``: write docs/performance.md from the stored results of a complete run.

The page holds nothing but what the results and the docstrings of the benchmarks say, so that it cannot drift from them.
"""

from __future__ import annotations

import json
from importlib import import_module
from inspect import getdoc
from pathlib import Path
from typing import Any

ROOT = Path(__file__).parent.parent
RESULTS = ROOT / "benchmarks" / "results" / "latest.json"
PAGE = ROOT / "docs" / "performance.md"

HEAD = """# Performance

*Written by `python -m benchmarks.page` from `benchmarks/results/latest.json`.*

Every figure is a ratio: library and opponent do the same work, one after the other in each round, and the median over
the rounds is taken. Seconds depend on the machine, ratios hardly. Results of both sides are compared before any time
is taken. Where a target was set beforehand it stands beside what was measured, met or missed. `python -m benchmarks`
runs them all.
"""

MEANING = {
    "times faster": "times as fast as the opponent",
    "times the opponent": "times the opponent's time",
}


def number(ratio: float) -> str:
    return f"{ratio:.0f}" if ratio >= 100 else f"{ratio:.2g}" if ratio >= 10 else f"{ratio:.2f}"


def row(result: dict[str, Any]) -> str:
    verdict = result["verdict"] or "none"
    cells = [
        result["case"].replace("|", "\\|").replace("*", "\\*"),
        number(result["ratio"]),
        MEANING[result["sense"]],
        verdict,
    ]
    return f"| {' | '.join(cells)} |"


def section(name: str, results: list[dict[str, Any]]) -> str:
    """The docstring of a benchmark, its ratios and the notes on them."""
    title, _, text = (getdoc(import_module(f"benchmarks.{name}")) or name).partition("\n\n")
    lines = [f"## {' '.join(title.split()).rstrip('.')}", "", text, ""]
    ratios = [r for r in results if r["ratio"] is not None]
    if ratios:
        lines += ["| case | ratio | meaning | target |", "|---|---:|---|---|", *map(row, ratios), ""]
    lines += [f"- {r['case']}: {r['note']}." for r in results if r["note"]]
    return "\n".join(lines).rstrip() + "\n"


def environment(data: dict[str, Any]) -> str:
    found = data["environment"]
    versions = ", ".join(f"{name} {version}" for name, version in found["versions"].items() if version)
    return (
        "## Versions and machine\n\n"
        f"Python {found['python'].split()[0]}; {versions}. {found['machine']['cpus']} processors, "
        f"{found['machine']['platform'].split('-')[0]}. Run on {found['date'][:10]}.\n"
    )


def page(data: dict[str, Any]) -> str:
    return "\n".join([HEAD, *(section(name, rows) for name, rows in data["results"].items()), environment(data)])


if __name__ == "__main__":
    PAGE.write_text(page(json.loads(RESULTS.read_text(encoding="utf-8"))), encoding="utf-8")
    print(PAGE)
