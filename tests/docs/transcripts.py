"""Executes the examples of the documentation, and on request writes what they print into the pages.

    python tests/docs/transcripts.py            says which pages differ from what their examples print
    python tests/docs/transcripts.py --write    puts the present output in

What is executed, in the order of the page, in one folder of its own per page:

- ```console: lines that start with `$ ` are commands; what follows is what they print, on both streams. A last
  line `...` says that more is printed.
- ```python and ```sql: code; a ```text block right after it is what it prints.
- Any other block after `<!-- file: PATH -->` or `<!-- append: PATH -->`: written to that file first.

`<!-- session: demo -->` anywhere in a page starts it with the demo's configuration and tables; `<!-- exit: 2 -->` before
a block says that its last command ends with that status.
"""

from __future__ import annotations

import ast
import contextlib
import io
import os
import re
import shlex
import sys
import tempfile
from collections.abc import Callable, Iterator
from pathlib import Path
from typing import Any

ROOT = Path(__file__).resolve().parents[2]
sys.path[:0] = [str(ROOT / "pipeline"), str(ROOT / "tests")]

WIDTH = "80"  # columns
FENCE = re.compile(r"^```(\w+)\n(.*?)^```$", re.MULTILINE | re.DOTALL)
COMMENT = re.compile(r"<!-- (file|append|exit): (\S+) -->\s*$")
# Pages that are made from code hold no examples to execute.
SKIPPED = ("reference/", "measured/", "performance.md")
DEMO = ("make demo", "tieline run configs/ember.toml --report")


def pages() -> list[Path]:
    docs = ROOT / "docs"
    found = [
        path
        for path in sorted(docs.rglob("*.md"))
        if not path.relative_to(docs).as_posix().startswith(SKIPPED)
    ]
    return [ROOT / "README.md", *found]


def executed(path: Path) -> str:
    """The text of a page with the output that its examples print now."""
    text = path.read_text(encoding="utf-8")
    with tempfile.TemporaryDirectory() as name:
        folder = Path(name).resolve() / "work"
        folder.mkdir()
        with in_folder(folder):
            if "<!-- session: demo -->" in text:
                from sessions import demo_copy

                demo_copy(Path())
            return _with_outputs(text, folder)


@contextlib.contextmanager
def in_folder(folder: Path) -> Iterator[None]:
    """A folder and an environment that make output the same everywhere."""
    before, environment = Path.cwd(), dict(os.environ)
    os.chdir(folder)
    os.environ |= {"COLUMNS": WIDTH, "NO_COLOR": "1", "TERM": "dumb"}
    try:
        yield
    finally:
        os.chdir(before)
        os.environ.clear()
        os.environ.update(environment)


def _with_outputs(text: str, home: Path) -> str:
    namespace: dict[str, Any] = {"__name__": "example"}
    pieces, end, printed = [], 0, None
    for block in FENCE.finditer(text):
        between = text[end : block.start()]
        kind, body = block.group(1), block.group(2)
        directive = COMMENT.search(between)
        if kind == "text" and printed is not None and not between.strip():
            body = _shown(body, printed)
        printed = None
        if kind == "console":
            status = int(directive.group(2)) if directive and directive.group(1) == "exit" else 0
            body = _console(body, status, home)
        elif kind == "python":
            printed = captured(lambda body=body: run_python(body, namespace))
        elif kind == "sql":
            printed = captured(lambda body=body: _run_sql(body))
        elif directive and directive.group(1) in ("file", "append"):
            target = Path(directive.group(2))
            target.parent.mkdir(parents=True, exist_ok=True)
            with target.open(
                "a" if directive.group(1) == "append" else "w", encoding="utf-8", newline="\n"
            ) as stream:
                stream.write(body)
        pieces += [between, f"```{kind}\n{body}```"]
        end = block.end()
    return "".join([*pieces, text[end:]])


def _console(body: str, status: int, home: Path) -> str:
    """A console block with its commands executed; `status` is what the last of them ends with."""
    parts = re.split(r"^\$ (.*)\n", body, flags=re.MULTILINE)[1:]
    lines = []
    for place in range(0, len(parts), 2):
        command, expected = parts[place], parts[place + 1]
        wanted = status if place == len(parts) - 2 else 0
        output = captured(lambda command=command, wanted=wanted: _run_command(command, wanted))
        lines += [f"$ {command}\n", _shown(expected, output.replace(f"{home}{os.sep}", ""))]
    return "".join(lines)


def _shown(expected: str, output: str) -> str:
    """The output, cut where the page cut it; `... 12` as a last line asks for the first twelve lines."""
    lines = [line.rstrip() for line in output.splitlines()]
    before = expected.splitlines()
    cut = re.fullmatch(r"\.\.\.(?: (\d+))?", before[-1].strip()) if before else None
    if cut:
        wanted = int(cut.group(1) or len(before) - 1)
        lines = [*lines[:wanted], *(["..."] if len(lines) > wanted else [])]
    return "".join(f"{line}\n" for line in lines)


def captured(call: Callable[[], None]) -> str:
    stream = io.StringIO()
    with contextlib.redirect_stdout(stream), contextlib.redirect_stderr(stream):
        call()
    return stream.getvalue()


def _run_command(command: str, status: int) -> None:
    if command == DEMO[0]:
        recipe = (ROOT / "Makefile").read_text(encoding="utf-8")
        assert f"$(BIN)/{DEMO[1]}" in recipe, "make demo runs something else than the page shows"
        command = DEMO[1]
    name, *arguments = shlex.split(command)
    if name == "cd":
        os.chdir(arguments[0])
    elif name == "ls":
        print(
            "\n".join(
                sorted(path.name for path in Path(*arguments).iterdir() if not path.name.startswith("."))
            )
        )
    elif name == "cat":
        print(Path(arguments[0]).read_text(encoding="utf-8"), end="")
    elif name == "head":
        lines = Path(arguments[-1]).read_text(encoding="utf-8").splitlines()
        print("\n".join(lines[: int(arguments[1])]))
    else:
        assert name == "tieline", f"examples do not run {name}"
        found = _tieline(arguments)
        assert found == status, f"`{command}` ended with status {found}, not {status}"


def _tieline(arguments: list[str]) -> int:
    from tieline.cli import main

    before = sys.argv
    sys.argv = ["tieline", *arguments]
    try:
        main()
    except SystemExit as end:
        return int(end.code or 0)
    finally:
        sys.argv = before
    return 0


def run_python(code: str, namespace: dict[str, Any]) -> None:
    """Statements are executed; a last expression is printed as an interactive session does."""
    tree = ast.parse(code)
    last = tree.body.pop() if tree.body and isinstance(tree.body[-1], ast.Expr) else None
    exec(compile(tree, "<example>", "exec"), namespace)
    if last is not None:
        value = eval(compile(ast.Expression(last.value), "<example>", "eval"), namespace)
        if value is not None:
            print(value)


def _run_sql(code: str) -> None:
    import duckdb

    print(duckdb.sql(code).df().to_string(index=False))


def main(arguments: list[str]) -> int:
    write = "--write" in arguments
    wanted = [argument for argument in arguments if not argument.startswith("--")]
    different = 0
    for path in pages():
        if wanted and not any(word in path.as_posix() for word in wanted):
            continue
        before, after = path.read_text(encoding="utf-8"), executed(path)
        if before != after:
            different += 1
            print(f"{path.relative_to(ROOT)}: {'renewed' if write else 'differs'}")
            if write:
                path.write_text(after, encoding="utf-8", newline="\n")
    return 0 if write else min(different, 1)


if __name__ == "__main__":
    raise SystemExit(main(sys.argv[1:]))
