"""The table of experimental conditions as one row per experiment and condition."""

from __future__ import annotations

from collections.abc import Mapping

import pyarrow as pa

from tieline.columns import INGEST_EXPERIMENTS
from tieline.errors import InputError, Problem
from tieline.reading.cell_text import VALUE, CellStyle
from tieline.reading.cells import parse_cells
from tieline.reading.input_file import InputFile
from tieline.reading.records import read_texts
from tieline.settings.ingest import Experiments
from tieline.tables import build, empty

NOT_GIVEN = CellStyle(not_measured=("", "-", "\N{EN DASH}", "\N{EM DASH}", "n.d.", "nd", "n.a.", "na", "?"))


def conditions_table(files: Mapping[str, InputFile], experiments: Experiments | None) -> pa.Table:
    """`ingest.experiments`: a number where the cell is one, its text always; blank cells are left out.

    Raises InputError for a missing file or column, a blank or repeated experiment.
    """
    if experiments is None:
        return empty(INGEST_EXPERIMENTS)
    if experiments.path not in files:
        raise InputError(Problem("no such file.", experiments.path))
    texts = read_texts(files[experiments.path], experiments.columns)
    names = texts.columns["experiment"].to_pylist()
    _check_names(experiments, names, texts.rows.tolist())
    style = CellStyle(decimal=texts.decimal, not_measured=NOT_GIVEN.not_measured)
    lines: list[tuple[int, str, str, float | None, str]] = []
    for condition, column in texts.columns.items():
        if condition == "experiment":
            continue
        cells = parse_cells(column, style)
        for place, text in enumerate(column.to_pylist()):
            if text.strip():
                value = float(cells.value[place]) if cells.state[place] == VALUE else None
                lines.append((place, names[place].strip(), condition, value, text))
    lines.sort(key=lambda line: line[0])
    return build(
        INGEST_EXPERIMENTS,
        {
            "experiment": [line[1] for line in lines],
            "condition": [line[2] for line in lines],
            "value": pa.array([line[3] for line in lines], pa.float64()),
            "text": [line[4] for line in lines],
        },
    )


def _check_names(experiments: Experiments, names: list[str], rows: list[int]) -> None:
    problems: list[Problem] = []
    first: dict[str, int] = {}
    header = experiments.columns["experiment"]
    for name, row in zip((name.strip() for name in names), rows, strict=True):
        if not name:
            problems.append(Problem("the experiment is blank.", experiments.path, row, header))
        elif name in first:
            message = f'the experiment "{name}" stands in rows {first[name]} and {row}.'
            problems.append(Problem(message, experiments.path, row, header))
        first.setdefault(name, row)
    if problems:
        raise InputError(problems)
