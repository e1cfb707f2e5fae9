"""One small invented session, written in the ways different laboratories would write it."""

from __future__ import annotations

import csv
import gzip
import io
from collections.abc import Callable, Sequence
from dataclasses import dataclass, field
from typing import Any

from tieline.ingest import ingest
from tieline.reading.input_file import InputFile
from tieline.results import StageResult
from tieline.settings.ingest import IngestSettings

ANALYTES = ("SiO2", "MgO", "Sr88")
UNITS = {"SiO2": "wt%", "MgO": "wt%", "Sr88": "ppm"}


@dataclass(frozen=True)
class Spot:
    """One analysis; value, sigma and limit are decimal texts, a value may be a limit or blank."""

    name: str
    experiment: str
    phase: str
    zone: str
    value: tuple[str, str, str]
    sigma: tuple[str, str, str]
    limit: tuple[str, str, str] = ("0.02", "0.015", "0.25")


SPOTS = (
    Spot("1", "TX07", "olivine", "rim", ("40.12", "48.9", "<0.25"), ("0.21", "0.3", "")),
    Spot("2", "TX07", "olivine", "core", ("39.875", "49.25", "0.125"), ("0.2", "0.25", "0.05")),
    Spot("3", "TX07", "glass", "", ("51.5", "8.0625", "312.5"), ("0.25", "0.09", "6.5")),
    Spot("4", "TX08", "glass", "", ("50.75", "", "-0.5"), ("0.26", "", "0.4")),
    Spot("5", "TX08", "clinopyroxene", "rim", ("52.25", "17.5", "45.5"), ("0.3", "0.16", "1.25")),
)
PHASES = {"olivine": ["Ol"], "glass": ["Gl"], "clinopyroxene": ["Cpx"]}


@dataclass(frozen=True)
class Layout:
    """A file and the settings of its table."""

    path: str
    data: bytes
    table: dict[str, Any] = field(default_factory=dict)

    def read(self, **settings: Any) -> StageResult:
        """`ingest` of this table alone."""
        defaults: dict[str, Any] = {
            "technique": "laser",
            "batch": "b",
            "columns": {"spot": "Point", "experiment": "Run", "phase": "Phase", "zone": "Zone"},
            "sigma": {"pattern": "{analyte} 1s"},
            "limit": {"pattern": "{analyte} DL"},
            "unit": "wt%",
        }
        table = {"path": self.path, **defaults, **self.table}
        table = {key: value for key, value in table.items() if value is not None}
        config = IngestSettings.model_validate({"tables": [table], **settings})
        return ingest({self.path: InputFile.from_bytes(self.path, self.data)}, settings=config)


def rows(
    headers: Callable[[str], list[str]] | None = None,
    cells: Callable[[Spot, int], list[str]] | None = None,
    phase: Callable[[str], str] = str,
) -> list[list[str]]:
    """Header and data rows, with three columns per analyte side by side unless told otherwise."""
    headers = headers or (lambda name: [f"{name} ({UNITS[name]})", f"{name} 1s", f"{name} DL"])
    cells = cells or (lambda spot, i: [spot.value[i], spot.sigma[i], spot.limit[i]])
    table = [["Point", "Run", "Phase", "Zone", *(text for name in ANALYTES for text in headers(name))]]
    for spot in SPOTS:
        labels = [spot.name, spot.experiment, phase(spot.phase), spot.zone]
        table.append([*labels, *(text for i in range(len(ANALYTES)) for text in cells(spot, i))])
    return table


def as_text(table: Sequence[Sequence[str]], delimiter: str = ",", newline: str = "\n") -> str:
    stream = io.StringIO()
    csv.writer(stream, delimiter=delimiter, lineterminator=newline).writerows(table)
    return stream.getvalue()


def wide_csv() -> Layout:
    return Layout("t.csv", as_text(rows()).encode())


def semicolon_decimal_comma() -> Layout:
    table = [rows()[0], *([cell.replace(".", ",") for cell in row] for row in rows()[1:])]
    return Layout("t.csv", ("\ufeff" + as_text(table, ";", "\r\n")).encode())


def utf16_tabs() -> Layout:
    return Layout("t.txt", as_text(rows(phase=lambda name: PHASES[name][0]), "\t").encode("utf-16"))


def windows_1252_micrograms() -> Layout:
    table = rows(lambda name: [f"{name} {'µg/g' if name == 'Sr88' else 'wt%'}", f"{name} 1s", f"{name} DL"])
    return Layout("t.csv", as_text(table).encode("cp1252"))


def relative_two_sigma_block() -> Layout:
    """2 sigma in per cent in a second block of columns, the limits in a third."""

    def block(kind: str) -> list[list[str]]:
        lines = [[f"{name}{kind}" for name in ANALYTES]]
        for spot in SPOTS:
            line = []
            for i in range(len(ANALYTES)):
                if kind == " 2s%":
                    has = spot.sigma[i] and not spot.value[i].startswith("<")
                    line.append(repr(200 * float(spot.sigma[i]) / abs(float(spot.value[i]))) if has else "")
                else:
                    line.append(spot.limit[i])
            lines.append(line)
        return lines

    values = rows(lambda name: [f"{name} {UNITS[name]}"], lambda spot, i: [spot.value[i]])
    table = [[*a, *b, *c] for a, b, c in zip(values, block(" 2s%"), block(" LOD"), strict=True)]
    sigma = {"pattern": "{analyte} 2s%", "level": 2, "relative": True}
    return Layout("t.csv", as_text(table).encode(), {"sigma": sigma, "limit": {"pattern": "{analyte} LOD"}})


def reversed_isotopes_gzip() -> Layout:
    names = {"SiO2": "Wt% SiO2", "MgO": "MgO_wt%", "Sr88": "88Sr ppm"}
    bare = {"SiO2": "SiO2", "MgO": "MgO", "Sr88": "88Sr"}
    table = rows(lambda name: [names[name], f"{bare[name]} 2SE", f"LOD {bare[name]}"], _doubled_sigma)
    setting = {
        "sigma": {"pattern": "{analyte} 2SE", "level": 2, "kind": "se"},
        "limit": {"pattern": "LOD {analyte}"},
    }
    return Layout("t.csv.gz", gzip.compress(as_text(table).encode(), mtime=0), setting)


def _doubled_sigma(spot: Spot, i: int) -> list[str]:
    return [spot.value[i], repr(2 * float(spot.sigma[i])) if spot.sigma[i] else "", spot.limit[i]]


def split_labels() -> Layout:
    """One label `TX07-Ol-rim-1` instead of four columns."""
    table = rows(phase=lambda name: PHASES[name][0])
    joined = [["Comment", *table[0][4:]]]
    joined += [["-".join([row[1], row[2], row[3] or "x", row[0]]), *row[4:]] for row in table[1:]]
    pattern = r"(?P<experiment>TX\d+)-(?P<phase>\w+)-(?:x|(?P<zone>rim|core))-(?P<spot>\d+)"
    return Layout(
        "t.csv",
        as_text(joined).encode(),
        {"columns": {}, "labels": {"column": "Comment", "pattern": pattern}},
    )


def averages_between() -> Layout:
    """Title, blank lines, repeated header, averages, a Total column and a stray comment column."""
    table = rows()
    out = [["Session of an autumn day"], [], [*table[0], "Total", "Remarks"]]
    for number, row in enumerate(table[1:]):
        total = sum(float(text) for text in (row[4], row[7]) if text)
        out.append([*row, f"{total:.2f}", "fine, mostly" if number else ""])
        if number == 1:
            out.append(["Average ol", "TX07", "olivine", "", "39.99", *[""] * 10])
            out.append(["Std dev", "TX07", "olivine", "", "0.17", *[""] * 10])
            out.append([""] * 15)
            out.append([*table[0], "Total", "Remarks"])
    text = as_text(out)
    return Layout("t.csv", text.encode())


def units_below_xlsx() -> Layout:
    """A workbook with a title, units on the line below the header, numbers as numbers, on its second sheet."""
    import openpyxl

    book = openpyxl.Workbook()
    book.active.title = "Notes"
    sheet = book.create_sheet("Data")
    sheet.append(["Laser session"])
    sheet.append(
        [
            "Point",
            "Run",
            "Phase",
            "Zone",
            *(text for name in ANALYTES for text in (name, f"{name} 1s", f"{name} DL")),
        ]
    )
    sheet.append(["", "", "", "", *(UNITS[name] for name in ANALYTES for _ in range(3))])
    for row in rows()[1:]:
        sheet.append([row[0], row[1], row[2], row[3], *map(_typed, row[4:])])
    stream = io.BytesIO()
    book.save(stream)
    return Layout("t.xlsx", stream.getvalue(), {"sheet": "Data", "unit": None})


def _typed(text: str) -> str | float | None:
    if not text:
        return None
    return text if text.startswith("<") else float(text)


def ods() -> Layout:
    from odf.opendocument import OpenDocumentSpreadsheet
    from odf.table import Table, TableCell, TableRow
    from odf.text import P

    book = OpenDocumentSpreadsheet()
    sheet = Table(name="Data")
    for number, row in enumerate(rows()):
        line = TableRow()
        for place, text in enumerate(row):
            typed = _typed(text) if number and place > 3 else text
            cell = (
                TableCell(valuetype="float", value=typed)
                if isinstance(typed, float)
                else TableCell(valuetype="string")
            )
            cell.addElement(P(text=text))
            line.addElement(cell)
        sheet.addElement(line)
    book.spreadsheet.addElement(sheet)
    stream = io.BytesIO()
    book.save(stream)
    return Layout("t.ods", stream.getvalue())


def parquet() -> Layout:
    import pyarrow as pa
    import pyarrow.parquet

    table = rows()
    columns: dict[str, Any] = {}
    for place, header in enumerate(table[0]):
        texts = [row[place] for row in table[1:]]
        numbers = place > 3 and not any(text.startswith("<") for text in texts)
        columns[header] = [float(text) if text else None for text in texts] if numbers else texts
    stream = io.BytesIO()
    pa.parquet.write_table(pa.table(columns), stream)
    return Layout("t.parquet", stream.getvalue())


def neighbour_columns() -> Layout:
    """The uncertainty column is called `±` behind every analyte, the limits are constants."""
    table = rows(
        lambda name: [f"{name} [{UNITS[name]}]", "±"], lambda spot, i: [spot.value[i], spot.sigma[i]]
    )
    limits = {"SiO2": 0.02, "MgO": 0.015, "Sr88": 0.25}
    # The limit of the third analyte is in its own unit, as the setting says where no unit is given.
    return Layout("t.csv", as_text(table).encode(), {"sigma": {"pattern": "±"}, "limit": {"values": limits}})


def second_block_same_headers() -> Layout:
    """A block of values and a block of uncertainties under the same headers, limits in ppm throughout."""
    values = rows(lambda name: [f"{name} ({UNITS[name]})"], lambda spot, i: [spot.value[i]])
    sigmas = rows(lambda name: [f"{name} ({UNITS[name]})"], lambda spot, i: [spot.sigma[i]])
    limits = rows(lambda name: [f"{name} MDL ppm"], lambda spot, i: [_in_ppm(spot, i)])
    table = [[*a, *b[4:], *c[4:]] for a, b, c in zip(values, sigmas, limits, strict=True)]
    setting = {"sigma": {"pattern": "{analyte}"}, "limit": {"pattern": "{analyte} MDL"}}
    return Layout("t.csv", as_text(table).encode(), setting)


def _in_ppm(spot: Spot, i: int) -> str:
    factor = 1e4 if UNITS[ANALYTES[i]] == "wt%" else 1.0
    return repr(float(spot.limit[i]) * factor)


def typeset() -> Layout:
    """Non-breaking spaces, true minus signs, padded cells, units in cells, subscripts in the headers."""
    subscript = {"SiO2": "SiO₂ (wt%)", "MgO": "MgO (wt%)", "Sr88": "⁸⁸Sr (ppm)"}
    table = rows(lambda name: [subscript[name], f"{name} 1s", f"{name} DL"])
    table = [table[0]] + [[cell.replace("-", "\u2212") for cell in row] for row in table[1:]]
    for row in table[1:]:
        row[4] = f"\u00a0{row[4]} wt%"
        row[7] = f"  {row[7]} "
        row[12] = f" {row[12]}\u202f"
        row[10] = row[10].replace("<", "< ")
    return Layout("t.tsv", as_text(table, "\t").encode())


ALL: dict[str, Callable[[], Layout]] = {
    maker.__name__: maker
    for maker in (
        wide_csv,
        semicolon_decimal_comma,
        utf16_tabs,
        windows_1252_micrograms,
        relative_two_sigma_block,
        reversed_isotopes_gzip,
        split_labels,
        averages_between,
        units_below_xlsx,
        ods,
        parquet,
        neighbour_columns,
        second_block_same_headers,
        typeset,
    )
}
