"""Settings of `convert` and `calibrate`: concentrations and what calibrates them."""

from __future__ import annotations

from typing import Annotated, Literal

from pydantic import Field

from tieline.settings.base import Settings


class Actual(Settings):
    """A given concentration of the internal standard."""

    value: float = Field(gt=0, description="concentration in `unit`")
    sd: float = Field(0.0, ge=0, description="standard uncertainty in `unit`")


class InternalStandard(Settings):
    """Rescales one technique's values to the true internal-standard concentration of each phase."""

    technique: str = Field("laser", description="technique whose tables are rescaled")
    element: str = Field(description="internal-standard analyte as in `assumed`, such as CaO or Si")
    unit: Literal["wt%", "ppm"] = Field("wt%", description="unit of `assumed` and `actual`")
    assumed: dict[str, Annotated[float, Field(gt=0)]] = Field(
        default_factory=dict, description="phase -> value assumed when the table was made; * for all others"
    )
    assumed_from: Literal["settings", "table"] = Field(
        "settings",
        description="take the assumed value from `assumed`, or from the technique's own column of the element",
    )
    actual: Literal["probe-mean"] | dict[str, Actual] = Field(
        "probe-mean",
        description="probe-mean: robust mean of the phase's spots by another technique; or phase -> value, sd",
    )
    source_technique: str = Field("EPMA", description="technique whose mean is the actual value")
    missing: Literal["stop", "as-assumed"] = Field(
        "stop", description="where no actual value exists: stop, or leave the values as assumed and say so"
    )


class FormulaSettings(Settings):
    """Formula units of whole analyses."""

    oxygens: dict[str, float] = Field(
        default_factory=dict,
        description="phase -> oxygens per formula unit, beside or instead of the phase table's",
    )
    ferric: tuple[str, ...] = Field(
        (), description="phases whose ferric iron is estimated by charge balance (Droop 1987)"
    )


class ConvertSettings(Settings):
    """Section [convert]."""

    internal_standard: tuple[InternalStandard, ...] = Field(
        (), description="internal standards, one per technique"
    )
    formula: FormulaSettings = Field(FormulaSettings(), description="formula units")
    normalise: dict[str, Annotated[float, Field(gt=0, le=200)]] = Field(
        default_factory=dict,
        description="technique -> total in wt% to which the oxide sum of every spot is normalised; off by default",
    )


class Limits(Settings):
    """A laboratory's own limit on the bias of a reference material."""

    relative: float = Field(
        0.10, gt=0, description="largest |measured/accepted - 1|; common practice 0.05 to 0.10"
    )
    sigmas: float = Field(2.0, gt=0, description="or fewer standard uncertainties than this away from 1")


class CalibrateSettings(Settings):
    """Section [calibrate]."""

    correct: Literal[False, "bias", "bias+drift"] = Field(
        False,
        description="divide by the measured bias, and remove a supported drift; by default only carry its uncertainty",
    )
    relative_sd: dict[str, Annotated[float, Field(ge=0, lt=1)]] = Field(
        default_factory=dict,
        description="technique -> relative calibration uncertainty where no reference material tells",
    )
    matrix_sd: dict[str, Annotated[float, Field(ge=0, lt=1)]] = Field(
        default_factory=dict,
        description="technique -> relative uncertainty not shared between phases; never cancels",
    )
    tolerance: Limits = Field(Limits(), description="when a reference material passes")
    drift_p: float = Field(
        0.01,
        gt=0,
        lt=1,
        description="p-value below which a linear drift is taken as supported, after Holm's correction over a batch's analytes",
    )
    min_spots_for_drift: int = Field(6, ge=4, description="reference spots needed to test for drift")
