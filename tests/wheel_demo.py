"""Builds a wheel, installs it into an empty environment and runs the demo there: finds files missing from it."""

from __future__ import annotations

import json
import subprocess
import sys
import tempfile
import venv
from pathlib import Path

ROOT = Path(__file__).resolve().parents[1]


def call(*command: str | Path, cwd: Path) -> str:
    """The command's standard output; its failure is ours."""
    return subprocess.run(
        [str(part) for part in command], cwd=cwd, check=True, stdout=subprocess.PIPE, text=True
    ).stdout


def main() -> None:
    with tempfile.TemporaryDirectory() as name:
        folder = Path(name)
        call(
            sys.executable,
            "-m",
            "pip",
            "wheel",
            "-q",
            "--no-deps",
            "--no-build-isolation",
            "-w",
            folder,
            ROOT,
            cwd=folder,
        )
        venv.create(folder / "env", with_pip=True)
        python = folder / "env" / ("Scripts" if sys.platform == "win32" else "bin") / "python"
        pip = (python, "-m", "pip", "--disable-pip-version-check", "install", "-q")
        call(*pip, "--require-hashes", "-r", ROOT / "requirements" / "core.txt", cwd=folder)
        call(*pip, "--no-deps", next(folder.glob("tieline-*.whl")), cwd=folder)
        result = json.loads(call(python, "-m", "tieline", "demo", folder / "session", "--json", cwd=folder))
        count = len(result["partition_coefficients"])
        if count == 0:
            raise SystemExit("the demo from the wheel gave no partition coefficients")
        print(f"the demo from a built wheel gave {count} partition coefficients")


if __name__ == "__main__":
    main()
