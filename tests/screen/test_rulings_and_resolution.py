"""Rulings, and how findings and rulings become `use` and `why`."""

import numpy as np
import pytest

from screen.synthetic import Block, found, inputs, used
from tieline.correction import calibrated
from tieline.errors import InputError
from tieline.reading.input_file import InputFile
from tieline.rulings import rulings_as_written
from tieline.screen import counts_by_test, read_rulings
from tieline.screen.rulings import ruling_findings
from tieline.screen.session import session_of

ANALYTES = ("SiO2", "FeO", "MgO", "CaO", "MnO")
OLIVINE = np.array([190700.0, 76200.0, 296100.0, 1430.0, 1160.0])
HEADER = "spot,analyte,verdict,analyst,date,reason\n"


def olivine(scale, **options):
    values = np.asarray(scale)[:, None] * OLIVINE
    return Block("E1", "olivine", ANALYTES, values, 0.003 * values, **options)


def ruled(*lines, header=HEADER):
    return {"rulings.csv": InputFile.from_bytes("rulings.csv", (header + "\n".join(lines) + "\n").encode())}


def why(result):
    table = result.tables["screen"]
    rows = zip(*(table.column(name).to_pylist() for name in ("spot", "analyte", "why")), strict=True)
    return {(spot, analyte): text for spot, analyte, text in rows}


def problems(lines, blocks=None, header=HEADER):
    with pytest.raises(InputError) as error:
        inputs(blocks or [olivine([1.0, 1.0])]).screen(ruled(*lines, header=header))
    return error.value.problems


def test_a_ruling_beats_a_test_and_the_finding_stays():
    result = inputs([olivine([1.0, 0.9])]).screen(
        ruled("000-001,*,keep,A. Nalyst,2024-03-09,ratios are sound")
    )
    assert found(result, "total") == {"000-001"}
    assert all(used(result).values())
    rows = result.tables["screen.findings"].to_pylist()
    ruling = next(row for row in rows if row["code"] == "ruling")
    assert (ruling["action"], ruling["detail"]) == ("keep", "ratios are sound (A. Nalyst, 2024-03-09)")


def test_a_dropped_spot_drops_its_analytes_and_a_dropped_analyte_only_itself():
    files = ruled("000-000,*,drop,X,2024-03-09,crack", "000-001,CaO,drop,X,2024-03-09,fluorescence")
    reasons = why(inputs([olivine([1.0, 1.0])]).screen(files))
    assert {
        analyte for (spot, analyte), text in reasons.items() if spot == "000-000" and text == "ruling"
    } == set(ANALYTES)
    assert {key for key, text in reasons.items() if key[0] == "000-001" and text} == {("000-001", "CaO")}


def test_a_ruling_on_an_analyte_goes_before_one_on_its_spot():
    files = ruled("000-000,*,drop,X,2024-03-09,crack", "000-000,MgO,keep,X,2024-03-09,unaffected")
    use = used(inputs([olivine([1.0, 1.0])]).screen(files))
    assert use["000-000", "MgO"]
    assert not use["000-000", "CaO"]


def test_several_reasons_are_joined_in_order_of_precedence():
    pyroxene_like = OLIVINE * np.array([1.4, 1.0, 0.6, 1.0, 1.0])
    values = np.stack([OLIVINE, 0.9 * pyroxene_like])
    block = Block("E1", "olivine", ANALYTES, values, 0.001 * values)
    result = inputs([block]).screen(ruled("000-001,FeO,drop,X,2024-03-09,drift"), identity={"enabled": False})
    assert why(result)["000-001", "MgO"] == "total, cations"
    assert why(result)["000-001", "FeO"] == "ruling, total, cations"
    assert result.ledger.outcomes == {
        "used": 5,
        "reference-material": 0,
        "not-measured": 0,
        "left out by ruling": 1,
        "left out by total": 4,
    }


def test_reference_materials_and_missing_values_are_never_used():
    values = np.tile(OLIVINE, (2, 1))
    values[1, 3] = np.nan
    limits = np.full(values.shape, np.nan)
    unknown = Block("E1", "olivine", ANALYTES, values, 0.003 * values, limits=limits)
    standard = Block(None, "San Carlos", ANALYTES, values[:1], 0.003 * values[:1], material="San Carlos")
    result = inputs([unknown, standard]).screen(ruled("000-001,CaO,keep,X,2024-03-09,wanted"))
    reasons = why(result)
    assert reasons["000-001", "CaO"] == "not-measured"
    assert {reasons["001-000", analyte] for analyte in ANALYTES} == {"reference-material"}
    result.ledger.check("screen")
    assert result.ledger.outcomes["reference-material"] == 5


def test_a_value_of_which_only_the_limit_is_known_is_used():
    values = np.tile(OLIVINE, (2, 1))
    values[0, 3] = np.nan
    limits = np.where(np.isnan(values), 50.0, np.nan)
    result = inputs([Block("E1", "olivine", ANALYTES, values, 0.003 * values, limits=limits)]).screen()
    assert used(result)["000-000", "CaO"]


def test_screen_keeps_the_rows_of_convert_in_their_order():
    tables = inputs([olivine([1.0, 0.9, 1.0])]).shuffled(3)
    result = tables.screen()
    for name in ("spot", "analyte", "row"):
        assert result.tables["screen"].column(name).equals(tables.convert.column(name))


def test_the_order_of_rows_changes_nothing():
    tables = inputs([olivine([1.0, 0.9, 1.0, 1.2]), olivine([1.0, 1.01, 0.93], labels=["a", "c", "b"])])
    first, second = tables.screen(), tables.shuffled(5).screen()
    assert why(first) == why(second)
    for name in ("screen.findings", "screen.groups"):
        assert first.tables[name].to_pylist() == second.tables[name].to_pylist()


def test_splitting_a_table_changes_nothing_but_the_place():
    scale = [1.0, 0.9, 1.0, 1.02, 0.99, 1.01]
    labels = [f"p{at}" for at in range(6)]
    whole = inputs([olivine(scale, labels=labels)]).screen()
    parts = [
        olivine(scale[:2], labels=labels[:2], table="z.csv"),
        olivine(scale[2:], labels=labels[2:], table="a.csv"),
    ]
    split = inputs(parts).screen()
    assert why(whole) == why(split)
    assert whole.tables["screen.groups"].to_pylist() == split.tables["screen.groups"].to_pylist()
    places = ("table", "row")
    rows = [
        [
            {name: value for name, value in row.items() if name not in places}
            for row in result.tables["screen.findings"].to_pylist()
        ]
        for result in (whole, split)
    ]
    assert rows[0] == rows[1]


@pytest.mark.parametrize(
    ("line", "column"),
    [
        ("000-000,*,drop,X,2024-03-09,", "reason"),
        ("000-000,*,drop,,2024-03-09,crack", "analyst"),
        ("000-000,*,drop,X,,crack", "date"),
        ("000-000,*,drop,X,9 March,crack", "date"),
        ("000-000,*,maybe,X,2024-03-09,crack", "verdict"),
        (",*,drop,X,2024-03-09,crack", "spot"),
        ("000-00x,*,drop,X,2024-03-09,crack", "spot"),
        ("000-000,NiO,drop,X,2024-03-09,crack", "analyte"),
    ],
)
def test_incomplete_or_unknown_rulings_are_named_with_file_row_and_column(line, column):
    (problem,) = problems(["000-001,*,keep,X,2024-03-09,fine", line])
    assert (problem.file, problem.row, problem.column) == ("rulings.csv", 3, column)


def test_all_problems_are_told_at_once():
    found_problems = problems(["000-000,*,drop,X,2024-13-09,", "000-001,*,perhaps,,2024-03-09,no"])
    assert {(problem.row, problem.column) for problem in found_problems} == {
        (2, "date"), (2, "reason"), (3, "verdict"), (3, "analyst"),
    }  # fmt: skip


def test_what_is_wrong_with_the_table_and_what_the_spots_do_not_know_is_told_together():
    files = ruled(
        "000-000,*,drop,X,2024-03-09,crack",
        "000-000,*,keep,X,2024-03-09,no crack",
        "000-00x,*,drop,X,2024-03-09,no such spot",
        "000-001,NiO,drop,X,2024-03-09,no such analyte",
        "000-001,*,maybe,X,9 March,neither a verdict nor a date",
        "000-00y,*,drop,,2024-03-09,no such spot and nobody",
        "000-001,CaO,drop,X,2024-03-09,a comma, not quoted",
        "000-001,,drop,X,2024-03-09,which analyte?",
        ",*,drop,X,2024-03-09,which spot?",
    )
    tables = inputs([olivine([1.0, 1.0])])
    session = session_of(tables.convert, calibrated(tables.convert, tables.calibrate, tables.spots))
    rulings, malformed = rulings_as_written(files)
    with pytest.raises(InputError) as error:
        ruling_findings(rulings, session, malformed)
    assert sorted((problem.row, problem.column) for problem in error.value.problems if problem.column) == [
        (3, "verdict"), (4, "spot"), (5, "analyte"), (6, "date"), (6, "verdict"), (7, "analyst"), (7, "spot"),
        (9, "analyte"), (10, "spot"),
    ]  # fmt: skip
    (line,) = [problem for problem in error.value.problems if not problem.column]
    assert (line.row, line.remedy) == (8, "Put a text that holds the separator in double quotes.")
    assert {problem.file for problem in error.value.problems} == {"rulings.csv"}


def test_the_stage_tells_both_kinds_together():
    found_problems = problems(["000-00x,*,drop,X,2024-03-09,no such spot", "000-001,*,maybe,X,2024-03-09,no"])
    assert [(problem.row, problem.column) for problem in found_problems] == [(3, "verdict"), (2, "spot")]


def test_a_missing_column_does_not_hide_what_else_is_wrong():
    files = ruled("000-000,*,maybe,X,crack", header="spot,analyte,verdict,analyst,reason\n")
    with pytest.raises(InputError) as error:
        read_rulings(files)
    assert [(problem.row, problem.column) for problem in error.value.problems] == [
        (1, "date"),
        (2, "verdict"),
    ]


def test_a_missing_column_is_named():
    (problem,) = problems(["000-000,*,drop,X,crack"], header="spot,analyte,verdict,analyst,reason\n")
    assert (problem.row, problem.column) == (1, "date")


def test_contradictions_are_named_whether_or_not_the_table_is_given():
    lines = ["000-000,*,drop,X,2024-03-09,crack,", "000-000,*,keep,Y,2024-03-10,no crack,spots.csv"]
    (problem,) = problems(lines, header=HEADER.replace("reason", "reason,table"))
    assert problem.row == 3
    assert "row 2" in problem.message
    with pytest.raises(InputError):
        read_rulings(ruled("a,Ni,drop,X,2024-03-09,crack", "a,Ni,keep,Y,2024-03-10,no crack"))


def test_a_label_that_occurs_in_two_tables_needs_the_table():
    blocks = [olivine([1.0], labels=["p1"], table="a.csv"), olivine([1.0], labels=["p1"], table="b.csv")]
    (problem,) = problems(["p1,*,drop,X,2024-03-09,crack"], blocks)
    assert "a.csv, b.csv" in problem.message
    files = ruled("p1,*,drop,X,2024-03-09,crack,b.csv", header=HEADER.replace("reason", "reason,table"))
    table = inputs(blocks).screen(files).tables["screen"]
    by_table = dict(zip(table.column("table").to_pylist(), table.column("use").to_pylist(), strict=True))
    assert by_table == {"a.csv": True, "b.csv": False}


def test_a_ruling_on_a_reference_spot_stands_among_the_findings_and_its_use_is_as_before():
    standard = Block(
        None, "SC", ANALYTES, OLIVINE[None], 0.003 * OLIVINE[None], material="SC", labels=["sc1"]
    )
    tables = inputs([olivine([1.0]), standard])
    for line in ("sc1,*,drop", "sc1,MgO,keep"):
        result = tables.screen(ruled(f"{line},X,2024-03-09,inclusion"))
        assert {text for (spot, _), text in why(result).items() if spot == "sc1"} == {"reference-material"}
        assert result.ledger == tables.screen().ledger
        (finding,) = result.tables["screen.findings"].to_pylist()
        assert (finding["spot"], finding["code"]) == ("sc1", "ruling")
        assert finding["detail"] == "inclusion (X, 2024-03-09)"
    (problem,) = problems(["sc1,NiO,drop,X,2024-03-09,inclusion"], [olivine([1.0]), standard])
    assert problem.column == "analyte"


def test_counts_tell_what_each_test_caught_and_what_only_it_caught():
    pyroxene_like = OLIVINE * np.array([1.4, 1.0, 0.6, 1.0, 1.0])
    values = np.stack([OLIVINE, 0.9 * pyroxene_like, 0.9 * OLIVINE, 0.92 * OLIVINE])
    block = Block("E1", "olivine", ANALYTES, values, 0.001 * values)
    files = ruled("000-003,*,keep,X,2024-03-09,fine")
    result = inputs([block]).screen(files, identity={"enabled": False})
    by_code = {
        count.code: count
        for count in counts_by_test(result.tables["screen"], result.tables["screen.findings"])
    }
    assert (by_code["total"].caught, by_code["total"].only_caught, by_code["total"].left_out) == (3, 1, 2)
    assert (by_code["cations"].caught, by_code["cations"].only_caught, by_code["cations"].left_out) == (
        1,
        0,
        1,
    )
    assert (by_code["ruling"].caught, by_code["ruling"].only_caught, by_code["ruling"].left_out) == (1, 0, 0)


def test_no_findings_give_no_counts():
    result = inputs([olivine([1.0, 1.0])]).screen()
    assert counts_by_test(result.tables["screen"], result.tables["screen.findings"]) == ()
