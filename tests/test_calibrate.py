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


def calibrated(spots: list[dict], accepted: str | None = ACCEPTED, **settings):
    ingest, heads = ingest_tables(spots)
    table = convert(ingest, settings=ConvertSettings()).tables["convert"]
    files = (
        {} if accepted is None else {"accepted.csv": InputFile.from_bytes("accepted.csv", accepted.encode())}
    )
    result = calibrate(table, heads, files=files, settings=CalibrateSettings(**settings))
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
