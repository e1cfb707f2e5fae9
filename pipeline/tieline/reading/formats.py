"""Any accepted file format into a grid of text cells, chosen by the file name's ending."""

from __future__ import annotations

from pathlib import PurePosixPath

from tieline.errors import InputError, Problem
from tieline.reading.grid import Grid, ReadLimits
from tieline.reading.input_file import InputFile
from tieline.reading.layout import Layout

TEXT = (".csv", ".tsv", ".txt", ".tab", ".dat")
WORKBOOKS = (".xlsx", ".xlsm", ".ods")
ACCEPTED = (*TEXT, *(f"{ending}.gz" for ending in TEXT), *WORKBOOKS, ".parquet")


def read_grid(file: InputFile, layout: Layout | None = None, limits: ReadLimits | None = None) -> Grid:
    """The data rows of a table as text cells, with headers, units and the row numbers a spreadsheet shows.

    Whatever `layout` leaves open is found: encoding, delimiter, header row, units row, decimal mark. Rows
    with another number of cells than the header stand in `ragged`, blank and repeated lines stay in.
    Raises InputError for a file that is no such table, is damaged, or is larger than `limits`.
    """
    layout, limits = layout or Layout(), limits or ReadLimits()
    kind = ending(file.path)
    if len(file.data) == 0:
        raise InputError(Problem("the file is empty.", file.path))
    if kind in WORKBOOKS:
        from tieline.reading.workbook import read_workbook

        return read_workbook(file, layout, limits)
    if kind == ".parquet":
        from tieline.reading.parquet_table import read_parquet

        return read_parquet(file, layout, limits)
    if kind.removesuffix(".gz") in TEXT:
        from tieline.reading.delimited import read_delimited

        return read_delimited(file, layout, limits)
    raise InputError(
        Problem(
            f'"{kind}" is not a table format tieline reads.',
            file.path,
            remedy=f"Accepted: {', '.join(ACCEPTED)}.",
        )
    )


def ending(path: str) -> str:
    """The file name's ending in small letters, `.csv.gz` for packed text."""
    suffixes = [suffix.lower() for suffix in PurePosixPath(path.replace("\\", "/")).suffixes]
    if suffixes[-1:] == [".gz"] and suffixes[-2:-1] and suffixes[-2] in TEXT:
        return "".join(suffixes[-2:])
    return suffixes[-1] if suffixes else ""
