"""Columns of `pair`."""

from __future__ import annotations

from tieline.columns.keys import ELEMENT
from tieline.tables import Column, TableSpec

PAIR = TableSpec(
    "pair",
    "experiment x phase x element x batch",
    (
        Column("experiment", "label", "experiment"),
        Column("phase", "label", "phase"),
        ELEMENT,
        Column("technique", "label", "measuring technique"),
        Column("batch", "label", "measuring session"),
        Column("analyte", "label", "source column of the element"),
        Column("n_used", "count", "values in the mean", "1"),
        Column("n_left_out", "count", "values left out by a finding or ruling, or not measured", "1"),
        Column("n_below_limit", "count", "used values that are below their limit", "1"),
        Column("n_limit_only", "count", "used values of which only the limit is known", "1"),
        Column("mean_ppm", "number", "phase mean; null when every used value is only a limit", "ug/g", True),
        Column("se_ppm", "number", "standard error of the mean, counting and spread", "ug/g", True),
        Column("counting_se_ppm", "number", "the part of se_ppm that counting alone explains", "ug/g", True),
        Column("dof", "number", "degrees of freedom of se_ppm", "1", True),
        Column(
            "counting_sd_ppm", "number", "typical counting standard uncertainty of one spot", "ug/g", True
        ),
        Column("spread_sd_ppm", "number", "standard deviation between spots beyond counting", "ug/g", True),
        Column("mswd", "number", "mean square of weighted deviates", "1", True),
        Column("mswd_lo", "number", "lower end of the 95 % acceptance interval of mswd", "1", True),
        Column("mswd_hi", "number", "upper end of the 95 % acceptance interval of mswd", "1", True),
        Column(
            "n_independent",
            "count",
            "independent units of the mean: spots, or grains where these were averaged",
            "1",
        ),
        Column(
            "mean_sequence",
            "number",
            "mean place of the spots in the run order; null without drift",
            "1",
            True,
        ),
        Column("internal_standard", "flag", "the values are rescaled to an internal standard"),
        Column(
            "internal_standard_sd",
            "number",
            "relative uncertainty of the internal-standard factor; null where none applies or it is unknown",
            "1",
            True,
        ),
        Column("internal_standard_dof", "number", "degrees of freedom of that uncertainty", "1", True),
        Column(
            "source_technique",
            "label",
            "technique of the mean that gave the internal standard",
            nullable=True,
        ),
        Column("source_batch", "label", "batch of that mean", nullable=True),
        Column("source_analyte", "label", "analyte of that mean", nullable=True),
    ),
)

PAIRS = TableSpec(
    "pair.pairs",
    "experiment x alpha x beta",
    (
        Column("experiment", "label", "experiment"),
        Column("alpha", "label", "numerator phase"),
        Column("beta", "label", "denominator phase"),
        Column("n_alpha", "count", "spots of alpha with a used value", "1"),
        Column("n_beta", "count", "spots of beta with a used value", "1"),
        Column("formed", "flag", "both phases have values"),
        Column("reason", "text", "why the pair could not be formed", nullable=True),
    ),
)

PAIR_LIMITS = TableSpec(
    "pair.limits",
    "used value of a phase mean that contains limits",
    (
        Column("experiment", "label", "experiment"),
        Column("phase", "label", "phase"),
        ELEMENT,
        Column("technique", "label", "measuring technique"),
        Column("batch", "label", "measuring session"),
        Column("analyte", "label", "source column of the element"),
        Column("value_ppm", "number", "measured value; null where only the limit is known", "ug/g", True),
        Column("sigma_ppm", "number", "its standard uncertainty", "ug/g", True),
        Column("limit_ppm", "number", "its detection limit", "ug/g", True),
    ),
)

PAIR_CORRELATIONS = TableSpec(
    "pair.correlations",
    "two phase means of one session, of elements whose ratio is wanted",
    (
        Column("experiment", "label", "experiment"),
        Column("phase", "label", "phase"),
        Column("technique", "label", "measuring technique"),
        Column("batch", "label", "measuring session"),
        Column("element_first", "label", "element symbol"),
        Column("analyte_first", "label", "source column of the first element"),
        Column("element_second", "label", "element symbol"),
        Column("analyte_second", "label", "source column of the second element"),
        Column(
            "correlation",
            "number",
            "correlation of the values used, between spots or grains; 0 for fewer than two",
            "1",
        ),
        Column("n_common", "count", "spots or grains that have both", "1"),
    ),
)

PAIR_TECHNIQUES = TableSpec(
    "pair.techniques",
    "experiment x phase x element x two measurements",
    (
        Column("experiment", "label", "experiment"),
        Column("phase", "label", "phase"),
        ELEMENT,
        Column("first", "text", "technique, batch and analyte of the first mean"),
        Column("second", "text", "technique, batch and analyte of the second mean"),
        Column("first_ppm", "number", "first mean", "ug/g"),
        Column("second_ppm", "number", "second mean", "ug/g"),
        Column("ratio", "number", "second over first", "1"),
        Column(
            "deviation", "number", "difference over its standard uncertainty, calibration included", "1", True
        ),
        Column("differ", "flag", "deviation beyond the threshold"),
    ),
)
