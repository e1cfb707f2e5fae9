"""The Python interface: reduce a session, open what a run wrote, try one stage with other settings.

- `reduce(config, *, overrides=None, out=None, fresh=False, report=False) -> Run`
- `open_run(folder) -> Run`
- `Run.table(name)`, `Run.tables`, `Run.settings`, `Run.recompute(stage, settings)`
"""

from __future__ import annotations

import json
import tomllib
from collections.abc import Mapping
from dataclasses import dataclass
from pathlib import Path
from typing import TYPE_CHECKING, Any

from tieline.errors import InputError, Problem, nearest

if TYPE_CHECKING:
    import pandas as pd
    import pyarrow as pa

    from tieline.settings import SessionSettings


@dataclass(frozen=True)
class Run:
    """A run folder. Nothing here writes to it."""

    folder: Path

    @property
    def session(self) -> str:
        """The name of the session."""
        return str(self._manifest()["session"])

    @property
    def tables(self) -> tuple[str, ...]:
        """Names of the stage tables that are there, in the order of the chain."""
        from tieline.columns import TABLES

        return tuple(name for name in TABLES if self._path(name).exists())

    @property
    def settings(self) -> dict[str, Any]:
        """The settings in effect, defaults included, as nested dictionaries."""
        return tomllib.loads((self.folder / "effective.toml").read_text(encoding="utf-8"))

    def table(self, name: str) -> pd.DataFrame:
        """A stage table as a data frame; text labels are categories, a missing number is NaN.

        `attrs["units"]` and `attrs["meanings"]` map each column to its unit ("" for texts, "1" for pure numbers)
        and to what it means; `attrs["row"]` says what one row is. Raises InputError where there is no such table.
        """
        return _frame(name, self._table(name))

    def recompute(self, stage: str, settings: Mapping[str, object] | None = None) -> dict[str, pd.DataFrame]:
        """One stage computed anew from the stage tables before it, in memory; returns its tables by name.

        `settings` replaces keys of the stage's own section: `run.recompute("classify", {"highly_incompatible_below":
        0.1})`, `run.recompute("screen", {"total.sigmas": 3})`. Raises InputError for an unknown stage or key, a
        missing table, or an input file that is not where the run read it.
        """
        from tieline.stages import NAMES, STAGES

        if stage not in NAMES:
            raise InputError(Problem(f'no stage is called "{stage}".', remedy=_known(stage, NAMES)))
        one = STAGES[NAMES.index(stage)]
        effective = self._changed(stage, settings or {})
        inputs = {name.replace(".", "_"): self._table(name) for name in one.inputs}
        files = self._files(one.files(effective)) if one.reads_files else {}
        extra = one.file_arguments(effective, files)
        result = one.function()(**inputs, **extra, settings=one.settings(effective))
        return {name: _frame(name, table) for name, table in result.tables.items()}

    def _changed(self, stage: str, changes: Mapping[str, object]) -> SessionSettings:
        from tieline.configuration import validate

        data = self.settings
        for key, value in changes.items():
            *parents, last = (stage, *key.split("."))
            section = data
            for part in parents:
                section = section.setdefault(part, {})
            section[last] = value
        settings, problems = validate(data, "settings")
        if problems:
            raise InputError(problems)
        return settings

    def _files(self, paths: tuple[str, ...]) -> dict[str, Any]:
        from tieline.reading.input_file import InputFile

        base = self.folder / Path(str(self._manifest()["configuration"])).parent
        files, problems = {}, []
        for path in paths:
            try:
                files[path] = InputFile.from_bytes(path, (base / path).read_bytes())
            except OSError as error:
                remedy = f"The run read it at {base / path}."
                problems.append(Problem(f"cannot be read: {error.strerror}.", path, remedy=remedy))
        if problems:
            raise InputError(problems)
        return files

    def _table(self, name: str) -> pa.Table:
        from tieline.storage import read_table

        if name not in self.tables:
            message = f'there is no table "{name}".'
            raise InputError(Problem(message, str(self.folder), remedy=_known(name, self.tables)))
        return read_table(self._path(name), name)

    def _path(self, name: str) -> Path:
        return self.folder / f"{name}.parquet"

    def _manifest(self) -> dict[str, Any]:
        from tieline.manifest import read_manifest

        return read_manifest(self.folder)


def open_run(folder: str | Path) -> Run:
    """What a run wrote, to be read. Raises InputError where the folder is no run folder."""
    path = Path(folder)
    if not (path / "run.json").exists():
        from tieline.run_folders import run_folder_problem

        problem = run_folder_problem(path)
        if problem is not None:
            raise InputError(problem)
        remedy = "Name a folder that a run wrote, such as <out>/<session>."
        raise InputError(Problem("holds no run.json.", str(path), remedy=remedy))
    return Run(path)


def reduce(
    config: str | Path,
    *,
    overrides: Mapping[str, object] | None = None,
    out: str | Path | None = None,
    fresh: bool = False,
    report: bool = False,
) -> Run:
    """Brings the run folder of a configuration up to date, as `tieline run` does.

    `overrides` replaces settings for this run: `{"screen.total.sigmas": 3}`. `out` is the folder of run folders,
    instead of the configured one; `fresh` recomputes every stage; `report` writes the report too, where it is not
    current. Raises InputError with every problem found, and then has changed nothing.
    """
    from tieline import configuration, runner
    from tieline.crate import write_crate
    from tieline.report.write import refresh_report

    texts = [f"{key}={_toml(value)}" for key, value in (overrides or {}).items()]
    session = configuration.load(Path(config), overrides=texts, out=None if out is None else Path(out))
    runner.run(session, fresh=fresh)
    if report or session.settings.report.after_run:
        refresh_report(session)
    write_crate(session)
    return Run(session.run_folder)


def _frame(name: str, table: pa.Table) -> pd.DataFrame:
    from tieline.columns import TABLES

    frame = table.to_pandas()
    spec = TABLES[name]
    frame.attrs = {
        "table": name,
        "row": spec.row,
        "units": {column.name: column.unit for column in spec.columns},
        "meanings": {column.name: column.meaning for column in spec.columns},
    }
    return frame


def _toml(value: object) -> str:
    """A value as TOML on one line; JSON's texts and numbers are TOML's."""
    if isinstance(value, Mapping):
        return f"{{ {', '.join(f'{json.dumps(str(key))} = {_toml(item)}' for key, item in value.items())} }}"
    if isinstance(value, list | tuple):
        return f"[{', '.join(_toml(item) for item in value)}]"
    return json.dumps(value, ensure_ascii=False)


def _known(name: str, known: tuple[str, ...]) -> str:
    return nearest(name, known) or f"There are: {', '.join(known)}."
