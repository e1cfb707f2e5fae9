"""Settings of `pair`, `partition`, `classify` and the report."""

from __future__ import annotations

from typing import Literal

from pydantic import Field, model_validator

from tieline.settings.base import Element, Settings


class PairSettings(Settings):
    """Section [pair]."""

    pairs: tuple[tuple[str, str], ...] | None = Field(
        None, description="[alpha, beta] pairs; by default every other phase over glass"
    )
    mean: Literal["random-effects", "arithmetic", "median", "huber"] = Field(
        "random-effects", description="estimator of the phase mean"
    )
    average: Literal["spots", "grains"] = Field(
        "spots",
        description="average over spots, or over grain means where spots of a grain are not independent",
    )
    separate: Literal["none", "zone", "grain"] = Field(
        "none",
        description="own means, and own D over the whole melt, for every zone or grain of a crystal phase, named "
        "such as `olivine (rim)`",
    )
    local: Literal["none", "zone", "grain"] = Field(
        "none",
        description="pair the spots of all phases that carry the same zone or grain label, such as an area of the "
        "charge, only with one another",
    )
    ratios: tuple[tuple[Element, Element], ...] = Field(
        (),
        description="elements whose correlation between spots is kept in `pair.correlations`, for the uncertainty of their "
        "ratio; the pairs of `[assess.exchange]` are added",
    )
    difference_sigmas: float = Field(
        3.0,
        gt=0,
        description="two techniques differ when their means do by more than this many standard uncertainties",
    )

    @model_validator(mode="after")
    def _two_phases(self) -> PairSettings:
        for alpha, beta in self.pairs or ():
            if alpha == beta:
                raise ValueError(f"pairs: {alpha}/{beta} is no pair of two phases")
        if self.pairs is not None and len(set(self.pairs)) < len(self.pairs):
            raise ValueError("pairs: a pair stands twice")
        return self

    @model_validator(mode="after")
    def _one_way(self) -> PairSettings:
        if self.separate != "none" and self.local != "none":
            raise ValueError("separate and local exclude each other")
        return self


class PartitionSettings(Settings):
    """Section [partition]."""

    confidence: float = Field(0.95, gt=0.5, lt=1, description="confidence level of intervals and limits")
    interval: Literal["fieller", "gum-s1"] = Field("fieller", description="how intervals are made")
    prefer: tuple[str, ...] = Field(
        (), description="techniques in order of preference where several measured an element"
    )
    sigma_from_limit: float = Field(
        3.0, gt=0, description="where a value's sigma is not given, its limit divided by this stands for it"
    )


class ClassifySettings(Settings):
    """Section [classify]."""

    compatible_above: float = Field(1.0, gt=0, description="D above this is compatible; the definition")
    highly_incompatible_below: float = Field(
        0.01, gt=0, description="D below this is highly incompatible; a convention, others use 0.1"
    )
    confidence: float = Field(
        0.95,
        gt=0.5,
        lt=1,
        description="a class is declared when the interval at this confidence lies inside it",
    )
    extra: dict[str, tuple[float, float]] = Field(
        default_factory=dict,
        description="further class -> [low, high] in D; declared instead of the plain class where the interval lies "
        "inside it, the narrowest first",
    )

    @model_validator(mode="after")
    def _ordered(self) -> ClassifySettings:
        reserved = {"compatible", "incompatible", "highly incompatible", "unresolved"} & set(self.extra)
        if reserved:
            raise ValueError(f"extra: {sorted(reserved)[0]} is the name of a plain class")
        for name, (low, high) in self.extra.items():
            if not 0 <= low < high:
                raise ValueError(f"extra.{name} must be [low, high] with 0 <= low < high")
        if self.highly_incompatible_below >= self.compatible_above:
            raise ValueError("highly_incompatible_below must be smaller than compatible_above")
        return self


class ReportSettings(Settings):
    """Section [report]."""

    title: str | None = Field(None, description="title of the report; the session's name by default")
    after_run: bool = Field(
        False,
        description="write the report after every run that went through all stages, where it is not current; off by "
        "default, because it takes longer than a changed filter does. `run --report` asks for it once",
    )
