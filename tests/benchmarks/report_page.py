"""How large the page of 1,000 spots x 40 elements is, and how soon headless Chromium has it open.

    PYTHONPATH=pipeline:tests python tests/benchmarks/report_page.py

Invented spots: 20 experiments, olivine and glass, 25 spots of each. Prints seconds and megabytes.
"""

from __future__ import annotations

import shutil
import tempfile
import time
from pathlib import Path

import numpy as np

from sessions import small_session
from tieline import runner
from tieline.chemistry.elements import SYMBOLS
from tieline.chemistry.radii import known_radii
from tieline.report.write import write_report

N_EXPERIMENTS, N_SPOTS, N_ELEMENTS = 20, 25, 40


def make_session(folder: Path):
    random = np.random.default_rng(8)
    elements = sorted({element for element, _, _ in known_radii()} & SYMBOLS)[:N_ELEMENTS]
    header = ["Point", "Run", "Phase", *(name for one in elements for name in (f"{one} ppm", f"{one} 1s"))]
    level = 10 ** random.uniform(0, 3, len(elements))
    ratio = 10 ** random.uniform(-3, 1, len(elements))
    rows = []
    for experiment in range(N_EXPERIMENTS):
        for phase, mean in (("glass", level), ("olivine", level * ratio)):
            for spot in range(N_SPOTS):
                sigma = 0.02 * mean + 0.001
                value = mean + sigma * random.standard_normal(len(mean))
                cells = [f"{cell:.6g}" for pair in zip(value, sigma, strict=True) for cell in pair]
                rows.append([f"E{experiment}-{phase[:2]}-{spot}", f"E{experiment}", phase, *cells])
    body = """
[[ingest.tables]]
path = "spots.csv"
technique = "laser"
batch = "laser-1"
unit = "ppm"
columns = { spot = "Point", experiment = "Run", phase = "Phase" }
sigma = { pattern = "{analyte} 1s", level = 1, relative = false }
"""
    return small_session(folder, {"spots.csv": (header, rows)}, body)


def main() -> None:
    from playwright.sync_api import sync_playwright

    with tempfile.TemporaryDirectory() as name:
        session = make_session(Path(name))
        runner.run(session)
        start = time.perf_counter()
        write_report(session)
        print(f"report written in {time.perf_counter() - start:.1f} s")
        page_path = session.run_folder / "report.html"
        print(f"page {page_path.stat().st_size / 1e6:.2f} MB")
        with sync_playwright() as driver:
            browser = driver.chromium.launch(
                executable_path=shutil.which("chromium"),
                args=["--no-sandbox", "--disable-gpu", "--disable-quic"],
            )
            times = []
            for _ in range(5):
                page = browser.new_page()
                start = time.perf_counter()
                page.goto(page_path.as_uri())
                page.wait_for_selector("html[data-ready=yes]")
                times.append(time.perf_counter() - start)
                start = time.perf_counter()
                page.evaluate("holders.forEach(drawPicture)")
                drawn = time.perf_counter() - start
                page.close()
            print(
                f"open, tables and first pictures shown: median {np.median(times):.2f} s, longest {max(times):.2f} s"
            )
            print(f"every picture drawn: {drawn:.2f} s")
            browser.close()


if __name__ == "__main__":
    main()
