"""Stage `classify` on tables made by `partition`: classes follow the interval; extra classes; limits."""

from __future__ import annotations

import numpy as np
import pyarrow as pa
import pytest

from tieline.classify import classify
from tieline.columns import PARTITION
from tieline.settings.results import ClassifySettings
from tieline.statistics.means import MeanEstimate
from tieline.statistics.ratios import ratio_interval
from tieline.tables import build


def partition_table(
    D: list[float], relative_se: float = 0.02, n: int = 6, kind: str | None = None
) -> pa.Table:
    """D with a glass of 100 ppm, both means with the same relative standard error."""
    size = len(D)

    def estimate(mean: np.ndarray) -> MeanEstimate:
        dof = np.full(size, n - 1.0)
        return MeanEstimate(mean, (relative_se * mean) ** 2, np.zeros(size), dof, np.full(size, n))

    alpha, beta = np.array(D) * 100, np.full(size, 100.0)
    interval = ratio_interval(estimate(alpha), estimate(beta))
    columns: dict[str, object] = {}
    for column in PARTITION.columns:
        columns[column.name] = np.zeros(size) if column.kind == "number" else ["x"] * size
        if column.kind == "flag":
            columns[column.name] = np.ones(size, dtype=bool)
        if column.kind == "count":
            columns[column.name] = np.full(size, n)
    columns |= {"D": interval.value, "D_sd": interval.sd, "D_lo": interval.low, "D_hi": interval.high}
    columns |= {"kind": interval.kind, "confidence": np.full(size, 0.95), "interval": ["fieller"] * size}
    for side, mean in (("alpha", alpha), ("beta", beta)):
        columns |= {
            f"mean_{side}_ppm": mean,
            f"se_{side}_ppm": relative_se * mean,
            f"dof_{side}": np.full(size, n - 1.0),
        }
    if kind == "upper-limit":
        columns |= {"D": np.full(size, np.nan), "D_lo": np.zeros(size), "D_hi": np.array(D)}
        columns |= {"kind": [kind] * size, "interval": ["likelihood"] * size}
    return build(PARTITION, columns)


def classes(table: pa.Table, **settings: object) -> list[str]:
    result = classify(table, settings=ClassifySettings(**settings))
    result.ledger.check("classify")
    return result.tables["classify"].column("class").to_pylist()


def test_plain_classes_and_unresolved_at_the_boundary():
    assert classes(partition_table([5.0, 1.0, 0.2, 0.0101, 0.001])) == [
        "compatible",
        "unresolved",
        "incompatible",
        "unresolved",
        "highly incompatible",
    ]


def test_a_class_is_declared_exactly_when_the_interval_lies_inside_it():
    values = list(np.geomspace(0.005, 2.0, 400))
    table = partition_table(values)
    for row in classify(table, settings=ClassifySettings()).tables["classify"].to_pylist():
        bounds = {"highly incompatible": (0, 0.01), "incompatible": (0.01, 1), "compatible": (1, np.inf)}
        inside = [name for name, (low, high) in bounds.items() if low <= row["D_lo"] and row["D_hi"] <= high]
        assert row["class"] == (inside[0] if inside else "unresolved")
        assert row["p_compatible"] + row["p_incompatible"] + row["p_highly_incompatible"] == pytest.approx(1)


def test_boundaries_are_settings():
    assert classes(partition_table([0.05]), highly_incompatible_below=0.1) == ["highly incompatible"]
    with pytest.raises(ValueError, match="smaller"):
        ClassifySettings(highly_incompatible_below=2.0)


def test_extra_classes_take_the_narrowest_that_holds():
    extra = {"slightly incompatible": (0.1, 1.0), "nearly even": (0.5, 0.9)}
    expected = ["slightly incompatible", "nearly even", "incompatible"]
    assert classes(partition_table([0.3, 0.7, 0.05]), extra=extra) == expected
    with pytest.raises(ValueError, match="low < high"):
        ClassifySettings(extra={"odd": (1.0, 0.5)})


def test_an_upper_limit_is_classed_by_where_the_limit_lies():
    assert classes(partition_table([0.004, 0.3, 3.0], kind="upper-limit")) == [
        "highly incompatible",
        "unresolved",
        "unresolved",
    ]
