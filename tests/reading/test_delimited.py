"""Delimited text: encodings, separators, headers, rows that do not fit."""

from __future__ import annotations

import codecs
import csv
import gzip
import io
import zlib

import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from tieline.errors import InputError
from tieline.reading import delimited
from tieline.reading.formats import ending, read_grid
from tieline.reading.grid import Grid, ReadLimits
from tieline.reading.input_file import InputFile
from tieline.reading.layout import Layout

PLAIN = "Spot,MgO,Ni µ\na,1.5,2\nb,2.5,30\n"


def read(data: bytes | str, path: str = "t.csv", limits: ReadLimits | None = None, **layout: object) -> Grid:
    raw = data.encode() if isinstance(data, str) else data
    return read_grid(InputFile.from_bytes(path, raw), Layout(**layout), limits)  # type: ignore[arg-type]


def texts(grid: Grid) -> list[list[str]]:
    return [
        list(row) for block in grid.blocks for row in zip(*(c.to_pylist() for c in block.cells), strict=True)
    ]


def refusal(
    data: bytes | str, path: str = "t.csv", limits: ReadLimits | None = None, **layout: object
) -> str:
    with pytest.raises(InputError) as caught:
        read(data, path, limits, **layout)
    assert caught.value.problems[0].file == path
    return str(caught.value)


@pytest.mark.parametrize(
    ("data", "encoding"),
    [
        (PLAIN.encode(), "utf-8"),
        (codecs.BOM_UTF8 + PLAIN.encode(), "utf-8"),
        (PLAIN.encode("utf-16"), "utf-16"),
        (PLAIN.encode("utf-16-le"), "utf-16-le"),
        (PLAIN.encode("utf-16-be"), "utf-16-be"),
        (PLAIN.encode("cp1252"), "cp1252"),
    ],
)
def test_encodings_are_found(data: bytes, encoding: str):
    grid = read(data)
    assert grid.found.encoding == encoding
    assert grid.headers == ("Spot", "MgO", "Ni µ")
    assert texts(grid) == [["a", "1.5", "2"], ["b", "2.5", "30"]]


def test_a_stated_encoding_is_used_and_a_wrong_one_refused():
    assert read(PLAIN.encode("latin-1"), encoding="latin-1").headers[2] == "Ni µ"
    assert "no text encoding" in refusal(PLAIN, encoding="utf-99")
    assert "does not fit the encoding" in refusal(PLAIN.encode("cp1252"), encoding="utf-8")
    assert "no text encoding" in refusal(PLAIN, encoding="rot13")


def test_bad_bytes_past_the_first_piece_are_found():
    data = (b"Spot,MgO\n" + b"a,1.5\n" * 400_000) + b"\xb5,1\n"
    assert read(data).found.encoding == "cp1252"
    assert "byte 2400009" in refusal(data, encoding="utf-8")


@pytest.mark.parametrize("delimiter", [",", ";", "\t", "|"])
@pytest.mark.parametrize("newline", ["\n", "\r\n", "\r"])
def test_separators_and_line_ends_are_found(delimiter: str, newline: str):
    rows = [["Spot", "MgO wt%", "Note"], ["a", "1.5", "x y"], ["b", "2.5", ""]]
    data = newline.join(delimiter.join(row) for row in rows)
    grid = read(data)
    assert grid.found.delimiter == delimiter
    assert texts(grid) == rows[1:]


def test_a_decimal_comma_is_no_separator():
    grid = read("Spot;MgO;CaO\na;1,5;2,5\nb;1,25;3,5\n")
    assert (grid.found.delimiter, grid.found.decimal) == (";", ",")
    grid = read('Spot,MgO\na,"1,5"\nb,"12,25"\n')
    assert (grid.found.delimiter, grid.found.decimal) == (",", ",")


def test_commas_that_may_be_thousands_must_be_stated():
    data = "Spot;Ni\na;1,234\nb;12,500\n"
    assert 'thousands = ","' in refusal(data)
    assert read(data, thousands=",").found.decimal == "."
    assert read(data, decimal=",").found.decimal == ","
    assert read("Spot;Ni\na;1,234\nb;0,500\n").found.decimal == ","


def test_quoted_cells_may_hold_separators_quotes_and_line_ends():
    data = 'Spot,Note,MgO\na,"x, ""y""\nz",1\nb,,2\n'
    grid = read(data)
    assert texts(grid) == [["a", 'x, "y"\nz', "1"], ["b", "", "2"]]
    assert grid.rows().tolist() == [2, 3]  # a spreadsheet shows the two lines in one row


def test_rows_of_another_length_are_told_with_their_row_number():
    grid = read("Spot,MgO\na,1\n\nb\nc,3,4\nd,5\n")
    assert texts(grid) == [["a", "1"], ["", ""], ["d", "5"]]
    assert grid.rows().tolist() == [2, 3, 6]
    assert [(row.row, row.cells, row.text) for row in grid.ragged] == [(4, 1, "b"), (5, 3, "c,3,4")]


@pytest.mark.parametrize("blank", [";", ";;;", ";;;;;;", ' ;""', "\t;"])
def test_a_line_of_nothing_but_separators_is_blank_whatever_their_number(blank: str):
    grid = read(f"Spot;MgO;NiO\na;1,5;2\n{blank}\nb;2,5;3\n;;x;\n")
    assert grid.column(0).to_pylist() == ["a", "b"]
    assert grid.rows().tolist() == [2, 4]
    assert [(row.row, row.text) for row in grid.ragged] == [(5, ";;x;")]


def test_rows_of_another_length_in_a_file_of_several_blocks(monkeypatch: pytest.MonkeyPatch):
    monkeypatch.setattr(delimited, "BLOCK_BYTES", 1 << 10)
    lines = ["Spot,MgO", *(f"s{i},{i}" for i in range(2, 2000))]
    lines[1200] = "s1201"
    lines[1500] = "s1501,1,2"
    grid = read("\n".join(lines))
    assert len(grid.blocks) > 5
    assert [row.row for row in grid.ragged] == [1201, 1501]
    assert [int(text[0][1:]) for text in texts(grid)] == grid.rows().tolist()


def test_separators_at_the_ends_of_lines():
    assert read("Spot,MgO,\na,1\nb,2\n").headers == ("Spot", "MgO")
    grid = read("Spot,MgO\na,1,\nb,2,\n")
    assert grid.headers == ("Spot", "MgO", "")
    assert texts(grid) == [["a", "1", ""], ["b", "2", ""]]
    assert not grid.ragged


def test_header_below_titles_and_units_below_header():
    data = "Session ember\nprobe,nothing\n\nSpot,MgO,Ni\n,wt%,ppm\na,1,2\n"
    grid = read(data)
    assert (grid.found.header_row, grid.found.units_row) == (4, 5)
    assert grid.units == ("", "wt%", "ppm")
    assert grid.rows().tolist() == [6]
    assert read(data, units_row=False).rows().tolist() == [5, 6]
    assert read(data, header_row=4).found.header_row == 4
    assert read(data, skip_rows=3).found.header_row == 4


def test_expected_headers_find_the_header():
    data = "a,b,c\nx,y,z\nPoint,Run,MgO\n1,2,3\n"
    assert read(data).found.header_row == 1
    assert read(data, expected_headers=("Run", "Point")).found.header_row == 3


def test_header_row_that_does_not_exist():
    assert "row 9 is no header" in refusal(PLAIN, header_row=9)
    assert "no header was found" in refusal("1,2\n3,4\n")


def test_gzip():
    assert read(gzip.compress(PLAIN.encode()), "t.csv.gz").headers[0] == "Spot"
    two = gzip.compress(PLAIN[:20].encode()) + gzip.compress(PLAIN[20:].encode())
    assert texts(read(two, "t.csv.gz")) == texts(read(PLAIN))
    assert "end before their end mark" in refusal(gzip.compress(PLAIN.encode() * 99)[:-12], "t.csv.gz")
    damaged = bytearray(gzip.compress(PLAIN.encode() * 99))
    damaged[15] ^= 0xFF
    assert "gzip" in refusal(bytes(damaged), "t.csv.gz")


def test_a_gzip_bomb_is_refused_before_it_is_unpacked():
    packer = zlib.compressobj(9, wbits=31)
    bomb = (
        packer.compress(b"a,b\n")
        + b"".join(packer.compress(b"0" * (1 << 20)) for _ in range(64))
        + packer.flush()
    )
    assert len(bomb) < 1 << 18
    assert "unpacks to more than" in refusal(bomb, "t.csv.gz", ReadLimits(expanded_bytes=1 << 22))


def test_nul_bytes_and_empty_files():
    assert "NUL" in refusal(b"Spot,MgO\na,1\x00\n" + b"b,22\n" * 99)
    assert "empty" in refusal(b"")
    assert "no header" in refusal(b"\n\n")


def test_too_many_columns():
    line = ",".join(f"c{i}" for i in range(20_000))
    assert "20000 columns" in refusal(f"{line}\n")
    assert len(read(f"{line}\n", limits=ReadLimits(columns=20_000)).headers) == 20_000


def test_a_row_longer_than_a_block(monkeypatch: pytest.MonkeyPatch):
    monkeypatch.setattr(delimited, "BLOCK_BYTES", 1 << 12)
    assert "a single row is longer" in refusal('Spot,Note\na,"' + "x\n" * 50_000)


def test_a_single_line_larger_than_the_head(monkeypatch: pytest.MonkeyPatch):
    monkeypatch.setattr(delimited, "HEAD_BYTES", 1 << 12)
    assert "its first row is longer than 4 kB" in refusal("a," * 10_000)


def test_endings():
    assert ending("A/b.CSV.GZ") == ".csv.gz"
    assert ending("a.b.xlsx") == ".xlsx"
    assert ending("noending") == ""
    assert "Accepted:" in refusal(PLAIN, "t.doc")


CELLS = st.text(
    st.characters(codec="utf-8", exclude_characters="\x00", exclude_categories=("Cs",)).filter(
        lambda c: c != "\ufeff"
    ),
    max_size=6,
)


@given(st.lists(st.lists(CELLS, min_size=3, max_size=3), min_size=1, max_size=8))
def test_any_cells_come_back_as_they_were_written(rows: list[list[str]]):
    stream = io.StringIO()
    csv.writer(stream, quoting=csv.QUOTE_ALL).writerows([["one", "two", "three"], *rows])
    grid = read(
        stream.getvalue(), delimiter=",", decimal=".", header_row=1, units_row=False, encoding="utf-8"
    )
    assert texts(grid) == rows
    assert not grid.ragged


@settings(max_examples=200)
@given(st.binary(max_size=300), st.sampled_from(["t.csv", "t.csv.gz", "t.xlsx", "t.ods", "t.parquet"]))
def test_random_bytes_are_read_or_refused_with_the_file(data: bytes, path: str):
    files = {path}
    try:
        read(data, path)
    except InputError as error:
        files = {problem.file for problem in error.problems}
    assert files == {path}
