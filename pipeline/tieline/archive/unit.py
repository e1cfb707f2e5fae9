"""What a worker does with one session: bring it up to date, put its results into the dataset, tell what it holds.

Results lie in the session's own run folder, as a single run leaves them; the dataset gets a copy of the file.
"""

from __future__ import annotations

from dataclasses import dataclass
from pathlib import Path
from typing import TYPE_CHECKING, Any
from urllib.parse import quote

from tieline.archive.find import Unit

if TYPE_CHECKING:
    from tieline.plan import Verdict

CURRENT, REDUCED, FAILED = "current", "reduced", "failed"
RESULTS = "classify"


@dataclass(frozen=True)
class Outcome:
    """What became of one unit. `row` is its line of the table of sessions; `message` says why it failed."""

    unit: Unit
    state: str
    row: dict[str, Any]
    message: str = ""


def partition_folder(dataset: Path, unit: Unit) -> Path:
    """`lab=.../session=...` below the dataset, with names that every reader of such datasets understands."""
    laboratory, session = (quote(name, safe=" ") for name in (unit.laboratory, unit.session))
    return dataset / f"lab={laboratory}" / f"session={session}"


def reduce_unit(unit: Unit, dataset: Path) -> Outcome:
    """Reduces a session unless it is current, and copies its results. Nothing that goes wrong is raised."""
    from tieline.errors import InputError

    if unit.problem:
        return failed(unit, unit.problem)
    try:
        return _reduce(unit, dataset)
    except InputError as error:
        return failed(unit, str(error))
    except Exception as error:  # one session's defect must not stop the others
        return failed(unit, f"{type(error).__name__}: {error}")


def failed(unit: Unit, message: str) -> Outcome:
    """The outcome of a unit that could not be reduced."""
    row = {"laboratory": unit.laboratory, "session": unit.session, "configuration": unit.name}
    return Outcome(unit, FAILED, {**row, "problem": message}, message)


def _reduce(unit: Unit, dataset: Path) -> Outcome:
    from tieline import runner
    from tieline.auditing.seal import is_sealed
    from tieline.configuration import load
    from tieline.plan import table_path
    from tieline.storage import write_bytes

    session = load(unit.path)
    state = CURRENT
    stale = [verdict for verdict in runner.status(session) if verdict.state != "current"]
    if stale and is_sealed(session.run_folder):
        return failed(unit, _sealed(stale[0]))
    if stale:
        runner.run(session)
        state = REDUCED
    data = table_path(session.run_folder, RESULTS).read_bytes()
    target = partition_folder(dataset, unit) / f"{RESULTS}.parquet"
    if not target.is_file() or target.read_bytes() != data:
        target.parent.mkdir(parents=True, exist_ok=True)
        write_bytes(target, data)
        state = REDUCED
    return Outcome(unit, state, _row(unit, session.run_folder))


def _sealed(verdict: Verdict) -> str:
    why = f": {'; '.join(verdict.reasons)}" if verdict.reasons else ""
    return (
        f"its run folder is sealed, and {verdict.stage} is {verdict.state}{why}. The sealed results stay as they are; "
        "give the configuration another session name to reduce it anew."
    )


def _row(unit: Unit, run_folder: Path) -> dict[str, Any]:
    """A session's line of the table of sessions, from its stage files alone: the same whenever it was reduced."""
    import pyarrow.parquet as pq

    from tieline.plan import read_records, table_path
    from tieline.stages import STAGES

    records = [read_records(run_folder, stage)[stage.outputs[0]] or {} for stage in STAGES]
    remarks = [
        f"{remark['place']}: {remark['message']}" if remark["place"] else remark["message"]
        for record in records
        for remark in record.get("remarks", ())
    ]

    def column(table: str, name: str) -> list[Any]:
        return pq.read_table(table_path(run_folder, table), columns=[name]).column(0).to_pylist()  # type: ignore[no-any-return]

    kinds = column(RESULTS, "kind")
    spots = pq.read_metadata(table_path(run_folder, "ingest.spots")).num_rows
    materials = sorted({str(name) for name in column("calibrate.materials", "material")})
    experiments = set(column(RESULTS, "experiment"))
    return {
        "laboratory": unit.laboratory,
        "session": unit.session,
        "configuration": unit.name,
        "problem": None,
        "n_spots": spots,
        "n_experiments": len(experiments),
        "n_D": len(kinds),
        "n_values": kinds.count("value"),
        "n_limits": kinds.count("upper-limit") + kinds.count("lower-limit"),
        "n_undetermined": kinds.count("undetermined"),
        "materials": ", ".join(materials),
        "n_remarks": len(remarks),
        "remarks": "\n".join(remarks),
        "version": records[0].get("version"),
        "fingerprint": records[-1].get("fingerprint"),
    }
