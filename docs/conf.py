"""Sphinx: ``sphinx-build -W -b html docs docs/_build/html`` after ``pip install -e '.[docs]'``."""

from __future__ import annotations

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
