"""Every column of every stage file. Adding a column is one line here and one in the stage that fills it."""

from __future__ import annotations

from tieline.columns.calibration import CALIBRATE, CALIBRATE_MATERIALS
from tieline.columns.coefficients import (
    CLASSIFY,
    PARTITION,
    PARTITION_ALTERNATIVES,
    PARTITION_COVARIANCE,
    PARTITION_KEYS,
    PARTITION_VALUES,
)
from tieline.columns.evidence import (
    ASSESS,
    ASSESS_BALANCE,
    ASSESS_BULK,
    ASSESS_CURVES,
    ASSESS_ELEMENTS,
    ASSESS_EXCHANGE,
    ASSESS_PROPORTIONS,
    ASSESS_TREND_POINTS,
    ASSESS_TRENDS,
    EVIDENCE,
)
from tieline.columns.keys import ANALYTE, ELEMENT, SPOT_KEYS, VALUE_KEYS
from tieline.columns.means import PAIR, PAIR_CORRELATIONS, PAIR_LIMITS, PAIR_TECHNIQUES, PAIRS
from tieline.columns.screening import FINDINGS, SCREEN, SCREEN_GROUPS
from tieline.columns.values import (
    COMPONENT_MEANINGS,
    CONVERT,
    CONVERT_CATIONS,
    CONVERT_FORMULA,
    CONVERT_STANDARDS,
    FORMULA_KEYS,
    INGEST,
    INGEST_EXPERIMENTS,
    INGEST_SET_ASIDE,
    INGEST_SPOTS,
)
from tieline.tables import TableSpec

__all__ = [
    "ANALYTE",
    "ASSESS",
    "ASSESS_BALANCE",
    "ASSESS_BULK",
    "ASSESS_CURVES",
    "ASSESS_ELEMENTS",
    "ASSESS_EXCHANGE",
    "ASSESS_PROPORTIONS",
    "ASSESS_TRENDS",
    "ASSESS_TREND_POINTS",
    "CALIBRATE",
    "CALIBRATE_MATERIALS",
    "CLASSIFY",
    "COMPONENT_MEANINGS",
    "CONVERT",
    "CONVERT_CATIONS",
    "CONVERT_FORMULA",
    "CONVERT_STANDARDS",
    "ELEMENT",
    "EVIDENCE",
    "FINDINGS",
    "FORMULA_KEYS",
    "INGEST",
    "INGEST_EXPERIMENTS",
    "INGEST_SET_ASIDE",
    "INGEST_SPOTS",
    "PAIR",
    "PAIRS",
    "PAIR_CORRELATIONS",
    "PAIR_LIMITS",
    "PAIR_TECHNIQUES",
    "PARTITION",
    "PARTITION_ALTERNATIVES",
    "PARTITION_COVARIANCE",
    "PARTITION_KEYS",
    "PARTITION_VALUES",
    "SCREEN",
    "SCREEN_GROUPS",
    "SPOT_KEYS",
    "TABLES",
    "VALUE_KEYS",
]

TABLES: dict[str, TableSpec] = {
    spec.name: spec
    for spec in (
        INGEST,
        INGEST_SPOTS,
        INGEST_SET_ASIDE,
        INGEST_EXPERIMENTS,
        CONVERT,
        CONVERT_STANDARDS,
        CONVERT_FORMULA,
        CONVERT_CATIONS,
        CALIBRATE,
        CALIBRATE_MATERIALS,
        SCREEN,
        FINDINGS,
        SCREEN_GROUPS,
        PAIR,
        PAIRS,
        PAIR_LIMITS,
        PAIR_CORRELATIONS,
        PAIR_TECHNIQUES,
        PARTITION,
        PARTITION_ALTERNATIVES,
        PARTITION_COVARIANCE,
        CLASSIFY,
        *EVIDENCE,
    )
}
