"""Settings of `screen`: every threshold, with where its default comes from."""

from __future__ import annotations

from typing import Literal

from pydantic import Field, model_validator

from tieline.settings.base import Settings, TestSettings, phases_into


class TotalSettings(TestSettings):
    """Oxide totals of probe spots."""

    action: Literal["drop", "mark"] = Field("drop", description="what a finding does")
    limits: dict[str, tuple[float, float]] = Field(
        default_factory=dict,
        description="phase -> [low, high] in wt%, also directly as phase = [low, high]; beside the phase table's "
        "(98.5-101.5 for anhydrous minerals, common practice)",
    )
    sigmas: float = Field(
        2.0,
        ge=0,
        description="a total is outside only if it is by more than this many of its standard uncertainties",
    )
    min_oxides: int = Field(4, ge=1, description="fewer measured oxides than this make no total; own choice")
    incomplete_below: float = Field(
        85.0,
        ge=0,
        description="a technique whose totals have a lower median than this, in wt%, does not measure everything: "
        "its totals and cation sums are not judged; own choice",
    )

    @model_validator(mode="before")
    @classmethod
    def _phases(cls, data: object) -> object:
        return phases_into("limits", data, cls.model_fields, lambda value: isinstance(value, list))


class CationRule(Settings):
    """Expected cation sum of one phase."""

    oxygens: float = Field(gt=0, description="oxygens per formula unit")
    sum: float = Field(gt=0, description="expected cation sum")
    tolerance: float = Field(gt=0, description="largest difference, common practice")


class CationSettings(TestSettings):
    """Cation sums of probe spots."""

    action: Literal["drop", "mark"] = Field("drop", description="what a finding does")
    rules: dict[str, CationRule] = Field(
        default_factory=dict,
        description="phase -> rule, also directly as phase = { ... }; beside the phase table's (common practice)",
    )
    sigmas: float = Field(2.0, ge=0, description="as for totals")
    ferric: bool = Field(
        True,
        description="accept a sum that is too high where ferric iron explains it (charge balance, Droop 1987), "
        "for phases that take ferric iron",
    )

    @model_validator(mode="before")
    @classmethod
    def _phases(cls, data: object) -> object:
        return phases_into("rules", data, cls.model_fields, lambda value: isinstance(value, dict))


class IdentitySettings(TestSettings):
    """Spots whose composition fits another phase of the session better."""

    action: Literal["drop", "mark"] = Field("drop", description="what a finding does")
    ratio: float = Field(
        3.0,
        gt=1,
        description="how many times nearer the other phase must be, in log-ratio distance; own choice",
    )


class OverlapSettings(TestSettings):
    """Glass in crystal spots and crystal in glass spots."""

    action: Literal["drop", "mark"] = Field("drop", description="what a finding does when `use` is drop")
    use: Literal["drop", "mark", "unmix"] = Field(
        "drop", description="drop, only mark, or remove the overlap by calculation"
    )
    z: float = Field(
        3.0, gt=0, description="leave-one-out z above which a spot is flagged; false alarms measured in docs"
    )
    something_else_p: float = Field(
        0.001,
        gt=0,
        lt=1,
        description="p-value of the residual below which a spot is something else than this mixture",
    )
    scatter_p: float = Field(
        0.001,
        gt=0,
        lt=1,
        description="p-value below which the scatter of unflagged spots along the mixing line is remarked; own choice",
    )
    tracer_share: float = Field(
        0.2,
        gt=0,
        le=1,
        description="an analyte that carries at least this share of the information on the overlap is not unmixed, "
        "for it has no value of its own; own choice",
    )
    melt_phase: str = Field("glass", description="the phase taken as the melt")


class ZoningSettings(TestSettings):
    """Growth zoning within grains."""

    p: float = Field(0.01, gt=0, lt=1, description="p-value of the zoning score's trend with distance")
    least_change: float = Field(
        0.05,
        ge=0,
        description="smallest relative change over the distances that counts as zoning; own choice, a smaller one "
        "matters less to D than calibration does",
    )
    visible: float = Field(
        0.2,
        gt=0,
        description="a group is called not zoned only if this relative change would have been seen; own choice",
    )
    represent: Literal["all", "rim", "core"] = Field(
        "all", description="which spots of a zoned group represent equilibrium with the melt"
    )
    rim_um: float = Field(20.0, gt=0, description="a spot is rim when its distance is at most this")


class OutlierSettings(TestSettings):
    """Spots that stand out in many analytes together, or single analytes on request."""

    p: float = Field(0.01, gt=0, lt=1, description="p-value of as many analytes standing out in one spot")
    alpha: float = Field(0.05, gt=0, lt=1, description="significance of the single-analyte test")
    per_analyte: Literal["off", "grubbs", "esd", "modified-z"] = Field(
        "off",
        description="test every analyte alone, Holm-corrected; costs coverage of the intervals when it drops",
    )
    threshold: float = Field(
        3.5, gt=0, description="modified z beyond which a value is an outlier (Iglewicz & Hoaglin 1993)"
    )
    min_spots: int = Field(5, ge=3, description="fewer spots than this are not tested")


class ImpreciseSettings(TestSettings):
    """Values too imprecise to matter, limits above the melt's value, failed reference materials."""

    relative_sigma: float = Field(
        0.5, gt=0, description="relative sigma above which a value is remarked; own choice"
    )


class ScreenSettings(Settings):
    """Section [screen]."""

    rulings: str | None = Field(
        None,
        description="table of rulings with the columns spot, analyte (* for all), verdict (keep or drop), analyst, date, "
        "reason, and table where one spot label occurs in several tables",
    )
    total: TotalSettings = Field(TotalSettings(), description="oxide totals")
    cations: CationSettings = Field(CationSettings(), description="cation sums")
    identity: IdentitySettings = Field(IdentitySettings(), description="mislabelled phases")
    overlap: OverlapSettings = Field(OverlapSettings(), description="overlap with another phase")
    zoning: ZoningSettings = Field(ZoningSettings(), description="growth zoning")
    outlier: OutlierSettings = Field(OutlierSettings(), description="outliers")
    imprecise: ImpreciseSettings = Field(ImpreciseSettings(), description="precision remarks")
