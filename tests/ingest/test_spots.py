"""Labels of the spots: phases, reference materials, label patterns, duplicates, order of measurement."""

from __future__ import annotations

from typing import Any

import pytest
from pydantic import ValidationError

from ingest.tables import COLUMNS, lines, problems, remarks, run
from tieline.results import StageResult
from tieline.settings.ingest import IngestSettings


def spots(result: StageResult, *columns: str) -> list[tuple[Any, ...]]:
    chosen = [result.tables["ingest.spots"].column(name).to_pylist() for name in columns]
    return list(zip(*chosen, strict=True))


def test_phases_by_spelling_abbreviation_and_case():
    text = "Point,Run,Phase,MgO\n1,A,OL,1\n2,A,quenched melt,1\n3,A,Cpx ,1\n4,A,olivinne,1\n5,A,zzz,1\n"
    result = run(text, phases={"glass": ["gl", "quenched melt"]})
    assert spots(result, "phase") == [("olivine",), ("glass",), ("clinopyroxene",), ("olivinne",), ("zzz",)]
    assert 'phase "olivinne" (1 spots) is not known and kept as it is. Nearest: olivine' in remarks(result)
    assert 'phase "zzz" (1 spots) is not known and kept as it is. Nothing known comes near.' in remarks(
        result
    )


def test_one_spelling_for_two_phases_is_refused():
    text = "Point,Run,Phase,MgO\n1,A,gl,1\n"
    found = problems(text, phases={"glass": ["melt"], "liquid": ["Melt"]})
    assert "given to both" in str(found[0])
    found = problems(text, reference_materials={"names": {"R1": ["std"], "R2": ["STD"]}})
    assert "given to both" in str(found[0])


def test_reference_materials_by_phase_experiment_and_spot_label():
    text = (
        "Point,Run,Phase,MgO\nRG-1,A,glass,1\nx,rg-1,glass,1\ny,A,RG-1,1\nz,,Ref glass,1\nRG-1 start,,x,1\n"
        "chip 7,,,1\nw,A,glass,1\n"
    )
    names = {"RG-1": ["ref glass", "rg-1 *"], "Chip": ["chip*"]}
    result = run(text, reference_materials={"names": names})
    assert spots(result, "experiment", "phase", "material") == [
        *[(None, "RG-1", "RG-1")] * 5,
        (None, "Chip", "Chip"),
        ("A", "glass", None),
    ]


@pytest.mark.parametrize(
    "label",
    ["RG-1", "rg\N{NO-BREAK SPACE}\N{NO-BREAK SPACE}2", "RG-1  b", "STRA\N{LATIN SMALL LETTER SHARP S}E 4"],
)
def test_a_material_is_known_in_any_spelling_that_folding_makes_the_same(label):
    """A combined label is not cleaned before, so that what stands between the marks comes as it is."""
    text = f"Label,MgO\nA_glass_1,1\nA_glass_{label},1\n"
    pattern = {"column": "Label", "pattern": "(?P<experiment>[^_]+)_(?P<phase>[^_]+)_(?P<spot>.+)"}
    names = {"RG-1": ["rg 2", "rg-1 *"], "S": ["strasse*"]}
    result = run(text, {"columns": {}, "labels": pattern}, reference_materials={"names": names})
    assert [material is not None for (material,) in spots(result, "material")] == [False, True]


def test_labels_are_split_by_a_pattern():
    text = "Label,MgO\nTX07-ol3-rim-2,1\nTX08-gl-9,2\nTX09-cpx1-12um-4,3\n"
    pattern = (
        r"(?P<experiment>TX\d+)-(?P<phase>ol|gl|cpx)(?P<grain>\d+)?(-(?P<zone>rim|core))?"
        r"(-(?P<distance_um>\d+)um)?-(?P<spot>\d+)"
    )
    result = run(text, {"columns": {}, "labels": {"column": "Label", "pattern": pattern}})
    assert spots(result, "spot", "experiment", "phase", "grain", "zone", "distance_um") == [
        ("2", "TX07", "olivine", "3", "rim", None),
        ("9", "TX08", "glass", None, None, None),
        ("4", "TX09", "clinopyroxene", "1", None, 12.0),
    ]


def test_labels_that_do_not_fit_the_pattern():
    text = "Label,MgO\nTX07-ol-2,1\nnonsense,2\n"
    table = {
        "columns": {},
        "labels": {"column": "Label", "pattern": r"(?P<experiment>\w+)-(?P<phase>\w+)-(?P<spot>\d+)"},
    }
    found = problems(text, table)
    assert [(problem.row, problem.message) for problem in found] == [
        (3, "the label does not fit the label pattern.")
    ]
    result = run(text, table, on_unreadable="set-aside")
    assert len(spots(result, "spot")) == 1
    assert result.ledger.outcomes["set aside"] == 2


@pytest.mark.parametrize("pattern", ["(", "(?P<colour>x)", "no groups"])
def test_label_patterns_that_cannot_work(pattern: str):
    with pytest.raises(ValidationError):
        IngestSettings.model_validate(
            {"tables": [{"path": "t.csv", "labels": {"column": "L", "pattern": pattern}}]}
        )


def test_a_label_given_twice_is_refused():
    table = {
        "path": "t.csv",
        "columns": {"phase": "P"},
        "labels": {"column": "L", "pattern": "(?P<phase>.*)"},
    }
    with pytest.raises(ValidationError, match="both by columns and by the label pattern"):
        IngestSettings.model_validate({"tables": [table]})


def test_duplicate_spots_stop_or_are_numbered():
    text = "Point,Run,Phase,MgO\na,A,gl,1\nb,A,gl,2\na,A,gl,3\na (2),A,gl,4\na,A,gl,5\n"
    found = problems(text)
    assert [str(problem) for problem in found] == [
        't.csv, row 4, column "Point": the spot label "a" stands in rows 2, 4 and 6. '
        'Rename them, or set on_duplicate_spot = "number" in [ingest].'
    ]
    result = run(text, on_duplicate_spot="number")
    assert spots(result, "spot", "row") == [("a", 2), ("b", 3), ("a (3)", 4), ("a (2)", 5), ("a (4)", 6)]
    assert 'the spot label "a" stands in rows 2, 4 and 6' in remarks(result)
    two_rows = text[: text.index("a,A,gl,3")]
    assert run({"t.csv": two_rows, "u.csv": two_rows})  # labels may repeat between tables


def test_spots_without_a_label_column_are_named_by_their_row():
    result = run("Run,Phase,MgO\nA,gl,1\nA,gl,2\n", {"columns": {"experiment": "Run", "phase": "Phase"}})
    assert spots(result, "spot", "row") == [("2", 2), ("3", 3)]


def test_missing_labels():
    text = "Point,Run,Phase,MgO\n,A,gl,1\n2,,gl,2\n3,A,,3\n4,A,gl,4\n"
    assert [(problem.row, problem.message) for problem in problems(text)] == [
        (2, "no spot label."),
        (3, "no experiment label."),
        (4, "no phase label."),
    ]
    result = run(text, on_unreadable="set-aside")
    assert spots(result, "spot") == [("4",)]
    assert result.ledger.outcomes["set aside"] == 12
    assert "1 line set aside: no phase label" in remarks(result)


def test_cells_of_unlabelled_rows_are_told_as_well():
    found = problems("Point,Run,Phase,MgO\n1,,gl,x\n2,A,gl,y\n")
    assert [(problem.row, problem.column) for problem in found] == [(2, None), (2, "MgO"), (3, "MgO")]


def test_no_column_tells_the_experiment():
    text = "Point,Phase,MgO\n1,gl,1\n2,gl,2\n"
    columns = {"spot": "Point", "phase": "Phase"}
    found = problems(text, {"columns": columns})
    assert [problem.message for problem in found] == ["no column tells the experiment."]
    result = run(text, {"columns": columns, "experiment": "TX1"})
    assert spots(result, "experiment") == [("TX1",), ("TX1",)]


def test_batches_techniques_and_comments():
    text = 'Point,Run,Phase,Day,Tool,Note,MgO\n1,A,gl,d1,EPMA,,1\n2,A,gl,,laser,"dull, pitted",2\n'
    columns = {**COLUMNS, "batch": "Day", "technique": "Tool", "comment": "Note"}
    result = run({"data/probe 1.csv": text}, {"columns": columns})
    assert spots(result, "batch", "technique", "comment") == [
        ("d1", "EPMA", None),
        ("probe 1", "laser", "dull, pitted"),
    ]


def test_order_of_measurement():
    head = "Point,Run,Phase,When,MgO\n"
    columns = {**COLUMNS, "sequence": "When"}
    result = run(head + "1,A,gl,30,1\n2,A,gl,10,2\n3,A,gl,20,3\n", {"columns": columns})
    assert spots(result, "sequence") == [(3,), (1,), (2,)]
    result = run(head + "1,A,gl,2024-03-01T12:00,1\n2,A,gl,2024-02-29 23:59:59,2\n", {"columns": columns})
    assert spots(result, "sequence") == [(2,), (1,)]
    found = problems(head + "1,A,gl,soon,1\n2,A,gl,2,2\n", {"columns": columns})
    assert (found[0].row, found[0].column) == (2, "When")


def test_order_of_measurement_over_tables_of_one_batch():
    head = "Point,Run,Phase,When,MgO\n"
    texts = {"a.csv": head + "1,A,gl,3,1\n2,A,gl,1,2\n", "b.csv": head + "3,A,gl,4,3\n4,A,gl,2,4\n"}
    columns = {**COLUMNS, "sequence": "When"}
    assert spots(run(texts, {"columns": columns, "batch": "b"}), "sequence") == [(3,), (1,), (4,), (2,)]
    assert spots(run(texts, {"columns": columns}), "sequence") == [(2,), (1,), (2,), (1,)]
    by_row = {**COLUMNS, "ignore": ["When"]}
    assert spots(run(texts, {"columns": by_row, "batch": "b"}), "sequence") == [(1,), (2,), (3,), (4,)]


def test_distances():
    text = "Point,Run,Phase,Rim,MgO\n1,A,gl,12.5,1\n2,A,gl,,2\n3,A,gl,7 µm,3\n4,A,gl,near,4\n"
    columns = {**COLUMNS, "distance_um": "Rim"}
    found = problems(text, {"columns": columns})
    assert [(problem.row, problem.column) for problem in found] == [(5, "Rim")]
    result = run(text, {"columns": columns}, on_unreadable="set-aside")
    assert lines(result, "distance_um") == [(12.5,), (None,), (7.0,), (None,)]


def test_similar_experiment_labels_are_told():
    result = run("Point,Run,Phase,MgO\n1,TX-7,gl,1\n2,tx7,gl,2\n")
    assert "experiments TX-7, tx7 differ only in case" in remarks(result)
