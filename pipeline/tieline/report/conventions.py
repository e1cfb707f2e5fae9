"""What every ± means, in the words that stand on every file handed over."""

from __future__ import annotations


def percent(fraction: float) -> str:
    """0.95 as `95 %`, 0.997 as `99.7 %`."""
    return f"{fraction * 100:.4g} %"


def short_convention(confidence: float) -> str:
    """One line, for a column that goes with every row."""
    return (
        f"D by mass; D_sd: one standard uncertainty (k = 1); D_lo, D_hi: {percent(confidence)} interval or limit; "
        "n: spots in the phase mean"
    )


def conventions(confidence: float) -> list[tuple[str, str]]:
    """Term and meaning, for the page, the workbook and the LaTeX table."""
    level = percent(confidence)
    return [
        (
            "D",
            "Nernst partition coefficient by mass: concentration of the element in alpha over that in beta",
        ),
        (
            "D_sd",
            "one standard uncertainty of D (k = 1), counting, spread between spots and calibration combined",
        ),
        ("D_lo, D_hi", f"ends of the {level} confidence interval; it need not be symmetric"),
        (
            "x(y)",
            "x with one standard uncertainty y in its last digits; the uncertainty is rounded to two digits, x to the "
            "same place. Only this notation is rounded: every number in its own column has all its digits",
        ),
        (
            "< and >",
            f"upper and lower limit of D at {level} confidence, to two digits; no value is given for these",
        ),
        ("n_alpha, n_beta", "spots in the phase mean; a spot below its detection limit counts"),
        ("se_ppm", "one standard error of a phase mean, from counting and from the spread between spots"),
        ("sigma_ppm", "one standard uncertainty of a single value, from counting"),
        ("limit_ppm", "detection limit of one analyte in one spot"),
        ("ppm", "micrograms of the element per gram"),
        (
            "share_*",
            "parts of D_sd squared; they add up to one: counting, spread between spots, calibration that does not "
            "cancel, internal standard",
        ),
    ]
