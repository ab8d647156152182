"""Every code block of every page runs as printed, and every public name has its place in the reference."""

from __future__ import annotations

import doctest
import importlib.util
import json
import re
from pathlib import Path

import pytest
from checks.test_mutations import ALTERATIONS, SYSTEMS, examined
from support.claims import terms

import multiscale as ms
from benchmarks.page import PAGE, RESULTS
from benchmarks.page import page as performance

DOCS = Path(__file__).parent.parent / "docs"
PAGES = sorted(DOCS.rglob("*.md"))
BLOCK = re.compile(r"^```(\w*)[^\n]*\n(.*?)^```", re.MULTILINE | re.DOTALL)
LANGUAGES = {"python", "sh", "text", "c", "bibtex", ""}
CITATION = (DOCS / "CITATION.cff").read_text()


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


def test_every_page_is_in_a_table_of_contents():
    listed = set()
    for index in (DOCS / "index.md", DOCS / "reference" / "index.md"):
        for tree in re.findall(r"^```\{toctree\}\n(.*?)^```", index.read_text(), re.MULTILINE | re.DOTALL):
            names = [line for line in tree.splitlines() if line and not line.startswith(":")]
            listed |= {(index.parent / f"{name}.md").resolve() for name in names}
    assert listed == {p.resolve() for p in PAGES} - {(DOCS / "index.md").resolve()}


def test_the_performance_page_is_made_of_the_stored_results():
    """After ``python -m benchmarks``: ``python -m benchmarks.page``."""
    assert PAGE.read_text(encoding="utf-8") == performance(json.loads(RESULTS.read_text(encoding="utf-8")))


@pytest.mark.parametrize("name", SYSTEMS)
def test_the_table_of_alterations_counts_what_is_altered(name):
    claim = examined(name).claim
    levels = range(1, claim.order + 1)
    fields = sum(len(terms(x)) for n in levels for x in claim.fields[n])
    flow = sum(len(terms(x)) for n in levels for x in claim.flow[n - 1])
    altered = len(ALTERATIONS) * (fields + flow)
    row = f"| {name} | {claim.order} | {fields} | {flow} | {altered} | {altered} |"
    assert row in (DOCS / "verification.md").read_text()


@pytest.mark.parametrize("field", ["cff-version: 1.2.0", "message:", "title:", "type: software", "authors:"])
def test_the_citation_has_what_the_format_requires(field):
    assert re.search(rf"^{re.escape(field)}", CITATION, re.MULTILINE)


def test_the_citation_is_that_of_this_version():
    assert re.search(rf"^version: {re.escape(ms.__version__)}$", CITATION, re.MULTILINE)
    if importlib.util.find_spec("yaml"):
        import yaml

        found = yaml.safe_load(CITATION)
        assert (found["cff-version"], found["version"]) == ("1.2.0", ms.__version__)
        assert found["authors"] == [{"name": "the multiscale contributors"}]
