"""Finished run folders for the tests of the report: the demo session, and one whose labels are hostile."""

from __future__ import annotations

import shutil
from collections.abc import Iterator
from pathlib import Path
from typing import Any

import pytest

from sessions import demo_copy, small_session
from tieline import runner
from tieline.configuration import Session, load
from tieline.report.source import Source, read_source
from tieline.report.write import report_files, write_report

SCRIPT = "<script>alert(1)</script>"
FORMULAS = ("=1+1", "+2", "-3", "@SUM(A1)", "=cmd|' /C calc'!A0")
CHROMIUM_FLAGS = [
    "--no-sandbox", "--disable-gpu", "--disable-quic", "--no-first-run", "--disable-background-networking",
    "--disable-component-update", "--disable-sync",
]  # fmt: skip


@pytest.fixture(scope="session")
def ember(tmp_path_factory: pytest.TempPathFactory) -> Session:
    session = load(demo_copy(tmp_path_factory.mktemp("ember")))
    runner.run(session)
    write_report(session)
    return session


@pytest.fixture(scope="session")
def ember_source(ember: Session) -> Source:
    return read_source(ember)


@pytest.fixture(scope="session")
def ember_files(ember_source: Source) -> dict[str, bytes]:
    return dict(report_files(ember_source))


def hostile_rows() -> list[list[object]]:
    """Two phases of one experiment; spot labels and comments that a careless program would run."""
    rows: list[list[object]] = []
    for number in range(6):
        label = FORMULAS[number] if number < len(FORMULAS) else SCRIPT
        olivine = [
            f'"{label}"',
            f'"{SCRIPT}"',
            "olivine",
            40.5 + 0.1 * number,
            49.0 - 0.1 * number,
            0.30 + 0.01 * number,
        ]
        rows.append([*olivine, f'"{SCRIPT}</script><img src=x onerror=alert(2)>"'])
        rows.append(
            [f"gl-{number}", f'"{SCRIPT}"', "glass", 50.2 + 0.1 * number, 8.0 - 0.02 * number, 0.02, '"=1+1"']
        )
    return rows


@pytest.fixture(scope="session")
def hostile(tmp_path_factory: pytest.TempPathFactory) -> Session:
    header = ["Point", "Run", "Phase", "SiO2", "MgO", "NiO", "Note"]
    session = small_session(
        tmp_path_factory.mktemp("hostile"),
        {"spots.csv": (header, hostile_rows())},
        """
[[ingest.tables]]
path = "spots.csv"
technique = "EPMA"
batch = "=probe"
unit = "wt%"
columns = { spot = "Point", experiment = "Run", phase = "Phase", comment = "Note" }
""",
    )
    runner.run(session)
    write_report(session)
    return session


@pytest.fixture(scope="session")
def chromium() -> Iterator[Any]:
    path = shutil.which("chromium") or shutil.which("chromium-browser")
    if path is None:
        pytest.skip("Debian's chromium is not installed: the page is not driven in a browser")
    playwright = pytest.importorskip("playwright.sync_api", reason="playwright is not installed")
    with playwright.sync_playwright() as driver:
        browser = driver.chromium.launch(executable_path=path, headless=True, args=CHROMIUM_FLAGS)
        yield browser
        browser.close()


class Watched:
    """A page with everything it complained of or asked for."""

    def __init__(self, browser: Any, path: Path, **options: Any) -> None:
        self.context = browser.new_context(accept_downloads=True, **options)
        self.page = self.context.new_page()
        self.complaints: list[str] = []
        self.requests: list[str] = []
        self.page.on("console", lambda message: self.complaints.append(f"{message.type}: {message.text}"))
        self.page.on("pageerror", lambda error: self.complaints.append(str(error)))
        self.page.on(
            "dialog", lambda dialog: (self.complaints.append(f"dialog {dialog.message}"), dialog.dismiss())
        )
        self.page.on("request", lambda request: self.requests.append(request.url))
        self.page.goto(path.as_uri())
        self.page.wait_for_selector("html[data-ready=yes]")

    def draw_all(self) -> None:
        """Draws every picture, whether it is in view or not."""
        self.page.evaluate("holders.forEach(drawPicture)")


@pytest.fixture
def open_page(chromium: Any) -> Iterator[Any]:
    opened: list[Watched] = []

    def open_one(session: Session, **options: Any) -> Watched:
        opened.append(Watched(chromium, session.run_folder / "report.html", **options))
        return opened[-1]

    yield open_one
    for one in opened:
        one.context.close()
