"""Stage `calibrate`: bias, its uncertainty, drift, configured values, pass and fail."""

from __future__ import annotations

import numpy as np
import pytest

from stage_tables import ingest_tables, spot
from tieline.calibrate import calibrate
from tieline.convert import convert
from tieline.errors import InputError
from tieline.reading.input_file import InputFile
from tieline.settings.chemistry import CalibrateSettings, ConvertSettings

ACCEPTED = "material,analyte,value,unit,sd,source\nREF-A,Ni,100,ppm,1,invented v1\nREF-B,NiO,0.0254,wt%,0,invented v1\n"
KEYS = {"technique": "laser", "batch": "laser-1", "unit": "ppm"}


def reference(values: list[float], material: str = "REF-A", sigma: float = 1.0) -> list[dict]:
    keys = {**KEYS, "phase": material, "experiment": None, "material": material}
    return [spot(f"{material}{n}", {"Ni60": (value, sigma)}, **keys) for n, value in enumerate(values)]


def unknowns() -> list[dict]:
    return [spot(f"u{n}", {"Ni60": (50.0, 1.0), "La139": (5.0, 0.1)}, **KEYS) for n in range(3)]


HEADER = "spot,analyte,verdict,analyst,date,reason\n"


def ruled(*lines: str) -> dict[str, InputFile]:
    text = HEADER + "".join(f"{line},A. Nalyst,2024-03-09,inclusion\n" for line in lines)
    return {"rulings.csv": InputFile.from_bytes("rulings.csv", text.encode())}


def calibrated(
    spots: list[dict],
    accepted: str | None = ACCEPTED,
    rulings: dict[str, InputFile] | None = None,
    **settings,
):
    ingest, heads = ingest_tables(spots)
    table = convert(ingest, settings=ConvertSettings()).tables["convert"]
    files = (
        {} if accepted is None else {"accepted.csv": InputFile.from_bytes("accepted.csv", accepted.encode())}
    )
    result = calibrate(table, heads, files=files, rulings=rulings, settings=CalibrateSettings(**settings))
    result.ledger.check("calibrate")
    rows = result.tables["calibrate"].to_pylist()
    return {row["element"]: row for row in rows}, result


def test_bias_and_its_standard_error():
    values = [104.0, 106.0, 105.0, 105.5, 104.5]
    rows, result = calibrated([*reference(values), *unknowns()])
    nickel = rows["Ni"]
    assert nickel["bias"] == pytest.approx(1.05, rel=1e-9)
    # The mean's standard error and the accepted value's 1 ppm, in quadrature.
    measured = np.std(values, ddof=1) / np.sqrt(5) / 100
    assert nickel["bias_se"] == pytest.approx(np.hypot(measured, 0.01 * 1.05), rel=1e-6)
    assert nickel["relative_sd"] == pytest.approx(np.hypot(0.05, nickel["bias_se"]), rel=1e-9)
    assert nickel["factor"] == 1.0
    assert nickel["origin"] == "reference materials"
    assert result.tables["calibrate.materials"].to_pylist()[0]["source"] == "invented v1"


def test_correction_divides_and_leaves_the_bias_uncertainty():
    rows, _ = calibrated([*reference([105.0, 106.0, 104.0]), *unknowns()], correct="bias")
    assert rows["Ni"]["factor"] == pytest.approx(1.05)
    assert rows["Ni"]["relative_sd"] == pytest.approx(rows["Ni"]["bias_se"] / 1.05)


def test_configured_value_where_no_reference_tells_and_unknown_otherwise():
    rows, _ = calibrated([*reference([100.0, 101.0]), *unknowns()], relative_sd={"laser": 0.03})
    assert rows["La"]["origin"] == "configured"
    assert rows["La"]["relative_sd"] == 0.03
    assert rows["La"]["passed"] is None
    rows, _ = calibrated(unknowns(), accepted=None)
    assert rows["La"]["origin"] == "unknown"
    assert rows["La"]["relative_sd"] is None


def test_two_materials_agree_in_the_mean():
    # 0.0254 wt% NiO is 199.6 ppm Ni.
    accepted = 254 * 58.6934 / 74.6924
    rows, _ = calibrated(
        [*reference([102.0, 102.5, 101.5]), *reference([accepted * 1.02] * 3, "REF-B"), *unknowns()]
    )
    assert rows["Ni"]["n_materials"] == 2
    assert rows["Ni"]["bias"] == pytest.approx(1.02, rel=1e-3)


def test_failed_reference_material_is_remarked():
    rows, result = calibrated([*reference([130.0, 131.0, 129.0]), *unknowns()])
    assert rows["Ni"]["passed"] is False
    assert any("outside" in str(remark) and "Ni" in str(remark) for remark in result.remarks)


def test_drift_is_found_reported_and_applied_only_on_request():
    drifting = reference([100.0 + 0.8 * n + 0.05 * (-1) ** n for n in range(12)])
    rows, _ = calibrated([*drifting, *unknowns()])
    assert rows["Ni"]["drift_p"] < 1e-6
    assert rows["Ni"]["drift_per_spot"] == pytest.approx(0.8 / 104.4, rel=0.02)
    assert rows["Ni"]["drift_applied"] == 0.0
    rows, _ = calibrated([*drifting, *unknowns()], correct="bias+drift")
    assert rows["Ni"]["drift_applied"] == rows["Ni"]["drift_per_spot"]


def test_drift_false_alarms_hold_the_stated_level():
    random = np.random.default_rng(711)
    found = 0
    for _ in range(300):
        rows, _ = calibrated(reference(list(100 + random.standard_normal(8))))
        found += rows["Ni"]["drift_p"] < 0.05
    assert 4 <= found <= 30  # 15 expected; outside with probability below 1e-3


def test_every_problem_of_the_accepted_values_at_once():
    bad = "material,analyte,value,unit,sd,source\nREF-A,Xx,100,ppm,1,v\nREF-A,Ni,-5,ppm,1,v\nREF-A,Ni,5,furlong,1,v\n"
    with pytest.raises(InputError) as caught:
        calibrated(unknowns(), accepted=bad)
    assert [(problem.row, problem.column) for problem in caught.value.problems] == [
        (2, "analyte"),
        (3, "value"),
        (4, "unit"),
    ]


def test_a_reference_spot_that_is_ruled_out_is_as_if_it_were_not_in_the_table():
    others = [
        *reference([199.0, 203.0, 201.0], "REF-B"),
        *unknowns(),
        *reference([104.0, 106.0, 105.5, 104.5]),
    ]
    inclusion = spot("inclusion", {"Ni60": (180.0, 1.0)}, **{**KEYS, "phase": "REF-A", "material": "REF-A"})
    without, plain = calibrated(others, correct="bias")
    with_it, _ = calibrated([*others, inclusion], correct="bias")
    rows, result = calibrated([*others, inclusion], correct="bias", rulings=ruled("inclusion,*,drop"))
    assert rows == without
    assert rows["Ni"]["factor"] != with_it["Ni"]["factor"]
    materials = result.tables["calibrate.materials"].to_pylist()
    assert materials == plain.tables["calibrate.materials"].to_pylist()
    assert {row["material"]: row["n_spots"] for row in materials} == {"REF-A": 4, "REF-B": 3}
    assert result.ledger.outcomes["reference values ruled out"] == 1
    assert result.ledger.outcomes["reference values not measured"] == 0
    assert "reference values ruled out" not in plain.ledger.outcomes


def test_a_ruling_on_an_analyte_of_a_reference_spot_leaves_the_others():
    def both(nickel: list[float], lead: list[float]) -> list[dict]:
        keys = {**KEYS, "phase": "REF-A", "experiment": None, "material": "REF-A"}
        return [
            spot(f"r{n}", {"Ni60": (value, 1.0), "Pb208": (other, 0.5)}, **keys)
            for n, (value, other) in enumerate(zip(nickel, lead, strict=True))
        ]

    accepted = ACCEPTED + "REF-A,Pb,10,ppm,0,invented v1\n"
    spots = both([101.0, 99.0, 160.0], [10.2, 10.1, 10.4])
    for lines in (["r2,Ni60,drop"], ["r2,*,drop", "r2,Pb208,keep"]):
        rows, _ = calibrated([*spots, *unknowns()], accepted, ruled(*lines))
        assert (rows["Ni"]["bias"], rows["Ni"]["n_spots"]) == (pytest.approx(1.0), 2)
        assert (rows["Pb"]["bias"], rows["Pb"]["n_spots"]) == (pytest.approx(1.0233, abs=1e-3), 3)


@pytest.mark.parametrize("lines", [["u0,*,drop"], ["u0,Ni60,drop", "u1,*,keep"], ["REF-A1,*,keep"]])
def test_rulings_on_unknowns_and_keep_on_references_change_nothing(lines):
    spots = [*reference([104.0, 106.0, 105.0]), *unknowns()]
    _, plain = calibrated(spots)
    _, result = calibrated(spots, rulings=ruled(*lines))
    assert result == plain


def test_a_material_whose_every_spot_is_ruled_out_is_remarked_for_what_it_is():
    spots = [*reference([104.0, 106.0]), *reference([199.0, 203.0], "REF-B"), *unknowns()]
    rows, result = calibrated(spots, rulings=ruled("REF-A0,*,drop", "REF-A1,*,drop"))
    assert rows["Ni"]["n_materials"] == 1
    texts = [remark.message for remark in result.remarks if remark.place == "REF-A"]
    assert texts == ["every measured value of it was ruled out"]


def test_what_is_wrong_with_accepted_values_and_with_rulings_is_told_together():
    rulings = ruled("nobody,*,drop", "REF-A0,Ni60,perhaps", "REF-A0,La139,drop")
    with pytest.raises(InputError) as error:
        calibrated(reference([104.0]), "material,analyte,value,unit,sd\nREF-A,Ni,-1,ppm,1\n", rulings)
    assert {(problem.file, problem.row, problem.column) for problem in error.value.problems} == {
        ("accepted.csv", 2, "value"), ("rulings.csv", 2, "spot"), ("rulings.csv", 3, "verdict"),
        ("rulings.csv", 4, "analyte"),
    }  # fmt: skip
