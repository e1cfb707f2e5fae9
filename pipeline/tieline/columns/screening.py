"""Columns of `screen`."""

from __future__ import annotations

from tieline.columns.keys import ELEMENT, VALUE_KEYS
from tieline.tables import Column, TableSpec

SCREEN = TableSpec(
    "screen",
    "spot x analyte",
    (
        *VALUE_KEYS,
        ELEMENT,
        Column("use", "flag", "the value enters the phase mean"),
        Column("why", "label", "what keeps it out: finding codes or `ruling`; empty when used"),
        Column(
            "unmixed_ppm",
            "number",
            "what stands for the value in a phase mean once overlap is taken out; null: the value itself",
            "ug/g",
            True,
        ),
        Column(
            "unmixed_sigma_ppm",
            "number",
            "standard uncertainty of the single unmixed value, that of its own fraction included",
            "ug/g",
            True,
        ),
        Column(
            "unmixed_shared_ppm",
            "number",
            "standard uncertainty common to all unmixed values of the group, which averaging does not reduce",
            "ug/g",
            True,
        ),
    ),
)

FINDINGS = TableSpec(
    "screen.findings",
    "finding",
    (
        Column("spot", "label", "label of the analysis"),
        Column("table", "label", "path of the spot table"),
        Column("row", "count", "row in the table", "1"),
        Column("experiment", "label", "experiment", nullable=True),
        Column("phase", "label", "phase"),
        Column("analyte", "label", "analyte the finding is about; null for the whole spot", nullable=True),
        Column("code", "label", "which test, or `ruling`"),
        Column("statistic", "number", "the test's statistic", "1", True),
        Column("threshold", "number", "what the statistic was held against", "1", True),
        Column("p_value", "number", "p-value where the test has one", "1", True),
        Column("action", "label", "drop, mark or keep"),
        Column("detail", "text", "the finding in words"),
    ),
)

SCREEN_GROUPS = TableSpec(
    "screen.groups",
    "experiment x phase x technique x test",
    (
        Column("experiment", "label", "experiment"),
        Column("phase", "label", "phase"),
        Column("technique", "label", "measuring technique"),
        Column("test", "label", "which test speaks"),
        Column("n_spots", "count", "spots the test could judge", "1"),
        Column(
            "statistic",
            "number",
            "the group's statistic, such as the smallest overlap fraction visible",
            "1",
            True,
        ),
        Column("threshold", "number", "what it was held against", "1", True),
        Column("p_value", "number", "p-value where the test has one", "1", True),
        Column("verdict", "label", "found, not found, or cannot tell"),
        Column("detail", "text", "the result in words"),
    ),
)
