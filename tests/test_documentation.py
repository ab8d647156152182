"""Every code block of every page runs as printed, and every public name has its place in the reference."""

from __future__ import annotations

import doctest
import re
from pathlib import Path

import pytest

import multiscale as ms

DOCS = Path(__file__).parent.parent / "docs"
PAGES = sorted(DOCS.rglob("*.md"))
BLOCK = re.compile(r"^```(\w*)[^\n]*\n(.*?)^```", re.MULTILINE | re.DOTALL)
LANGUAGES = {"python", "sh", "text", "c", "bibtex", ""}


def blocks(page):
    """(line, language, text) of each fenced block that is no directive."""
    text = page.read_text()
    found = []
    for match in re.finditer(BLOCK, text):
        if not text[match.start() :].startswith("```{"):
            found.append((text[: match.start()].count("\n") + 2, match[1], match[2]))
    return found


@pytest.mark.parametrize("page", PAGES, ids=lambda p: str(p.relative_to(DOCS)))
def test_code_blocks_run_as_printed(page):
    """Blocks of one page share their names, from top to bottom, as a reader would type them."""
    names = {"__name__": "page"}
    runner = doctest.DocTestRunner(optionflags=doctest.NORMALIZE_WHITESPACE, verbose=False)
    for line, language, text in blocks(page):
        assert language in LANGUAGES, f"{page}:{line}"
        if language == "python":
            assert text.lstrip().startswith(">>>"), f"{page}:{line} has a block that shows no output to check"
            test = doctest.DocTestParser().get_doctest(text, names, page.name, str(page), line - 1)
            report = []
            assert runner.run(test, out=report.append, clear_globs=False).failed == 0, "".join(report)
            names = test.globs


def test_the_check_of_code_blocks_can_fail(tmp_path):
    page = tmp_path / "page.md"
    page.write_text("Text\n\n```python\n>>> 1 + 1\n3\n```\n")
    with pytest.raises(AssertionError, match="Expected"):
        test_code_blocks_run_as_printed(page)


@pytest.mark.parametrize("name", sorted(set(ms.__all__)))
def test_every_public_name_is_in_the_reference(name):
    reference = "".join(p.read_text() for p in (DOCS / "reference").glob("*.md"))
    assert re.search(rf"auto(class|function|exception):: multiscale\.{name}$", reference, re.MULTILINE), name


@pytest.mark.parametrize("page", PAGES, ids=lambda p: str(p.relative_to(DOCS)))
def test_figures_exist_and_are_made_by_a_script(page):
    scripts = "".join(p.read_text() for p in (DOCS / "examples").glob("*.py"))
    for figure in re.findall(r"!\[[^\]]*\]\(([^)]+)\)", page.read_text()):
        assert (page.parent / figure).exists(), figure
        assert Path(figure).name in scripts, figure
