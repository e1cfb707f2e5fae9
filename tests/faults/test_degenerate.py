"""Data that hardly tell anything: each case has a defined result through the whole chain, report and pictures included.

Never an exception or a warning, never an infinite number, never a precision that nothing supports.
"""

from __future__ import annotations

import math
import random
from collections.abc import Callable, Sequence
from pathlib import Path
from typing import Any

import numpy as np
import pytest

from faults.commands import tieline
from sessions import result, small_session
from tieline import runner
from tieline.configuration import Session
from tieline.plan import table_path
from tieline.report.write import write_report
from tieline.stages import STAGES
from tieline.statistics import ratios
from tieline.storage import read_table

HEADER = ("Point", "Run", "Phase", "Ni", "Ni 1s", "Ni DL", "Mg", "Mg 1s", "Mg DL")
BODY = """
[[ingest.tables]]
path = "t.csv"
technique = "laser"
batch = "b"
unit = "ppm"
columns = { spot = "Point", experiment = "Run", phase = "Phase" }
sigma = { pattern = "{analyte} 1s" }
limit = { pattern = "{analyte} DL" }
"""
Cells = Sequence[object]
Rows = list[tuple[object, ...]]


def spots(
    phase: str, ni: Cells | Callable[[int], Cells], mg: Cells | Callable[[int], Cells], n: int = 5
) -> Rows:
    """n spots of one phase; cells are value, sigma and limit, the same in every spot or by its number."""
    return [
        (f"{phase}-{i}", "X", phase, *(ni(i) if callable(ni) else ni), *(mg(i) if callable(mg) else mg))
        for i in range(n)
    ]


def scattered(centre: float, sigma: float | str = 0.01, limit: object = "") -> Callable[[int], Cells]:
    """Values with 2 % scatter, and a sigma relative to the centre."""
    draw = random.Random(5)
    values = [centre * (1 + draw.gauss(0, 0.02)) for _ in range(20)]
    return lambda i: (f"{values[i]:.6g}", sigma if isinstance(sigma, str) else abs(centre) * sigma, limit)


def about_zero(sigma: float) -> Callable[[int], Cells]:
    return lambda i: ((1, -2, 3, -1, 0.5)[i], sigma, "")


MG = {"olivine": scattered(3000), "glass": scattered(500)}
OLIVINE, GLASS = spots("olivine", scattered(1000), MG["olivine"]), spots("glass", scattered(100), MG["glass"])
BELOW, WORD_ONLY = ("<1", "", ""), ("bdl", "", "")


def olivine(ni: Cells | Callable[[int], Cells], n: int = 5) -> Rows:
    return spots("olivine", ni, MG["olivine"], n)


def glass(ni: Cells | Callable[[int], Cells], n: int = 5) -> Rows:
    return spots("glass", ni, MG["glass"], n)


# Rows, and what the D of nickel is: kind and reason, or None where there is none. Magnesium goes along, ordinary.
CASES: dict[str, tuple[Rows, tuple[str, str] | None]] = {
    "one spot per phase": (olivine((1000, 10, 1), 1) + glass((100, 1, 1), 1), ("undetermined", ratios.ONE_VALUE)),
    "one spot in one phase": (olivine((1000, 10, 1), 1) + GLASS, ("undetermined", ratios.ONE_VALUE)),
    "one spot, sigma zero": (olivine((1000, 0, 1), 1) + glass((100, 0, 1), 1), ("undetermined", ratios.ONE_VALUE)),
    "one spot, no sigma": (olivine((1000, "", 1), 1) + glass((100, "", 1), 1), ("undetermined", ratios.ONE_VALUE)),
    "two spots": (olivine(scattered(1000), 2) + glass(scattered(100), 2), ("value", ratios.TWO_VALUES)),
    "two identical spots": (olivine((1000, 10, 1), 2) + glass((100, 1, 1), 2), ("value", ratios.TWO_VALUES)),
    "no glass": (OLIVINE, None),
    "no crystal": (GLASS, None),
    "all below the limit": (
        olivine(("bdl", "", 1)) + glass(("bdl", "", 1)),
        ("undetermined", "both means below their limits of detection"),
    ),
    "crystal below the limit": (olivine(BELOW) + GLASS, ("upper-limit", "numerator below its limit of detection")),
    "glass below the limit": (OLIVINE + glass(BELOW), ("lower-limit", "denominator below its limit of detection")),
    "one spot below the limit": (
        olivine(BELOW, 1) + GLASS, ("upper-limit", "numerator below its limit of detection"),
    ),
    "below a limit that nobody states": (olivine(WORD_ONLY) + GLASS, None),
    "glass not measured": (OLIVINE + glass(("", "", "")), None),
    "half of the spots below the limit": (
        olivine(lambda i: (BELOW, ("1.2", 0.1, ""))[i % 2], 6) + GLASS,
        ("value", "some values below the limit of detection: limits by profile likelihood"),
    ),
    "a limit beyond reason": (
        olivine(("<1e11", "", "")) + GLASS, ("upper-limit", "numerator below its limit of detection"),
    ),
    "identical spots": (olivine((1000, 10, 1)) + glass((100, 1, 1)), ("value", "")),
    "identical spots in one phase": (olivine((1000, 10, 1)) + GLASS, ("value", "")),
    "identical spots whose mean has a rounding error": (olivine((1000.1, 10, 1)) + glass((0.1, 0.001, "")), ("value", "")),
    "identical spots, sigma zero": (
        olivine((1000, 0, 1)) + glass((100, 0, 1)), ("undetermined", ratios.NO_SCATTER),
    ),
    "identical spots, no sigma": (
        olivine((1000, "", 1)) + glass((100, "", 1)), ("undetermined", ratios.NO_SCATTER),
    ),
    "sigma zero": (olivine(scattered(1000, 0.0)) + glass(scattered(100, 0.0)), ("value", "")),
    "no sigma": (olivine(scattered(1000, "")) + glass(scattered(100, "")), ("value", "")),
    "sigma beyond reason": (olivine((1000, 1e11, "")) + GLASS, ("upper-limit", ratios.NUMERATOR_AT_ZERO)),
    "negative crystal": (olivine(scattered(-5)) + GLASS, ("undetermined", ratios.NUMERATOR_NEGATIVE)),
    "negative glass": (OLIVINE + glass(scattered(-5)), ("undetermined", ratios.DENOMINATOR_NEGATIVE)),
    "both negative": (
        olivine(scattered(-5)) + glass(scattered(-5)), ("undetermined", ratios.DENOMINATOR_NEGATIVE),
    ),
    "crystal not above zero": (olivine(about_zero(4)) + GLASS, ("upper-limit", ratios.NUMERATOR_AT_ZERO)),
    "glass not above zero": (OLIVINE + glass(about_zero(4)), ("lower-limit", ratios.DENOMINATOR_AT_ZERO)),
    "neither above zero": (
        olivine(about_zero(4)) + glass(about_zero(3)), ("undetermined", ratios.BOTH_AT_ZERO),
    ),
    "zeros": (olivine((0, 1, "")) + glass((0, 1, "")), ("undetermined", ratios.BOTH_AT_ZERO)),
    "zeros, sigma zero": (olivine((0, 0, "")) + glass((0, 0, "")), ("undetermined", ratios.NO_SCATTER)),
    "glass exactly zero": (OLIVINE + glass((0, 0, "")), ("undetermined", ratios.NO_SCATTER)),
    "values over seventeen orders of magnitude": (
        olivine(lambda i: ((1e-6, 1e6, 1, 100, 1e11)[i], 1, "")) + GLASS,
        ("upper-limit", ratios.NUMERATOR_AT_ZERO),
    ),
    "the largest over the smallest": (
        olivine(lambda i: ((1 + i * 0.01) * 1e11, 1e9, "")) + glass(lambda i: ((1 + i * 0.01) * 1e-45, 1e-47, "")),
        ("value", ""),
    ),
}  # fmt: skip


def session_of(folder: Path, rows: Rows, more: str = "", header: Sequence[str] = HEADER) -> Session:
    return small_session(folder, {"t.csv": (header, rows)}, BODY + more)


def assert_finite(session: Session) -> None:
    for table in (name for stage in STAGES for name in stage.outputs):
        frame = read_table(table_path(session.run_folder, table), table).to_pandas()
        for name in frame.select_dtypes("number"):
            assert not np.isinf(frame[name]).any(), f"{table}.{name}"


def assert_honest(row: dict[str, Any]) -> None:
    """What every D must satisfy, whatever it was made from."""
    kind, D, sd, low, high = (row[name] for name in ("kind", "D", "D_sd", "D_lo", "D_hi"))
    given = {name for name, number in (("D", D), ("D_lo", low), ("D_hi", high)) if not math.isnan(number)}
    if kind == "value":
        assert given == {"D", "D_lo", "D_hi"}
        assert 0 < low < D < high
        assert sd > 0
    else:
        assert row["reason"]
        assert (
            given <= {"upper-limit": {"D_lo", "D_hi"}, "lower-limit": {"D_lo"}, "undetermined": {"D"}}[kind]
        )
        assert math.isnan(sd) or sd > 0
    if kind == "upper-limit":
        assert low == 0 < high
    if kind == "lower-limit":
        assert low > 0
    if kind == "undetermined":
        assert row["class"] == "unresolved"


@pytest.mark.parametrize("name", CASES)
def test_every_case_has_a_defined_result(name: str, tmp_path: Path):
    rows, expected = CASES[name]
    session = session_of(tmp_path, rows)
    reports = runner.run(session)
    assert_finite(session)
    table = result(session, "classify")
    for row in table.to_dict("records"):
        assert_honest(row)
    nickel = table[table["element"] == "Ni"]
    if expected is None:
        assert len(nickel) == 0
        told = [str(remark) for report in reports for remark in report.remarks]
        assert not name.startswith("no ") or any("formed" in remark for remark in told)
    else:
        assert [(row.kind, row.reason) for row in nickel.itertuples()] == [expected]


@pytest.mark.parametrize(
    "name",
    [
        "no glass",
        "all below the limit",
    ],
)
def test_report_pictures_and_commands_stand_it(name: str, tmp_path: Path):
    session = session_of(tmp_path, CASES[name][0])
    for command in ("run", "status", "report", "check"):
        done = tieline(command, str(session.path))
        assert done.status == 0, done.stderr
    assert tieline("audit", str(session.run_folder)).status == 0
    written = write_report(session, tmp_path / "figures")
    assert all(path.stat().st_size for path in written)
    if CASES[name][1] is not None:
        done = tieline("trace", str(session.path), "X", "olivine/glass", "Ni")
        assert done.status == 0, done.stderr


def test_precision_of_identical_spots_is_that_of_counting(tmp_path: Path):
    """Five equal values of 1 %: 1 % / root 5 each, not nothing."""
    session = session_of(tmp_path, CASES["identical spots"][0])
    runner.run(session)
    row = result(session, "classify").set_index("element").loc["Ni"]
    assert row["D_sd"] == pytest.approx(10 * math.sqrt(2 * 0.01**2 / 5), rel=1e-9)
    assert row["D_hi"] - row["D_lo"] > 2 * 1.96 * row["D_sd"] * 0.99


def test_one_experiment_of_one_element(tmp_path: Path):
    rows = [row[:6] for row in OLIVINE + GLASS]
    session = session_of(tmp_path, rows, header=HEADER[:6])
    runner.run(session)
    write_report(session, tmp_path / "figures")
    table = result(session, "classify")
    assert len(table) == 1
    assert_honest(table.iloc[0].to_dict())
    assert_finite(session)


def test_everything_left_out_by_rulings(tmp_path: Path):
    """Nothing is left to reduce, which a person decided: that is a result, not an error."""
    (tmp_path / "rulings.csv").write_text(
        "spot,analyte,verdict,analyst,date,reason\n"
        + "".join(f"{row[0]},*,drop,A. Analyst,2024-05-01,test\n" for row in OLIVINE + GLASS),
        encoding="utf-8",
    )
    session = session_of(tmp_path, OLIVINE + GLASS, '[screen]\nrulings = "rulings.csv"\n')
    runner.run(session)
    write_report(session)
    assert tieline("run", str(session.path)).status == 0
    assert len(result(session, "classify")) == 0
    assert set(result(session, "pair.pairs")["formed"]) == {False}


def test_a_table_with_a_header_and_no_rows(tmp_path: Path):
    session = session_of(tmp_path, [])
    done = tieline("run", str(session.path))
    assert done.status == 2
    assert "t.csv" in done.stderr
    assert "Traceback" not in done.stderr


def test_every_screening_test_on_data_that_hardly_tell_anything(tmp_path: Path):
    """All tests enabled and dropping, on the cases that are poorest in information."""
    more = "".join(
        f'[screen.{name}]\nenabled = true\naction = "drop"\n'
        for name in ("total", "cations", "zoning", "outlier", "imprecise")
    )
    for name in ("one spot per phase", "zeros, sigma zero", "identical spots, no sigma", "both negative"):
        session = session_of(tmp_path / name.replace(" ", "-"), CASES[name][0], more)
        runner.run(session)
        assert_finite(session)
        for row in result(session, "classify").to_dict("records"):
            assert_honest(row)
