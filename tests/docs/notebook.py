"""Executes a notebook without a notebook server: its code cells in order, in one namespace.

    python tests/docs/notebook.py            says whether the example notebook differs from what it prints
    python tests/docs/notebook.py --write    puts the present output in

Outputs are texts only, which is all the example has.
"""

from __future__ import annotations

import json
import sys
from pathlib import Path
from typing import Any

sys.path.insert(0, str(Path(__file__).parents[1]))

from docs.transcripts import ROOT, captured, in_folder, run_python

NOTEBOOK = ROOT / "examples" / "ember.ipynb"


def executed(path: Path, folder: Path) -> dict[str, Any]:
    """The notebook with its present outputs; it runs in `folder`."""
    notebook = json.loads(path.read_text(encoding="utf-8"))
    namespace: dict[str, Any] = {"__name__": "notebook"}
    count = 0
    with in_folder(folder):
        for cell in notebook["cells"]:
            if cell["cell_type"] != "code":
                continue
            count += 1
            printed = captured(lambda cell=cell: run_python("".join(cell["source"]), namespace))
            cell["execution_count"] = count
            text = printed.splitlines(keepends=True)
            cell["outputs"] = [{"name": "stdout", "output_type": "stream", "text": text}] if text else []
    return notebook


def text_of(notebook: dict[str, Any]) -> str:
    return json.dumps(notebook, indent=1, ensure_ascii=False) + "\n"


def main(arguments: list[str]) -> int:
    import tempfile

    from sessions import demo_copy

    with tempfile.TemporaryDirectory() as name:
        demo_copy(Path(name))
        (Path(name) / "examples").mkdir()
        after = text_of(executed(NOTEBOOK, Path(name).resolve() / "examples"))
    same = after == NOTEBOOK.read_text(encoding="utf-8")
    if "--write" in arguments and not same:
        NOTEBOOK.write_text(after, encoding="utf-8", newline="\n")
    return 0 if same or "--write" in arguments else 1


if __name__ == "__main__":
    raise SystemExit(main(sys.argv[1:]))
