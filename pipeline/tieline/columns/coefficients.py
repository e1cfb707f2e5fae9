"""Columns of `partition` and `classify`."""

from __future__ import annotations

from tieline.columns.keys import ELEMENT
from tieline.tables import Column, TableSpec

PARTITION_KEYS = (
    Column("experiment", "label", "experiment"),
    Column("alpha", "label", "numerator phase"),
    Column("beta", "label", "denominator phase"),
    ELEMENT,
)
PARTITION_VALUES = (
    Column(
        "D", "number", "Nernst partition coefficient by mass, alpha over beta; null for limits", "1", True
    ),
    Column("D_sd", "number", "standard uncertainty of D by linear propagation", "1", True),
    Column("D_lo", "number", "lower end of the interval at the configured confidence", "1", True),
    Column("D_hi", "number", "upper end of the interval at the configured confidence", "1", True),
    Column("confidence", "number", "confidence level of the interval or limit", "1"),
    Column("kind", "label", "value, upper-limit, lower-limit or undetermined"),
    Column("reason", "text", "why it is not a plain value with an interval; empty otherwise"),
    Column("complete", "flag", "the interval covers every source of uncertainty that D needs"),
    Column("n_alpha", "count", "spots in the mean of alpha", "1"),
    Column("n_beta", "count", "spots in the mean of beta", "1"),
    Column("n_independent_alpha", "count", "independent units of alpha's mean: spots, or grains", "1"),
    Column("n_independent_beta", "count", "independent units of beta's mean: spots, or grains", "1"),
    Column("batch_alpha", "label", "batch of alpha's mean"),
    Column("batch_beta", "label", "batch of beta's mean"),
    Column("technique_alpha", "label", "technique of alpha's mean"),
    Column("technique_beta", "label", "technique of beta's mean"),
    Column("analyte_alpha", "label", "source column of alpha's mean"),
    Column("analyte_beta", "label", "source column of beta's mean"),
    Column("mean_alpha_ppm", "number", "phase mean of alpha", "ug/g", True),
    Column("mean_beta_ppm", "number", "phase mean of beta", "ug/g", True),
    Column("se_alpha_ppm", "number", "standard error of alpha's mean", "ug/g", True),
    Column("se_beta_ppm", "number", "standard error of beta's mean", "ug/g", True),
    Column("counting_se_alpha_ppm", "number", "its counting part", "ug/g", True),
    Column("counting_se_beta_ppm", "number", "its counting part", "ug/g", True),
    Column("dof_alpha", "number", "degrees of freedom of alpha's standard error", "1", True),
    Column("dof_beta", "number", "degrees of freedom of beta's standard error", "1", True),
    Column(
        "shared_sd_alpha",
        "number",
        "relative uncertainty of alpha from calibration, matrix, drift and internal standard that does not cancel, as "
        "it enters the interval: known from few measurements it counts by Student's over the normal quantile",
        "1",
    ),
    Column("shared_sd_beta", "number", "the same for beta", "1"),
    Column("dof", "number", "effective degrees of freedom of the interval", "1", True),
    Column("interval", "label", "how the interval was made: fieller, gum-s1, likelihood or none"),
    Column("share_counting", "number", "share of D_sd squared from counting", "1", True),
    Column("share_spread", "number", "share from spread between spots", "1", True),
    Column(
        "share_calibration", "number", "share from calibration and matrix that does not cancel", "1", True
    ),
    Column("share_internal_standard", "number", "share from internal-standard factors", "1", True),
    Column(
        "D_overlap_lo",
        "number",
        "lower end of D if undetected overlap of beta in alpha is allowed for",
        "1",
        True,
    ),
    Column(
        "overlap_bound", "number", "largest fraction of beta in alpha that this pair's D's allow", "1", True
    ),
)

PARTITION = TableSpec(
    "partition", "experiment x alpha x beta x element", (*PARTITION_KEYS, *PARTITION_VALUES)
)

PARTITION_ALTERNATIVES = TableSpec(
    "partition.alternatives",
    "possible D that was not chosen",
    (
        *PARTITION_KEYS,
        Column("D", "number", "ratio of the means", "1", True),
        Column("D_sd", "number", "standard uncertainty", "1", True),
        Column("batch_alpha", "label", "batch of alpha's mean"),
        Column("batch_beta", "label", "batch of beta's mean"),
        Column("analyte_alpha", "label", "source column of alpha's mean"),
        Column("analyte_beta", "label", "source column of beta's mean"),
        Column("reason", "text", "why the other was preferred"),
    ),
)

PARTITION_COVARIANCE = TableSpec(
    "partition.covariance",
    "experiment x alpha x beta x two elements, upper triangle",
    (
        Column("experiment", "label", "experiment"),
        Column("alpha", "label", "numerator phase"),
        Column("beta", "label", "denominator phase"),
        Column("element", "label", "first element"),
        Column("other", "label", "second element; the same element gives the variance"),
        Column("covariance", "number", "covariance of the two D", "1"),
    ),
)

CLASSIFY = TableSpec(
    "classify",
    "experiment x alpha x beta x element",
    (
        *PARTITION_KEYS,
        *PARTITION_VALUES,
        Column("class", "label", "compatible, incompatible, highly incompatible, or unresolved"),
        Column("p_compatible", "number", "probability that D is above the compatible boundary", "1", True),
        Column("p_incompatible", "number", "probability that D lies between the boundaries", "1", True),
        Column(
            "p_highly_incompatible", "number", "probability that D is below the lower boundary", "1", True
        ),
    ),
)
