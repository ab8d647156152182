"""`import multiscale` against `import sympy, numpy`, which it cannot do without.

Compared: the time of the import statement in fresh interpreters, one after the other in turns, with bytecode already
written, as it is for an installed package. Beside it: which of the optional packages are loaded by either import (SymPy
itself loads python-flint for its integers when it is installed).

Floor: 1, the two packages alone.
"""

from __future__ import annotations

import json
import os
import subprocess
import sys
from pathlib import Path

from benchmarks.report import Result, against, note
from benchmarks.timing import Rounds

TARGET = 1.15
REPEATS = 21
OPTIONAL = ("scipy", "matplotlib", "flint")
STATEMENTS = {"library": "import multiscale", "opponent": "import sympy, numpy"}
HERE = Path(__file__).parents[1]


def _import(statement: str) -> tuple[float, list[str]]:
    """(seconds, optional packages loaded) in a fresh interpreter."""
    code = f"""
import sys
from time import perf_counter
start = perf_counter()
{statement}
seconds = perf_counter() - start
import json
print(json.dumps([seconds, [name for name in {OPTIONAL} if name in sys.modules]]))
"""
    variables = {k: v for k, v in os.environ.items() if k != "PYTHONDONTWRITEBYTECODE"}
    command = [sys.executable, "-c", code]
    answer = subprocess.run(command, env=variables, cwd=HERE, capture_output=True, text=True, check=True)
    seconds, loaded = json.loads(answer.stdout)
    return seconds, loaded


def run() -> list[Result]:
    # The first imports write bytecode and fill the file cache.
    loaded = {name: _import(statement)[1] for name, statement in STATEMENTS.items()}
    seconds: dict[str, list[float]] = {name: [] for name in STATEMENTS}
    for _ in range(REPEATS):
        for name, statement in STATEMENTS.items():
            seconds[name].append(_import(statement)[0])
    added = [name for name in loaded["library"] if name not in loaded["opponent"]]
    spelled = {name: ", ".join(found) or "none" for name, found in loaded.items()}
    return [
        against("import multiscale / import sympy, numpy", Rounds(seconds), target=TARGET),
        note(
            f"optional packages loaded by multiscale itself: {', '.join(added) or 'none'}",
            f"after import multiscale: {spelled['library']}; after import sympy, numpy: {spelled['opponent']}",
        ),
    ]
