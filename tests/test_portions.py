"""Long tables are worked on in portions; the results do not depend on their size."""

from __future__ import annotations

from dataclasses import replace
from pathlib import Path

import numpy as np
import pyarrow as pa
import pytest

from tieline import arrays, formula_units, pair, storage
from tieline.configuration import load
from tieline.runner import run, tables_of
from tieline.screen import composition, outliers, padding
from tieline.stages import STAGES

CONFIG = Path(__file__).resolve().parents[1] / "configs" / "ember.toml"
NAMES = [name for stage in STAGES for name in stage.outputs if stage.name != "assess"]


def results(folder: Path) -> dict[str, pa.Table]:
    session = replace(load(CONFIG), run_folder=folder)
    run(session, until="partition")
    return tables_of(session, NAMES)


@pytest.fixture(scope="module")
def expected(tmp_path_factory) -> dict[str, pa.Table]:
    return results(tmp_path_factory.mktemp("whole") / "ember")


@pytest.mark.parametrize("size", [1, 700])
def test_results_do_not_depend_on_the_size_of_portions(tmp_path, monkeypatch, expected, size):
    monkeypatch.setattr(arrays.portions, "__defaults__", (size,))
    for module in (composition, outliers, padding):
        monkeypatch.setattr(module, "FEW_CELLS", size)
    monkeypatch.setattr(formula_units, "SPOTS_AT_ONCE", 8)
    monkeypatch.setattr(pair, "GROUPS_AT_ONCE", size)
    monkeypatch.setattr(storage, "ROWS_PER_ROW_GROUP", 500)
    for name, table in results(tmp_path / "ember").items():
        for column in table.column_names:
            _alike(table.column(column), expected[name].column(column), f"{name}.{column}")


def _alike(found: pa.ChunkedArray, expected: pa.ChunkedArray, where: str) -> None:
    if not pa.types.is_floating(found.type):
        assert found.to_pylist() == expected.to_pylist(), where
        return
    values = (column.to_numpy(zero_copy_only=False) for column in (found, expected))
    # A product of a matrix may add the last rows up in another order.
    np.testing.assert_allclose(*values, rtol=1e-12, atol=0, err_msg=where)
