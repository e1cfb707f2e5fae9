"""Columns that many stage files share."""

from __future__ import annotations

from tieline.tables import Column

SPOT_KEYS = (
    Column("spot", "label", "label of the analysis, unique within its table"),
    Column("table", "label", "path of the spot table as the configuration gives it"),
    Column("row", "count", "row of the spot in its table, as a spreadsheet counts it", "1"),
    Column("technique", "label", "measuring technique, such as EPMA or laser"),
    Column("batch", "label", "measuring session; its spots share calibration errors"),
    Column(
        "experiment", "label", "experiment the charge belongs to; null for reference materials", nullable=True
    ),
    Column("phase", "label", "phase the spot was placed on; the material's name for reference materials"),
    Column("grain", "label", "grain label", nullable=True),
    Column("zone", "label", "zone label, such as rim or core", nullable=True),
    Column("distance_um", "number", "distance from the grain's edge or along a line", "um", nullable=True),
    Column("material", "label", "reference material measured, null for unknowns", nullable=True),
)
ANALYTE = Column("analyte", "label", "what the source column reports: an oxide, element or isotope")
ELEMENT = Column("element", "label", "element symbol")
VALUE_KEYS = (*SPOT_KEYS, ANALYTE)
