"""The demo session in a folder of its own, and a small session written from rows, for tests that run the chain."""

from __future__ import annotations

import shutil
from collections.abc import Mapping, Sequence
from pathlib import Path

import pandas as pd

from tieline.configuration import Session, load
from tieline.plan import table_path
from tieline.storage import read_table

ROOT = Path(__file__).resolve().parents[1]


def demo_copy(folder: Path) -> Path:
    """The demo's configuration and tables below `folder`; its run folder will be `folder/example_runs/ember`."""
    shutil.copytree(ROOT / "configs", folder / "configs")
    return folder / "configs" / "ember.toml"


def write_csv(path: Path, header: Sequence[str], rows: Sequence[Sequence[object]]) -> None:
    lines = [",".join(header), *(",".join("" if cell is None else str(cell) for cell in row) for row in rows)]
    path.write_text("\n".join(lines) + "\n", encoding="utf-8")


def result(session: Session, table: str) -> pd.DataFrame:
    """A stage table as a data frame of plain columns."""
    frame = read_table(table_path(session.run_folder, table), table).to_pandas()
    return frame.astype({name: object for name, kind in frame.dtypes.items() if str(kind) == "category"})


def small_session(
    folder: Path, tables: Mapping[str, tuple[Sequence[str], Sequence[Sequence[object]]]], body: str
) -> Session:
    """Writes CSV tables and a configuration with the given [[ingest.tables]] and further sections, and loads it."""
    folder.mkdir(parents=True, exist_ok=True)
    for name, (header, rows) in tables.items():
        write_csv(folder / name, header, rows)
    path = folder / "session.toml"
    path.write_text(f'session = "small"\nout = "runs"\n{body}', encoding="utf-8")
    return load(path)
