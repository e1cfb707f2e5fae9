"""Every column of every stage file. Adding a column is one line here and one in the stage that fills it."""

from __future__ import annotations

from tieline.tables import Column, TableSpec

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
        Column(
            "internal_standard_sd",
            "number",
            "relative standard uncertainty of the internal-standard factor, shared by all elements of the phase "
            "and experiment; null where none applies",
            "1",
            True,
        ),
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

CALIBRATE = TableSpec(
    "calibrate",
    "batch x element",
    (
        Column("technique", "label", "measuring technique"),
        Column("batch", "label", "measuring session"),
        ELEMENT,
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
        Column("n_spots", "count", "spots that measured the element", "1"),
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

SCREEN = TableSpec(
    "screen",
    "spot x analyte",
    (
        *VALUE_KEYS,
        ELEMENT,
        Column("use", "flag", "the value enters the phase mean"),
        Column("why", "label", "what keeps it out: finding codes or `ruling`; empty when used"),
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
            "internal_standard_sd",
            "number",
            "relative uncertainty of the internal-standard factor",
            "1",
            True,
        ),
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
        Column("batch", "label", "measuring session"),
        Column("analyte", "label", "source column of the element"),
        Column("value_ppm", "number", "measured value; null where only the limit is known", "ug/g", True),
        Column("sigma_ppm", "number", "its standard uncertainty", "ug/g", True),
        Column("limit_ppm", "number", "its detection limit", "ug/g", True),
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
    Column("n_alpha", "count", "spots in the mean of alpha", "1"),
    Column("n_beta", "count", "spots in the mean of beta", "1"),
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
        "relative uncertainty of alpha from calibration, matrix and internal standard that does not cancel",
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

ASSESS = TableSpec(
    "assess",
    "check",
    (
        Column(
            "check",
            "label",
            "which line of evidence: exchange, lattice-strain, mass-balance, trend, overlap, ...",
        ),
        Column("experiment", "label", "experiment; null when the check spans experiments", nullable=True),
        Column("alpha", "label", "numerator phase", nullable=True),
        Column("beta", "label", "denominator phase", nullable=True),
        Column("subject", "text", "what was checked: elements, charge, quantity"),
        Column("value", "number", "the result", "see detail", True),
        Column("sd", "number", "its standard uncertainty", "see detail", True),
        Column("expected_lo", "number", "lower end of what is expected", "see detail", True),
        Column("expected_hi", "number", "upper end of what is expected", "see detail", True),
        Column("verdict", "label", "consistent, differs or cannot tell"),
        Column("detail", "text", "the result, its assumptions and sources in words"),
    ),
)

TABLES: dict[str, TableSpec] = {
    spec.name: spec
    for spec in (
        INGEST,
        INGEST_SPOTS,
        INGEST_SET_ASIDE,
        INGEST_EXPERIMENTS,
        CONVERT,
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
        PAIR_TECHNIQUES,
        PARTITION,
        PARTITION_ALTERNATIVES,
        PARTITION_COVARIANCE,
        CLASSIFY,
        ASSESS,
    )
}
