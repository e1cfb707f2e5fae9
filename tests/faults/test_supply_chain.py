"""What the package may do: no network, no shell, no evaluation of texts, no pickles, no logic in assertions."""

from __future__ import annotations

import ast
import re
import socket
from pathlib import Path

import pytest

from faults.commands import tieline
from faults.small import write_session

ROOT = Path(__file__).resolve().parents[2]
PACKAGE = ROOT / "pipeline" / "tieline"
MODULES = sorted(PACKAGE.rglob("*.py"))

NETWORK = {
    "urllib.request", "http", "http.client", "http.server", "socketserver", "ssl", "ftplib", "smtplib", "poplib",
    "imaplib", "telnetlib", "xmlrpc", "asyncio", "requests", "httpx", "aiohttp", "urllib3",
}  # fmt: skip
CODE = {
    "pickle",
    "cPickle",
    "dill",
    "cloudpickle",
    "joblib",
    "marshal",
    "shelve",
    "code",
    "codeop",
    "pty",
    "commands",
}
PROCESSES = {"subprocess", "multiprocessing", "concurrent.futures"}
# Workers of `archive` run this program by its own path, without a shell; nobody else starts a process.
MAY_START_PROCESSES = {"archive"}
# Asks the C library of the running process, by no name or path, to give memory back.
MAY_CALL_C = {"memory.py"}
MAY_ASK_THE_HOST_NAME = {"lock.py", "archive"}
CALLS = {"eval", "exec", "compile", "__import__", "breakpoint", "input"}
METHODS = {
    ("os", "system"), ("os", "popen"), ("os", "execv"), ("os", "execvp"), ("os", "spawnv"), ("os", "startfile"),
    ("numpy", "load"), ("np", "load"), ("pd", "read_pickle"), ("pa", "deserialize"), ("pd", "eval"), ("ctypes", "CDLL"),
}  # fmt: skip


def own(path: Path) -> str:
    return path.relative_to(PACKAGE).parts[0]


def imported(tree: ast.AST) -> set[str]:
    found = set()
    for node in ast.walk(tree):
        if isinstance(node, ast.Import):
            found |= {alias.name for alias in node.names}
        elif isinstance(node, ast.ImportFrom) and node.module and not node.level:
            found |= {node.module, *(f"{node.module}.{alias.name}" for alias in node.names)}
    return found


@pytest.mark.parametrize("path", MODULES, ids=lambda path: str(path.relative_to(PACKAGE)))
def test_source_does_nothing_it_need_not(path: Path):
    tree = ast.parse(path.read_text(encoding="utf-8"))
    names = imported(tree)
    assert not names & (NETWORK | CODE)
    if own(path) not in MAY_START_PROCESSES:
        assert not names & PROCESSES or names & {"concurrent.futures.ThreadPoolExecutor"}
        assert not names & {"subprocess", "multiprocessing"}
    if own(path) not in MAY_ASK_THE_HOST_NAME:
        assert "socket" not in names
    methods = METHODS - {("ctypes", "CDLL")} if own(path) in MAY_CALL_C else METHODS
    for node in ast.walk(tree):
        if not isinstance(node, ast.Call):
            continue
        function = node.func
        if isinstance(function, ast.Name):
            assert function.id not in CALLS, f"line {node.lineno}: {function.id}"
        if isinstance(function, ast.Attribute) and isinstance(function.value, ast.Name):
            assert (function.value.id, function.attr) not in methods, f"line {node.lineno}"
        for keyword in node.keywords:
            shell = keyword.arg == "shell" and not (
                isinstance(keyword.value, ast.Constant) and not keyword.value.value
            )
            pickled = keyword.arg == "allow_pickle"
            assert not shell, f"line {node.lineno}: a shell"
            assert not pickled, f"line {node.lineno}: pickles"


def test_no_library_is_loaded_by_name():
    tree = ast.parse((PACKAGE / "memory.py").read_text(encoding="utf-8"))
    loaded = [
        node
        for node in ast.walk(tree)
        if isinstance(node, ast.Call) and ast.unparse(node.func) == "ctypes.CDLL"
    ]
    assert [ast.unparse(node) for node in loaded] == ["ctypes.CDLL(None)"]


def test_assertions_carry_no_logic():
    """`python -O` drops them: they may only tell a type checker what holds, and call nothing that changes anything."""
    for path in MODULES:
        for node in ast.walk(ast.parse(path.read_text(encoding="utf-8"))):
            if isinstance(node, ast.Assert):
                calls = [call for call in ast.walk(node.test) if isinstance(call, ast.Call)]
                names = {call.func.id for call in calls if isinstance(call.func, ast.Name)}
                place = f"{path.relative_to(PACKAGE)}:{node.lineno}"
                assert len(calls) == len(names), place
                assert names <= {"isinstance", "len", "all", "any"}, place


def test_no_address_is_built_in_but_names_of_standards():
    """Addresses in the sources are identifiers of namespaces and licences, or links for a reader: none is opened."""
    pattern = re.compile(r"https?://[^\s\"'<>)]+")
    opened = re.compile(r"urlopen|urlretrieve|\.connect\(|getaddrinfo|create_connection")
    for path in MODULES:
        text = path.read_text(encoding="utf-8")
        assert not opened.search(text), path.name
        for address in pattern.findall(text):
            assert "@" not in address, address


def test_every_command_works_without_a_network(tmp_path: Path, monkeypatch: pytest.MonkeyPatch):
    def refuse(*_: object, **__: object) -> None:
        raise AssertionError("the network was used")

    for name in ("connect", "connect_ex", "bind", "sendto", "listen"):
        monkeypatch.setattr(socket.socket, name, refuse)
    for name in ("getaddrinfo", "gethostbyname", "gethostbyaddr", "create_connection"):
        monkeypatch.setattr(socket, name, refuse)
    session = write_session(tmp_path)
    config, folder = str(session.path), str(session.run_folder)
    for arguments in (
        ("check", config),
        ("run", config),
        ("status", config),
        ("report", config, "--figures", str(tmp_path / "figures")),
        ("trace", config, "X-1", "olivine/glass", "Mg"),
        ("audit", folder),
        ("compare", folder, folder),
        ("start", str(tmp_path / "probe.csv"), "--to", str(tmp_path / "new.toml")),
    ):
        done = tieline(*arguments)
        assert done.status == 0, (arguments, done.stderr)


def test_the_page_fetches_nothing(tmp_path: Path):
    session = write_session(tmp_path)
    assert tieline("run", str(session.path), "--quiet", "--report").status == 0
    page = (session.run_folder / "report.html").read_text(encoding="utf-8")
    assert not re.findall(
        r"<(?:script|img|iframe|link|source|object|embed)[^>]*(?:src|href)\s*=\s*[\"']?(?:https?:|//)", page
    )
    assert not re.findall(
        r"@import|url\(\s*[\"']?(?:https?:|//)|\bfetch\(|XMLHttpRequest|WebSocket|sendBeacon", page
    )


def test_requirements_are_pinned_by_hash_and_name_no_address():
    for name in ("core.txt", "dev.txt"):
        text = (ROOT / "requirements" / name).read_text(encoding="utf-8")
        pins = re.findall(r"^([A-Za-z0-9_.\-\[\]]+)==[^\s;\\]+", text, re.MULTILINE)
        assert len(pins) > 10
        blocks = re.split(r"\n(?=[A-Za-z0-9])", text)
        assert all("--hash=sha256:" in block for block in blocks if "==" in block)
        assert "http" not in text
