"""Columns of `ingest` and `convert`."""

from __future__ import annotations

from tieline.columns.keys import ELEMENT, SPOT_KEYS, VALUE_KEYS
from tieline.tables import Column, TableSpec

INGEST = TableSpec(
    "ingest",
    "spot x analyte",
    (
        *VALUE_KEYS,
        Column("raw", "text", "the cell's text as it stands in the source"),
        Column(
            "value",
            "number",
            "the number read, in `unit`; null when not measured or only a limit",
            "unit",
            True,
        ),
        Column("unit", "label", "unit of value, sigma and limit: wt%, ppm or ppb"),
        Column("sigma", "number", "one standard uncertainty of the single value, absolute", "unit", True),
        Column("limit", "number", "detection limit of this analyte in this spot", "unit", True),
        Column("below_limit", "flag", "the value is below its limit, or only the limit was reported"),
    ),
)

INGEST_SPOTS = TableSpec(
    "ingest.spots",
    "spot",
    (
        *SPOT_KEYS,
        Column("sequence", "count", "place of the spot in the order of measurement within its batch", "1"),
        Column("comment", "text", "comment from the source table", nullable=True),
    ),
)

INGEST_SET_ASIDE = TableSpec(
    "ingest.set_aside",
    "cell or row that could not be used",
    (
        Column("table", "label", "path of the spot table as the configuration gives it"),
        Column("row", "count", "row in the table, as a spreadsheet counts it", "1"),
        Column("column", "text", "header of the column; null for a whole row", nullable=True),
        Column("raw", "text", "the text as it stands in the source"),
        Column("cells", "count", "how many source cells this line accounts for", "1"),
        Column("reason", "text", "why it could not be used"),
    ),
)

INGEST_EXPERIMENTS = TableSpec(
    "ingest.experiments",
    "experiment x condition",
    (
        Column("experiment", "label", "experiment"),
        Column("condition", "label", "name of the condition, with its unit, such as temperature_C"),
        Column("value", "number", "its value; null for a text", "as named", True),
        Column("text", "text", "the cell's text", nullable=True),
    ),
)

CONVERT = TableSpec(
    "convert",
    "spot x analyte",
    (
        *VALUE_KEYS,
        ELEMENT,
        Column("value_ppm", "number", "mass fraction of the element", "ug/g", True),
        Column("sigma_ppm", "number", "one standard uncertainty of the single value", "ug/g", True),
        Column("limit_ppm", "number", "detection limit as element", "ug/g", True),
        Column("below_limit", "flag", "the value is below its limit, or only the limit was reported"),
    ),
)

CONVERT_STANDARDS = TableSpec(
    "convert.standards",
    "experiment x phase x rescaled technique",
    (
        Column("experiment", "label", "experiment"),
        Column("phase", "label", "phase"),
        Column("technique", "label", "technique whose values are rescaled"),
        Column("analyte", "label", "internal standard, as the settings name it"),
        Column("actual_ppm", "number", "actual concentration of its element", "ug/g"),
        Column("relative_sd", "number", "its relative standard uncertainty; null where unknown", "1", True),
        Column("dof", "number", "degrees of freedom of that uncertainty; null for a given value", "1", True),
        Column(
            "source_technique",
            "label",
            "technique of the mean it comes from; null where given",
            nullable=True,
        ),
        Column("source_batch", "label", "batch of that mean", nullable=True),
        Column("source_analyte", "label", "analyte of that mean", nullable=True),
    ),
)

FORMULA_KEYS = tuple(
    column
    for column in SPOT_KEYS
    if column.name in ("spot", "table", "row", "technique", "experiment", "phase")
)
COMPONENT_MEANINGS = {
    "mg_number": "Mg/(Mg+Fe), molar, total iron; Fo in olivine",
    "cr_number": "Cr/(Cr+Al), molar",
    "an": "Ca/(Ca+Na+K), molar; feldspars only",
    "ab": "Na/(Ca+Na+K), molar; feldspars only",
    "or": "K/(Ca+Na+K), molar; feldspars only",
    "wo": "Ca/(Ca+Mg+Fe+Mn), molar; pyroxenes only",
    "en": "Mg/(Ca+Mg+Fe+Mn), molar; pyroxenes only, ferrosilite being the rest",
}

CONVERT_FORMULA = TableSpec(
    "convert.formula",
    "spot with a whole analysis",
    (
        *FORMULA_KEYS,
        Column("total_wt", "number", "oxide total, oxygen replaced by halogens taken off", "wt%", True),
        Column("total_sd_wt", "number", "its standard uncertainty from counting", "wt%", True),
        Column("oxygens", "number", "oxygens per formula unit; null for phases without a formula", "1", True),
        Column("cation_sum", "number", "cations per formula unit, all iron ferrous", "1", True),
        Column("cation_sum_sd", "number", "its standard uncertainty from counting", "1", True),
        Column(
            "ferric_fraction",
            "number",
            "ferric over total iron by charge balance, where asked for",
            "1",
            True,
        ),
        Column("ferric_fraction_sd", "number", "its standard uncertainty from counting", "1", True),
        *(
            column
            for name, meaning in COMPONENT_MEANINGS.items()
            for column in (
                Column(name, "number", meaning, "1", True),
                Column(f"{name}_sd", "number", "its standard uncertainty from counting", "1", True),
            )
        ),
    ),
)

CONVERT_CATIONS = TableSpec(
    "convert.cations",
    "spot with a formula x element",
    (
        *FORMULA_KEYS,
        ELEMENT,
        Column("cations", "number", "atoms per formula unit, all iron ferrous", "1"),
        Column("cations_sd", "number", "its standard uncertainty from counting", "1", True),
    ),
)
