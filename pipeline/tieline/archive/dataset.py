"""The table of sessions beside the dataset's parts, and parts that no session of the archive accounts for."""

from __future__ import annotations

from collections.abc import Iterable, Sequence
from pathlib import Path

from tieline.archive.unit import FAILED, RESULTS, Outcome, partition_folder
from tieline.tables import Column, TableSpec

# The underscore keeps readers of the dataset from taking it for a part.
SESSIONS_FILE = "_sessions.parquet"

SESSIONS = TableSpec(
    "sessions",
    "session",
    (
        Column("laboratory", "label", "whose measurements: `lab` of the dataset"),
        Column("session", "label", "name of the session: `session` of the dataset"),
        Column("configuration", "text", "path of the configuration below the archive's root"),
        Column("problem", "text", "why the session could not be reduced; null where it was", nullable=True),
        Column("n_spots", "count", "spots, reference materials included", "1", True),
        Column("n_experiments", "count", "experiments with a D", "1", True),
        Column("n_D", "count", "partition coefficients", "1", True),
        Column("n_values", "count", "those with a value and an interval", "1", True),
        Column("n_limits", "count", "upper and lower limits", "1", True),
        Column("n_undetermined", "count", "those without an interval", "1", True),
        Column("materials", "text", "reference materials measured", nullable=True),
        Column("n_remarks", "count", "remarks of all stages", "1", True),
        Column("remarks", "text", "the remarks, one per line", nullable=True),
        Column("version", "label", "program version that wrote the results", nullable=True),
        Column("fingerprint", "text", "fingerprint of the last stage", nullable=True),
    ),
)


def write_sessions(dataset: Path, outcomes: Iterable[Outcome]) -> Path:
    """Writes the table of sessions, one row per unit in their order; returns its path."""
    import pyarrow.parquet as pq

    from tieline.storage import write_atomically
    from tieline.tables import build

    rows = [outcome.row for outcome in outcomes]
    table = build(SESSIONS, {name: [row.get(name) for row in rows] for name in SESSIONS.names()})
    path = dataset / SESSIONS_FILE
    path.parent.mkdir(parents=True, exist_ok=True)
    write_atomically(path, lambda stream: pq.write_table(table, stream, compression="zstd"))
    return path


def kept_parts(dataset: Path, outcomes: Sequence[Outcome]) -> list[str]:
    """Parts of the dataset that hold earlier results of a session that could not be reduced now."""
    made, failed = (
        {
            partition_folder(dataset, outcome.unit)
            for outcome in outcomes
            if (outcome.state == FAILED) is wanted
        }
        for wanted in (False, True)
    )
    found = (folder for folder in failed - made if (folder / f"{RESULTS}.parquet").is_file())
    return sorted(folder.relative_to(dataset).as_posix() for folder in found)


def left_over_parts(dataset: Path, outcomes: Iterable[Outcome]) -> list[str]:
    """Parts of the dataset that belong to no session found: their configuration was renamed or is gone."""
    known = {partition_folder(dataset, outcome.unit) for outcome in outcomes}
    found = (path.parent for path in dataset.glob(f"lab=*/session=*/{RESULTS}.parquet"))
    return sorted(folder.relative_to(dataset).as_posix() for folder in found if folder not in known)
