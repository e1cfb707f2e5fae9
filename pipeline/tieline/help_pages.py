"""The documentation's pages on the terminal: `tieline help PAGE`, without a network or a browser."""

from __future__ import annotations

from collections.abc import Sequence
from pathlib import Path

from tieline.errors import InputError, Problem, nearest

# Folders of pages, in the order in which they are listed.
SECTIONS = ("", "how-to", "methods", "reference")


def pages_folder() -> Path:
    """The folder of pages: packed beside this module, or `docs/` of the source tree."""
    packed = Path(__file__).parent / "pages"
    return packed if packed.is_dir() else Path(__file__).parents[2] / "docs"


def pages() -> dict[str, Path]:
    """Name of a page, which is the name of its file, to the file."""
    folder = pages_folder()
    return {
        path.stem: path
        for section in SECTIONS
        for path in sorted((folder / section).glob("*.md"))
        if path.stem != "index"
    }


def title(path: Path) -> str:
    """The first heading of a page."""
    lines = path.read_text(encoding="utf-8").splitlines()
    return next((line.removeprefix("# ") for line in lines if line.startswith("# ")), path.stem)


def read_page(name: str) -> str:
    """The Markdown text of a page. Raises InputError where there is none of that name."""
    known = pages()
    if name not in known:
        remedy = nearest(name, known) or "`tieline help` lists them."
        raise InputError(Problem(f'there is no page "{name}".', remedy=remedy))
    text = known[name].read_text(encoding="utf-8")
    return "\n".join(line for line in text.splitlines() if not line.startswith("<!--"))


def page_for(problems: Sequence[Problem]) -> str | None:
    """The page that helps with most of these problems; None where none does."""
    files = [problem.file or "" for problem in problems]
    if any(problem.message.startswith("not decided:") for problem in problems):
        return "own-tables"
    if any("run folder" in problem.message for problem in problems):
        return None
    if any(file.endswith(".toml") for file in files):
        return "settings"
    if any("rulings" in Path(file).stem for file in files):
        return "rulings"
    if any(
        file.endswith(".parquet") or "sealed" in problem.message
        for file, problem in zip(files, problems, strict=True)
    ):
        return "audit"
    return "own-tables" if any(problem.row or problem.column for problem in problems) else None
