"""The rules of the house that a machine can check."""

from __future__ import annotations

import ast
import subprocess
import sys
from pathlib import Path

import pytest

import multiscale

PACKAGE = Path(multiscale.__file__).parent
FORBIDDEN = {"simplify", "trigsimp", "dsolve", "collect", "expand", "nsimplify", "sympify"}
EXACT_ROOMS = sorted(
    path
    for room in ("algebra", "linear_part", "forces", "hierarchy.py", "tower.py", "clock.py", "convention.py")
    for path in ((PACKAGE / room).rglob("*.py") if (PACKAGE / room).is_dir() else [PACKAGE / room])
)
# Each room may import from those that stand before it.
FLOORS = [
    "errors",
    "latex",
    "algebra",
    "tower",
    "forces",
    "linear_part",
    "clock",
    "hierarchy",
    "problem",
    "frame",
    "computed",
    "convention",
]


def _called_names(tree: ast.AST) -> set[str]:
    calls = [node.func for node in ast.walk(tree) if isinstance(node, ast.Call)]
    return {f.attr if isinstance(f, ast.Attribute) else getattr(f, "id", "") for f in calls}


@pytest.mark.parametrize("path", EXACT_ROOMS, ids=lambda p: str(p.relative_to(PACKAGE)))
def test_exact_rooms_never_simplify(path):
    assert not _called_names(ast.parse(path.read_text())) & FORBIDDEN


def test_the_check_for_simplification_can_fail():
    assert _called_names(ast.parse("import sympy as sp\nsp.simplify(x)")) & FORBIDDEN


def _imports(path: Path) -> set[str]:
    found = set()
    for node in ast.walk(ast.parse(path.read_text())):
        if isinstance(node, ast.ImportFrom) and node.module and node.module.startswith("multiscale."):
            found.add(node.module.split(".")[1])
    return found


@pytest.mark.parametrize("floor", range(len(FLOORS)), ids=FLOORS)
def test_nothing_imports_upward(floor):
    place = PACKAGE / FLOORS[floor]
    paths = list(place.rglob("*.py")) if place.is_dir() else [place.with_suffix(".py")]
    assert paths
    for path in paths:
        assert _imports(path) <= set(FLOORS[: floor + 1]), path


def test_optional_packages_are_not_imported():
    """Importing the package and expanding with SymPy's polynomials must need no extra."""
    code = (
        "import sys\nfor name in ('flint', 'scipy', 'matplotlib'): sys.modules[name] = None\n"
        "import sympy as sp, multiscale as ms\nt, e = sp.symbols('t e')\nu = sp.Function('u')(t)\n"
        "r = ms.expand(ms.Problem(u.diff(t, 2) + u + e*u**3, u, small=e), 2, representation='sympy')\n"
        "print(r.frequency_corrections()[1], r.slow_flow.to_numpy().bind(e=0.1)(0, [1, 0])[1])"
    )
    environment = {"PATH": "", "SYMPY_GROUND_TYPES": "python"}
    done = subprocess.run([sys.executable, "-W", "error", "-c", code], capture_output=True, text=True, env=environment)
    assert done.returncode == 0, done.stderr
    assert done.stdout.startswith("3*a**2/8")


def test_public_names_are_documented_with_an_example_or_attributes():
    for name in multiscale.__all__:
        assert getattr(multiscale, name).__doc__, name
    for name in ("Problem", "expand", "NumpyFunction", "SlowFlow"):
        assert ">>>" in getattr(multiscale, name).__doc__, name
