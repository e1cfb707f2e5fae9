"""Joint and single-analyte outliers, on published data sets too; imprecise values, hiding limits, failed references."""

import numpy as np
import pytest

from screen.synthetic import Block, Inputs, found, inputs, used
from tieline.columns import CALIBRATE
from tieline.tables import build

# AMC 1989, Analyst 114:1693: copper in wholemeal flour, ppm; Abbey 1988, Geostand. Newsl. 12:241: nickel in syenite, ppm.
COPPER = [2.9, 3.1, 3.4, 3.4, 3.7, 3.7, 2.8, 2.5, 2.4, 2.4, 2.7, 2.2, 5.28, 3.37, 3.03, 3.03, 28.95, 3.77, 3.4, 2.2, 3.5,
          3.6, 3.7, 3.7]  # fmt: skip
NICKEL = [5.2, 6.5, 6.9, 7, 7, 7, 7.4, 8, 8, 8, 8, 8.5, 9, 9, 10, 11, 11, 12, 12, 13.7, 14, 14, 14, 16, 17, 17, 18, 24, 28,
          34, 125]  # fmt: skip
# Tietjen & Moore 1972, as in the NIST/SEMATECH e-Handbook 1.3.5.17.1.
GRUBBS = [199.31, 199.53, 200.19, 200.82, 201.92, 201.95, 202.18, 245.57]


def one_analyte(values, analyte="Ni"):
    column = np.array(values, dtype=float)[:, None]
    return Block(
        "E1",
        "glass",
        [analyte],
        column,
        0.01 * column,
        labels=[f"{value:g}#{at}" for at, value in enumerate(values)],
    )


def outlying_values(values, test, **settings):
    result = inputs([one_analyte(values)]).screen(outlier={"per_analyte": test, **settings})
    return sorted(float(label.split("#")[0]) for label in found(result, "outlier")), result


@pytest.mark.parametrize(
    ("values", "test", "expected"),
    [
        (COPPER, "modified-z", [5.28, 28.95]),
        (COPPER, "grubbs", [28.95]),
        (COPPER, "esd", [5.28, 28.95]),
        (NICKEL, "modified-z", [28, 34, 125]),
        (NICKEL, "grubbs", [125]),
        (GRUBBS, "grubbs", [245.57]),
        (GRUBBS, "modified-z", [245.57]),
    ],
)
def test_published_data_sets_mark_what_their_tests_say(values, test, expected):
    marked, result = outlying_values(values, test)
    assert marked == expected
    assert all(used(result).values())


def test_grubbs_reports_its_published_statistic_and_critical_value():
    _, result = outlying_values(GRUBBS, "grubbs")
    (row,) = result.tables["screen.findings"].to_pylist()
    assert row["statistic"] == pytest.approx(2.46876, abs=5e-6)
    assert row["threshold"] == pytest.approx(2.1266, abs=5e-5)
    assert row["analyte"] == "Ni"


def test_dropping_single_analytes_drops_only_them_and_warns():
    values = np.random.default_rng(5).normal(100, 3, (12, 3))
    values[4, 1] = 200
    block = Block("E1", "glass", ["Ni", "Co", "Zn"], values, 0.01 * values)
    result = inputs([block]).screen(outlier={"per_analyte": "grubbs", "action": "drop"})
    left_out = {key for key, use in used(result).items() if not use}
    assert left_out == {("000-004", "Co")}
    assert any("intervals then cover less than stated" in remark.message for remark in result.remarks)


def test_a_spot_that_stands_out_in_many_analytes_is_marked_and_stays_in_use():
    rng = np.random.default_rng(6)
    analytes = [
        "Sc",
        "V",
        "Co",
        "Ni",
        "Zn",
        "Rb",
        "Sr",
        "Y",
        "Zr",
        "Nb",
        "Ba",
        "La",
        "Ce",
        "Nd",
        "Sm",
        "Gd",
        "Dy",
        "Yb",
    ]
    values = 100 + 3 * rng.standard_normal((10, len(analytes)))
    values[7, :9] += 25
    result = inputs([Block("E1", "glass", analytes, values, np.ones_like(values))]).screen()
    assert found(result, "outlier") == {"000-007"}
    assert all(used(result).values())


def test_groups_with_few_spots_are_not_tested():
    values = np.array([[100.0] * 6, [101.0] * 6, [102.0] * 6, [500.0] * 6])
    block = Block("E1", "glass", ["Sc", "V", "Co", "Ni", "Zn", "Rb"], values, np.ones_like(values))
    assert not found(inputs([block]).screen(), "outlier")


def test_imprecise_values_are_those_above_their_limit_with_a_large_sigma():
    values = np.array([[10.0, 10.0, 1.0], [10.0, 10.0, np.nan]])
    sigmas = np.array([[1.0, 6.0, 2.0], [1.0, 4.0, np.nan]])
    limits = np.array([[3.0, 3.0, 6.0], [3.0, 3.0, 6.0]])
    result = inputs([Block("E1", "glass", ["Ni", "Co", "Zn"], values, sigmas, limits=limits)]).screen()
    rows = [row for row in result.tables["screen.findings"].to_pylist() if row["code"] == "imprecise"]
    assert [(row["spot"], row["analyte"], row["statistic"]) for row in rows] == [("000-000", "Co", 0.6)]
    assert rows[0]["action"] == "mark"


def test_without_limits_three_sigmas_stand_for_them():
    values, sigmas = np.array([[10.0, 10.0, 10.0]]), np.array([[2.0, 2.9, 4.0]])
    block = Block("E1", "glass", ["Ni", "Co", "Zn"], values, sigmas)
    rows = inputs([block]).screen(imprecise={"relative_sigma": 0.25}).tables["screen.findings"].to_pylist()
    assert [row["analyte"] for row in rows] == ["Co"]


def test_limits_above_the_melt_are_told_per_group():
    ones = np.ones((3, 2))
    glass = Block("E1", "glass", ["Ni", "Co"], ones * [2.0, 50.0], ones)
    crystal = Block("E1", "olivine", ["Ni", "Co"], ones * np.nan, ones, limits=ones * [5.0, 5.0])
    rows = inputs([glass, crystal]).screen().tables["screen.groups"].to_pylist()
    (row,) = [row for row in rows if row["test"] == "imprecise"]
    assert (row["phase"], row["detail"]) == ("olivine", "detection limit above the value of the glass: Ni")


def test_failed_reference_materials_are_remarked_by_batch():
    tables = inputs([one_analyte([10.0, 11.0, 12.0])])
    unknown = ("bias_se", "reproducibility_sd", "drift_per_spot", "drift_p", "drift_centre")
    number = {name: [None, None] for name in unknown}
    calibrate = build(
        CALIBRATE,
        {
            "technique": ["EPMA", "EPMA"], "batch": ["EPMA-1", "EPMA-1"], "element": ["Ni", "Co"], "analyte": ["Ni", "Co"],
            "n_spots": [4, 4], "n_materials": [1, 1], "bias": [1.3, 1.0], **number, "factor": [1.0, 1.0],
            "drift_applied": [0.0, 0.0], "drift_left": [0.0, 0.0], "relative_dof": [None, None],
            "relative_sd": [0.1, 0.1], "matrix_sd": [0.0, 0.0],
            "origin": ["reference materials"] * 2, "passed": [False, True],
        },
    )  # fmt: skip
    result = Inputs(tables.convert, calibrate, tables.spots).screen()
    (remark,) = result.remarks
    assert str(remark) == "EPMA-1 by EPMA: reference materials are out of tolerance for Ni"
