"""``python -m benchmarks [--only NAME …] [--long]``: run, print, write ``benchmarks/results/*.json`` and figures."""

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
    "large_flow",
    "large_chain",
    "force_quadrature",
    "frequency_response",
    "periodic_orbit",
    "certificate",
    "import_time",
)
LONG = {"large_flow", "periodic_orbit"}
"""Benchmarks whose `run` has the option ``long``: opponents that take minutes."""
RESULTS = Path(__file__).parent / "results"


def main() -> None:
    parser = argparse.ArgumentParser(prog="python -m benchmarks", description=sys.modules["benchmarks"].__doc__)
    parser.formatter_class = argparse.RawDescriptionHelpFormatter
    parser.add_argument("--only", nargs="+", choices=NAMES, default=NAMES, metavar="NAME", help=", ".join(NAMES))
    parser.add_argument("--output", type=Path, default=RESULTS, help="folder for the raw results and figures")
    parser.add_argument("--long", action="store_true", help="also run opponents that take minutes")
    options = parser.parse_args()
    report = Report()
    for name in options.only:
        print(f"… {name}", file=sys.stderr, flush=True)
        extra = {"long": True} if options.long and name in LONG else {}
        report.results[name] = import_module(f"benchmarks.{name}").run(**extra)
    print(table(report))
    # A run of some benchmarks never replaces the record of a complete one.
    written = report.write(options.output, "latest" if set(options.only) == set(NAMES) else "partial")
    print("\nraw results and figures:", *written, sep="\n  ")


if __name__ == "__main__":
    main()
