"""What the documentation shows is what its examples print, and its links lead somewhere."""

import re

import pytest

from docs.transcripts import ROOT, executed, pages

PAGES = [pytest.param(path, id=path.relative_to(ROOT).as_posix()) for path in pages()]
LINK = re.compile(r"\]\((?!https?://)([^)#]*)(#[^)]*)?\)")
# A word that would tell how the pages were made instead of what the program does.
FOREIGN = re.compile(r"\b(TODO|FIXME|issue #?\d|chatbot|as an AI)\b", re.IGNORECASE)


@pytest.mark.parametrize("path", PAGES)
def test_examples_print_what_the_page_shows(path):
    assert executed(path) == path.read_text(encoding="utf-8"), "renew the pages with `make pages`"


@pytest.mark.parametrize("path", PAGES)
def test_links_lead_to_files(path):
    text = path.read_text(encoding="utf-8")
    missing = [target for target, _ in LINK.findall(text) if target and not (path.parent / target).exists()]
    assert not missing
    assert not FOREIGN.search(text)


def test_a_changed_output_is_noticed(tmp_path):
    page = tmp_path / "page.md"
    page.write_text("```python\nprint(1 + 1)\n```\n\n```text\n3\n```\n", encoding="utf-8")
    assert executed(page) == "```python\nprint(1 + 1)\n```\n\n```text\n2\n```\n"


def test_a_command_that_fails_is_noticed(tmp_path):
    page = tmp_path / "page.md"
    page.write_text("```console\n$ tieline check missing.toml\n```\n", encoding="utf-8")
    with pytest.raises(AssertionError, match="ended with status 2"):
        executed(page)


def test_the_readme_shows_the_demo_first():
    text = (ROOT / "README.md").read_text(encoding="utf-8")
    assert text.index("$ make demo") < text.index("\n## "), "before any other section"
    assert "badge" not in text


def test_measured_figures_are_those_of_the_studies():
    """Every decimal in a paragraph that starts with `Measured:` stands in the tables, rounded as there or shorter."""
    measured = (ROOT / "docs" / "methods" / "measured.md").read_text(encoding="utf-8")
    known = [float(number) for number in re.findall(r"\d+\.\d+", measured)]
    checked = 0
    for path in sorted((ROOT / "docs" / "methods").glob("*.md")):
        for paragraph in re.findall(
            r"^Measured:.*?(?=\n\n|\Z)", path.read_text(encoding="utf-8"), re.M | re.S
        ):
            for number in re.findall(r"\d+\.\d+", paragraph):
                digits = len(number.partition(".")[2])
                assert any(f"{value:.{digits}f}" == number for value in known), f"{path.name}: {number}"
                checked += 1
    assert checked > 10
