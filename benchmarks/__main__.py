"""``python -m benchmarks [--only NAME …]``: run, print a table, write ``benchmarks/results/*.json`` and figures."""

from __future__ import annotations

import argparse
import sys
from importlib import import_module
from pathlib import Path

from benchmarks.report import Report, table

NAMES = (
    "against_plain_sympy",
    "against_flint_loop",
    "symbolic_parameters",
    "generated_call",
    "frequency_response",
    "import_time",
)
RESULTS = Path(__file__).parent / "results"


def main() -> None:
    parser = argparse.ArgumentParser(prog="python -m benchmarks", description=sys.modules["benchmarks"].__doc__)
    parser.formatter_class = argparse.RawDescriptionHelpFormatter
    parser.add_argument("--only", nargs="+", choices=NAMES, default=NAMES, metavar="NAME", help=", ".join(NAMES))
    parser.add_argument("--output", type=Path, default=RESULTS, help="folder for the raw results and figures")
    options = parser.parse_args()
    report = Report()
    for name in options.only:
        print(f"… {name}", file=sys.stderr, flush=True)
        report.results[name] = import_module(f"benchmarks.{name}").run()
    print(table(report))
    # A run of some benchmarks never replaces the record of a complete one.
    written = report.write(options.output, "latest" if set(options.only) == set(NAMES) else "partial")
    print("\nraw results and figures:", *written, sep="\n  ")


if __name__ == "__main__":
    main()
