"""Sessions with hardly anything in them, and values no instrument should give."""

import numpy as np
import pytest

from screen.synthetic import Block, Inputs, inputs, used
from tieline.columns import CALIBRATE, CONVERT, INGEST_SPOTS
from tieline.tables import empty

ANALYTES = ["SiO2", "FeO", "MgO", "CaO", "MnO"]
OLIVINE = np.array([[190700.0, 76200.0, 296100.0, 1430.0, 1160.0]])


def test_nothing_at_all_gives_empty_tables():
    result = Inputs(empty(CONVERT), empty(CALIBRATE), empty(INGEST_SPOTS)).screen()
    assert [table.num_rows for table in result.tables.values()] == [0, 0, 0]
    result.ledger.check("screen")


def test_reference_materials_alone_are_never_used():
    block = Block(None, "SC", ANALYTES, OLIVINE, 0.01 * OLIVINE, material="SC")
    result = inputs([block]).screen()
    assert not any(used(result).values())
    assert result.ledger.outcomes == {"used": 0, "reference-material": 5, "not-measured": 0}


@pytest.mark.parametrize("spots", [1, 2, 3])
@pytest.mark.parametrize("phase", ["olivine", "glass", "unobtainium"])
def test_one_small_group_is_used(spots, phase):
    values = np.tile(OLIVINE, (spots, 1))
    result = inputs([Block("E1", phase, ANALYTES, values, 0.01 * values)]).screen()
    assert all(used(result).values())


def test_an_unknown_without_experiment_is_no_defect():
    values = np.tile(OLIVINE, (3, 1))
    result = inputs([Block(None, "olivine", ANALYTES, values, 0.01 * values)]).screen()
    assert {row["experiment"] for row in result.tables["screen.groups"].to_pylist()} == {""}


def test_zeros_negatives_and_unknown_sigmas_raise_nothing():
    rng = np.random.default_rng(8)
    values = np.tile(OLIVINE, (8, 1)) * (1 + 0.01 * rng.standard_normal((8, 5)))
    values[:, 3] = 0.0
    values[:, 4] = -rng.random(8)
    sigmas = 0.01 * np.abs(values)
    sigmas[:, 2] = np.nan
    glass = np.tile(OLIVINE * [1.2, 1.0, 0.2, 60, 1.0], (8, 1)) * (1 + 0.01 * rng.standard_normal((8, 5)))
    glass[:, 4] = 0.0
    blocks = [
        Block("E1", "olivine", ANALYTES, values, sigmas, distance_um=list(range(8)), grain=["a"] * 8),
        Block("E1", "glass", ANALYTES, glass, np.zeros_like(glass)),
    ]
    for use in ("drop", "unmix"):
        result = inputs(blocks).screen(overlap={"use": use}, outlier={"per_analyte": "esd"})
        result.ledger.check("screen")


def test_an_analyte_of_only_one_phase_takes_no_part():
    rng = np.random.default_rng(9)
    values = np.tile(OLIVINE, (6, 1)) * (1 + 0.01 * rng.standard_normal((6, 5)))
    glass = values[:, :3] * [1.2, 1.0, 0.2]
    blocks = [
        Block("E1", "olivine", ANALYTES, values, 0.01 * values),
        Block("E1", "glass", ANALYTES[:3], glass, 0.01 * glass),
    ]
    result = inputs(blocks).screen(
        total={"enabled": False}, identity={"enabled": False}, cations={"enabled": False}
    )
    assert all(used(result).values())
