"""Columns of `assess`: the table of checks, and the side tables that each line of evidence rests on."""

from __future__ import annotations

from tieline.columns.keys import ELEMENT
from tieline.tables import Column, TableSpec

_PAIR = (
    Column("experiment", "label", "experiment"),
    Column("alpha", "label", "numerator phase"),
    Column("beta", "label", "denominator phase"),
)


def _numbers(unit: str, *columns: tuple[str, str]) -> tuple[Column, ...]:
    return tuple(Column(name, "number", meaning, unit, True) for name, meaning in columns)


def _estimate(name: str, meaning: str, unit: str) -> tuple[Column, ...]:
    """A parameter with its standard uncertainty, interval and status."""
    return (
        *_numbers(
            unit,
            (name, f"{meaning}; null where the values cannot tell"),
            (f"{name}_sd", "its standard uncertainty"),
            (f"{name}_lo", "lower end of its interval, by profile likelihood; null where open"),
            (f"{name}_hi", "upper end of its interval; null where open"),
        ),
        Column(f"{name}_status", "label", "fitted, fixed, prior or undetermined"),
    )


ASSESS = TableSpec(
    "assess",
    "check",
    (
        Column(
            "check",
            "label",
            "which line of evidence: exchange, lattice-strain, overlap, overlap-bound, mass-balance, trend, approach, "
            "consistency, rim-core",
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

ASSESS_EXCHANGE = TableSpec(
    "assess.exchange",
    "experiment x alpha x beta x element pair",
    (
        *_PAIR,
        Column("first", "label", "element on top"),
        Column("second", "label", "element below"),
        *_numbers(
            "1",
            (
                "K_D",
                "(first/second in alpha) / (first/second in beta), Fe as Fe2+ where a ferric share is given",
            ),
            (
                "K_D_sd",
                "its standard uncertainty, the covariance of the elements and the ferric share's included",
            ),
            ("K_D_lo", "lower end of its interval, made as that of D"),
            ("K_D_hi", "upper end of its interval; null where open"),
            ("dof", "effective degrees of freedom of the interval"),
            (
                "correlation_alpha",
                "correlation of the two elements between the spots of alpha; 0 where they share none",
            ),
            ("correlation_beta", "the same in beta"),
            ("ferric_share", "Fe3+ over all Fe in beta; null where none is assumed"),
            ("ferric_share_sd", "its standard uncertainty"),
            ("window_lo", "lower end of the expected window"),
            ("window_hi", "upper end of the expected window"),
        ),
        Column("window_source", "text", "where the window comes from; empty where there is none"),
        Column("verdict", "label", "consistent, differs or cannot tell"),
    ),
)

ASSESS_CURVES = TableSpec(
    "assess.curves",
    "experiment x alpha x beta x charge: one lattice-strain curve",
    (
        *_PAIR,
        Column("charge", "count", "charge of the ions", "1"),
        Column("coordination", "count", "coordination of the site, which the radii are for", "1"),
        Column("temperature_K", "number", "temperature of the experiment", "K"),
        Column("n_values", "count", "D that shape the curve", "1"),
        Column("n_limits", "count", "upper limits that shape it", "1"),
        Column("verdict", "label", "fitted or cannot tell"),
        Column("reason", "text", "why it cannot be told; empty when fitted"),
        Column("held", "text", "what was held or known beforehand; empty where the values sufficed"),
        *_estimate("D0", "D of an ion that fits the site", "1"),
        *_estimate("r0_angstrom", "radius of the site", "angstrom"),
        *_estimate("E_GPa", "Young's modulus of the site", "GPa"),
        *_estimate("overlap", "fraction of beta in alpha, fitted together with the curve", "1"),
        *_numbers(
            "see name",
            ("cov_lnD0_r0", "covariance of ln D0 and r0"),
            ("cov_lnD0_E", "covariance of ln D0 and E"),
            ("cov_r0_E", "covariance of r0 and E"),
        ),
        Column("chi_square", "number", "weighted sum of squared residuals", "1", True),
        Column("dof", "count", "degrees of freedom", "1"),
        Column("p_value", "number", "chance of as much scatter about the curve", "1", True),
        Column(
            "scale", "number", "factor on variances where the scatter is larger than the errors", "1", True
        ),
        Column("joint_verdict", "label", "fitted or cannot tell: curve and overlap together"),
        *_numbers("1", ("joint_D0", "D0 of the fit with overlap")),
        *_numbers("angstrom", ("joint_r0_angstrom", "r0 of the fit with overlap")),
        *_numbers("GPa", ("joint_E_GPa", "E of the fit with overlap")),
        Column("overlap_p", "number", "p-value of no overlap", "1", True),
        Column("overlap_verdict", "label", "overlap, curve alone or cannot tell"),
        Column("remarks", "text", "what else to know: elements without a radius or kept off the curve"),
    ),
)

ASSESS_ELEMENTS = TableSpec(
    "assess.elements",
    "experiment x alpha x beta x charge x element beside a lattice-strain curve",
    (
        *_PAIR,
        Column("charge", "count", "charge of the ion", "1"),
        ELEMENT,
        Column("radius_angstrom", "number", "ionic radius (Shannon 1976)", "angstrom"),
        Column(
            "role",
            "label",
            "fitted, limit, compared (kept off the curve) or predicted (not measured)",
        ),
        *_numbers(
            "1",
            ("D", "measured D"),
            ("D_sd", "its standard uncertainty as the fit took it"),
            ("curve_D", "D that the curve gives; null where there is no curve"),
            ("curve_lo", "lower end of its interval"),
            ("curve_hi", "upper end of its interval"),
            ("sigmas", "measured less curve, in standard deviations"),
            ("deleted_sigmas", "the same for the curve through the others alone; null unless asked for"),
            (
                "shift_D0",
                "change of D0 without this element, in its standard deviations; null unless asked for",
            ),
            ("shift_r0", "change of r0 without this element, in its standard deviations"),
            ("shift_E", "change of E without this element, in its standard deviations"),
            ("corrected_D", "D with the fitted overlap taken off; null where none was found"),
            ("corrected_lo", "lower end of its interval"),
            ("corrected_hi", "upper end of its interval"),
        ),
    ),
)

ASSESS_PROPORTIONS = TableSpec(
    "assess.proportions",
    "experiment x phase",
    (
        Column("experiment", "label", "experiment"),
        Column("phase", "label", "phase"),
        *_numbers(
            "g/g",
            ("proportion", "mass of the phase per mass of starting material"),
            ("proportion_sd", "its standard uncertainty; null where the proportion is zero"),
            ("proportion_lo", "lower end of its interval, by profile likelihood"),
            ("proportion_hi", "upper end of its interval"),
            ("unweighted", "the same by unweighted least squares"),
        ),
    ),
)

ASSESS_BALANCE = TableSpec(
    "assess.balance",
    "experiment x element of the starting composition",
    (
        Column("experiment", "label", "experiment"),
        ELEMENT,
        Column("use", "flag", "fitted; otherwise judged by what the others leave for it"),
        *_numbers(
            "wt%",
            ("start_wt", "starting composition as oxide"),
            ("start_sd_wt", "its standard uncertainty"),
            ("phases_wt", "sum of the phases in their proportions"),
            ("residual_wt", "start less sum of the phases"),
        ),
        *_numbers(
            "1",
            ("sigmas", "residual in standard deviations; null where not fitted"),
            ("loss", "relative loss; null where fitted"),
            ("loss_sd", "its standard uncertainty"),
            ("loss_lo", "lower end of its interval"),
            ("loss_hi", "upper end of its interval"),
            ("loss_p", "p-value of no loss"),
        ),
    ),
)

ASSESS_BULK = TableSpec(
    "assess.bulk",
    "experiment x beta x element",
    (
        Column("experiment", "label", "experiment"),
        Column("beta", "label", "denominator phase"),
        ELEMENT,
        *_numbers(
            "1",
            ("bulk_D", "sum of proportion times D over the crystals, over the sum of their proportions"),
            ("bulk_D_sd", "its standard uncertainty"),
            ("bulk_D_lo", "lower end of its interval"),
            ("bulk_D_hi", "upper end of its interval"),
        ),
        Column("kind", "label", "value, bounds (a D is a limit) or undetermined"),
        Column("reason", "text", "why it is not a plain value; empty otherwise"),
    ),
)

_TREND_KEYS = (
    Column("alpha", "label", "numerator phase"),
    Column("beta", "label", "denominator phase"),
    ELEMENT,
    Column("condition", "label", "what D is drawn against"),
)

ASSESS_TRENDS = TableSpec(
    "assess.trends",
    "alpha x beta x element x condition: ln D = intercept + slope x condition",
    (
        *_TREND_KEYS,
        Column("n_points", "count", "experiments on the line", "1"),
        Column("n_left_out", "count", "experiments whose D is a limit or undetermined", "1"),
        Column("verdict", "label", "fitted or cannot tell"),
        Column("reason", "text", "why there is no line; empty otherwise"),
        *_numbers(
            "per unit of the condition",
            ("intercept", "ln D where the condition is zero"),
            ("intercept_se", "its standard error from the stated errors"),
            ("intercept_se_scatter", "its standard error from the scatter"),
            ("slope", "change of ln D per unit of the condition"),
            ("slope_se", "its standard error from the stated errors"),
            ("slope_se_scatter", "its standard error from the scatter"),
            ("slope_lo", "lower end of its interval"),
            ("slope_hi", "upper end of its interval"),
            ("covariance", "covariance of intercept and slope"),
        ),
        Column("chi_square", "number", "weighted sum of squared residuals", "1", True),
        Column("dof", "count", "degrees of freedom", "1"),
        Column("mswd", "number", "chi_square over dof", "1", True),
        Column("p_value", "number", "chance of as much scatter about the line", "1", True),
        Column(
            "scale", "number", "factor on variances where the scatter is larger than the errors", "1", True
        ),
    ),
)

ASSESS_TREND_POINTS = TableSpec(
    "assess.trend_points",
    "alpha x beta x element x condition x experiment",
    (
        *_TREND_KEYS,
        Column("experiment", "label", "experiment"),
        *_numbers("as the condition", ("x", "the condition"), ("x_sd", "its standard uncertainty")),
        *_numbers(
            "1",
            ("ln_D", "natural logarithm of D"),
            ("ln_D_sd", "its standard uncertainty"),
            ("sigmas", "distance from the line in standard deviations"),
            ("slope_without", "slope of the line without this experiment; null unless asked for"),
            ("slope_se_without", "its standard error"),
            ("predicted_without", "ln D that the line without this experiment predicts for it"),
            ("predicted_lo", "lower end of its interval, that of the line"),
            ("predicted_hi", "upper end of its interval"),
            ("deleted_sigmas", "distance from that line in standard deviations of both"),
        ),
    ),
)

ASSESS_TREND_PREDICTIONS = TableSpec(
    "assess.trend_predictions",
    "alpha x beta x element x condition x value asked for",
    (
        *_TREND_KEYS,
        Column("x", "number", "the condition", "as the condition"),
        Column("outside", "flag", "beyond the experiments on the line: extrapolated"),
        *_numbers(
            "1",
            ("D", "D on the line"),
            ("D_lo", "lower end of the line's interval"),
            ("D_hi", "upper end of the line's interval"),
            (
                "new_lo",
                "lower end for a further experiment: with the scatter of the experiments beyond their errors",
            ),
            ("new_hi", "upper end for a further experiment"),
        ),
    ),
)

EVIDENCE = (
    ASSESS,
    ASSESS_EXCHANGE,
    ASSESS_CURVES,
    ASSESS_ELEMENTS,
    ASSESS_PROPORTIONS,
    ASSESS_BALANCE,
    ASSESS_BULK,
    ASSESS_TRENDS,
    ASSESS_TREND_POINTS,
    ASSESS_TREND_PREDICTIONS,
)
