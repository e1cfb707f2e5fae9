"""Small tables for the tests of `ingest`."""

from __future__ import annotations

from typing import Any

import pytest

from tieline.errors import InputError, Problem
from tieline.ingest import ingest
from tieline.reading.input_file import InputFile
from tieline.results import StageResult
from tieline.settings.ingest import IngestSettings

COLUMNS = {"spot": "Point", "experiment": "Run", "phase": "Phase"}


def run(text: str | dict[str, str], table: dict[str, Any] | None = None, **settings: Any) -> StageResult:
    """`ingest` of one table text, or of several by path with the same table settings; the ledger must add up."""
    texts = {"t.csv": text} if isinstance(text, str) else text
    own = {"columns": COLUMNS, "unit": "wt%", **(table or {})}
    own = {key: value for key, value in own.items() if value is not None}
    config = IngestSettings.model_validate({"tables": [{"path": path, **own} for path in texts], **settings})
    files = {path: InputFile.from_bytes(path, content.encode()) for path, content in texts.items()}
    result = ingest(files, settings=config)
    result.ledger.check("ingest")
    aside = result.tables["ingest.set_aside"].column("cells").to_pylist()
    assert sum(aside) == result.ledger.outcomes["set aside"]
    return result


def problems(
    text: str | dict[str, str], table: dict[str, Any] | None = None, **settings: Any
) -> list[Problem]:
    """The problems of a table that must be refused."""
    with pytest.raises(InputError) as caught:
        run(text, table, **settings)
    return list(caught.value.problems)


def lines(result: StageResult, *columns: str) -> list[tuple[Any, ...]]:
    """Rows of `ingest` with the named columns."""
    chosen = [result.tables["ingest"].column(name).to_pylist() for name in columns]
    return list(zip(*chosen, strict=True))


def remarks(result: StageResult) -> str:
    return "\n".join(map(str, result.remarks))
