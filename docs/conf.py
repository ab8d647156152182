"""Sphinx: ``sphinx-build -W -b html docs docs/_build/html`` after ``pip install -e '.[docs]'``."""

from __future__ import annotations

import re
from typing import Any

import multiscale

project = "multiscale"
copyright = "the multiscale contributors"
release = version = multiscale.__version__

extensions = ["myst_parser", "sphinx.ext.autodoc", "sphinx.ext.napoleon", "sphinx.ext.mathjax"]
source_suffix = {".md": "markdown"}
exclude_patterns = ["_build", "examples"]

html_theme = "furo"
html_title = f"multiscale {release}"
html_show_sphinx = False

myst_enable_extensions = ["dollarmath", "amsmath", "deflist"]
myst_heading_anchors = 3

autodoc_member_order = "bysource"
autodoc_typehints = "description"
autodoc_typehints_description_target = "documented"
autodoc_class_signature = "separated"
napoleon_use_ivar = True
napoleon_google_docstring = False
# A word in single backticks in a docstring is a public name, linked where it stands in the reference.
default_role = "py:obj"
nitpicky = False


def keep_colons(app: Any, what: str, name: str, obj: Any, options: Any, lines: list[str]) -> None:
    """Docstrings of properties begin with text, also where a colon stands in it: Napoleon would read a type there."""
    if what in {"property", "attribute"}:
        lines[:0] = ["..", ""]  # an empty comment, which holds no colon
    elif what == "class":
        lines[:] = [one for line in items(lines) for one in line]


def items(lines: list[str]) -> list[list[str]]:
    """The lines, attributes that share an entry ("p, q : float") each with its own: Napoleon would mix them up."""
    found: list[list[str]] = []
    k = 0
    while k < len(lines):
        head = re.fullmatch(r"(\w+(?:, \w+)+) :(.*)", lines[k])
        end = k + 1
        while head and end < len(lines) and lines[end].startswith(" "):
            end += 1
        names = head[1].split(", ") if head else []
        found += [[f"{name} :{head[2]}", *lines[k + 1 : end]] for name in names] if head else [[lines[k]]]
        k = end
    return found


def setup(app: Any) -> None:
    app.connect("autodoc-process-docstring", keep_colons, priority=400)
