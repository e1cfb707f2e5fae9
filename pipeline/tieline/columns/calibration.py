"""Columns of `calibrate`."""

from __future__ import annotations

from tieline.columns.keys import ANALYTE, ELEMENT
from tieline.tables import Column, TableSpec

CALIBRATE = TableSpec(
    "calibrate",
    "batch x element, and analyte where an element has several",
    (
        Column("technique", "label", "measuring technique"),
        Column("batch", "label", "measuring session"),
        ELEMENT,
        ANALYTE,
        Column("n_spots", "count", "reference-material spots that measured the element", "1"),
        Column("n_materials", "count", "reference materials with an accepted value", "1"),
        Column("bias", "number", "measured over accepted, weighted over materials", "1", True),
        Column(
            "bias_se",
            "number",
            "standard error of the bias, accepted values' uncertainty included",
            "1",
            True,
        ),
        Column(
            "reproducibility_sd",
            "number",
            "relative spread between reference spots beyond counting",
            "1",
            True,
        ),
        Column("drift_per_spot", "number", "relative change per place in the run order", "1", True),
        Column("drift_p", "number", "p-value of no drift", "1", True),
        Column(
            "drift_centre", "number", "place in the run order at which the drift correction is one", "1", True
        ),
        Column("factor", "number", "values of the batch are divided by this", "1"),
        Column("drift_applied", "number", "relative drift per place that is removed from the values", "1"),
        Column(
            "relative_sd",
            "number",
            "relative standard uncertainty shared by all spots of the batch",
            "1",
            True,
        ),
        Column(
            "relative_dof",
            "number",
            "degrees of freedom of relative_sd; null where it is configured or no standard error",
            "1",
            True,
        ),
        Column(
            "drift_left",
            "number",
            "relative drift per place that the data support and that stays in the values",
            "1",
        ),
        Column("matrix_sd", "number", "relative standard uncertainty not shared between phases", "1"),
        Column("origin", "label", "where relative_sd comes from: reference materials, configured or unknown"),
        Column(
            "passed",
            "flag",
            "bias within the laboratory's own limit; null without reference material",
            "",
            True,
        ),
    ),
)

CALIBRATE_MATERIALS = TableSpec(
    "calibrate.materials",
    "batch x reference material x element",
    (
        Column("technique", "label", "measuring technique"),
        Column("batch", "label", "measuring session"),
        Column("material", "label", "reference material"),
        ELEMENT,
        ANALYTE,
        Column("n_spots", "count", "spots that measured the element and were not ruled out", "1"),
        Column("measured_ppm", "number", "mean of the measured values", "ug/g", True),
        Column("measured_se_ppm", "number", "standard error of that mean", "ug/g", True),
        Column("accepted_ppm", "number", "accepted value as element", "ug/g", True),
        Column("accepted_sd_ppm", "number", "standard uncertainty of the accepted value", "ug/g", True),
        Column("ratio", "number", "measured over accepted", "1", True),
        Column("ratio_se", "number", "standard uncertainty of the ratio", "1", True),
        Column("source", "text", "source and version of the accepted value", nullable=True),
        Column("passed", "flag", "ratio within the laboratory's own limit", "", True),
    ),
)
