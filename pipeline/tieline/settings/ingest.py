"""Settings of `ingest`: where the spot tables are and how to read them."""

from __future__ import annotations

import re
from typing import Annotated, Literal

from pydantic import Field, field_validator, model_validator

from tieline.settings.base import Settings

Unit = Literal["wt%", "ppm", "ppb"]


class Columns(Settings):
    """Header texts of the label columns of one spot table."""

    spot: str | None = Field(None, description="label of the analysis; the row number where there is none")
    experiment: str | None = Field(None, description="experiment label")
    phase: str | None = Field(None, description="phase label")
    grain: str | None = Field(None, description="grain label")
    zone: str | None = Field(None, description="zone label, such as rim or core")
    distance_um: str | None = Field(None, description="distance in micrometres")
    batch: str | None = Field(None, description="measuring session, where one table holds several")
    technique: str | None = Field(None, description="technique, where one table holds several")
    sequence: str | None = Field(None, description="run order; the row order where there is none")
    comment: str | None = Field(None, description="free text")
    ignore: tuple[str, ...] = Field((), description="headers of columns that are deliberately not read")


LABEL_GROUPS = ("spot", "experiment", "phase", "grain", "zone", "distance_um")


class Labels(Settings):
    """Splits one label column into several labels by a regular expression with named groups."""

    column: str = Field(description="header of the column that holds the combined label")
    pattern: str = Field(
        description="regular expression that fits the whole label; named groups among spot, experiment, phase, "
        "grain, zone, distance_um"
    )

    @field_validator("pattern")
    @classmethod
    def _usable(cls, pattern: str) -> str:
        try:
            groups = set(re.compile(pattern).groupindex)
        except re.error as error:
            raise ValueError(f"is not a regular expression: {error}") from None
        if not groups or groups - set(LABEL_GROUPS):
            wrong = ", ".join(sorted(groups - set(LABEL_GROUPS))) or "none"
            raise ValueError(f"named groups must be among {', '.join(LABEL_GROUPS)}; found {wrong}")
        return pattern


PATTERN = (
    "with {analyte} for the analyte's header; a text without {analyte} is the next such column to the right of "
    "the analyte, and {analyte} alone the next column with the analyte's own header"
)


class Sigma(Settings):
    """What the uncertainty columns are; stated, never guessed."""

    pattern: str = Field(min_length=1, description=f"header of the uncertainty column, {PATTERN}")
    level: float = Field(
        1, gt=0, le=4, description="how many standard uncertainties the column gives: 1 or 2"
    )
    relative: bool = Field(False, description="in per cent of the value")
    kind: Literal["sd", "se"] = Field(
        "sd",
        description="sd: standard deviation of single readings, divided by the root of `replicates`; "
        "se: standard error of the value itself, such as a laser spot's own internal error, taken as it is",
    )
    replicates: int = Field(1, ge=1, description="readings averaged into one cell, when kind is sd")


class Limit(Settings):
    """Where the detection limits stand."""

    pattern: str | None = Field(None, min_length=1, description=f"header of the limit column, {PATTERN}")
    values: dict[str, Annotated[float, Field(gt=0)]] = Field(
        default_factory=dict, description="limit per analyte, where its column or cell gives none"
    )
    unit: Unit | None = Field(
        None, description="unit of the limits; the analyte's own where nothing is given"
    )


class Table(Settings):
    """One spot table."""

    path: str = Field(description="file: .csv .tsv .txt .xlsx .ods .parquet, text ones also .gz")
    technique: str = Field("EPMA", description="measuring technique, a free name such as EPMA or laser")
    batch: str | None = Field(None, description="measuring session; the file name where nothing is given")
    unit: Unit | None = Field(None, description="unit of columns whose header does not say")
    experiment: str | None = Field(
        None, min_length=1, description="experiment of spots whose row does not tell"
    )
    phase: str | None = Field(None, min_length=1, description="phase of spots whose row does not tell")
    columns: Columns = Field(Columns(), description="headers of the label columns")
    labels: Labels | None = Field(None, description="splitting of a combined label")
    sigma: Sigma | None = Field(None, description="uncertainty columns")
    limit: Limit | None = Field(None, description="detection-limit columns or values")
    analytes: tuple[str, ...] | None = Field(
        None, description="analyte headers to read; all that are recognised"
    )
    sheet: str | int | None = Field(None, description="sheet name, or number from 1; the first")
    header_row: int | None = Field(None, ge=1, description="row of the header; found when not given")
    units_row: bool | None = Field(
        None, description="the row after the header holds units; found when not given"
    )
    skip_rows: int = Field(0, ge=0, description="rows before the table")
    delimiter: str | None = Field(
        None, pattern=r"^[\t !#-~]$", description="field separator, one ASCII character; found when not given"
    )
    decimal: Literal[".", ","] | None = Field(None, description="decimal mark; found when not given")
    thousands: Literal[",", ".", " ", "'"] | None = Field(
        None, description="thousands separator, where one is used"
    )
    encoding: str | None = Field(None, description="text encoding; found when not given")
    below_limit: tuple[str, ...] = Field(
        ("bdl", "b.d.l.", "b.d.", "bd", "<dl", "<lod", "below detection", "<mdl"),
        description="texts that mean: below the detection limit",
    )
    not_measured: tuple[str, ...] = Field(
        ("", "-", "\N{EN DASH}", "\N{EM DASH}", "n.m.", "n.a.", "na", "nan", "n.d.", "nd", "not measured"),
        description="texts that mean: not measured. `n.d.` is ambiguous; list it in below_limit if it means that",
    )
    zero: Literal["value", "below-limit", "not-measured"] = Field("value", description="what a plain 0 means")
    skip_row_labels: tuple[str, ...] = Field(
        ("average", "averages", "mean", "means", "avg", "std dev", "stdev", "sd", "st.dev.", "s.d.", "minimum",
         "maximum", "min", "max", "sum", "median", "rsd", "2sd", "1sd", "1 s.d.", "2 s.d.", "se", "n"),
        description="first-label texts of summary rows pasted between spots; such rows are set aside",
    )  # fmt: skip

    @model_validator(mode="after")
    def _one_source_per_label(self) -> Table:
        groups = set(re.compile(self.labels.pattern).groupindex) if self.labels is not None else set()
        twice = [
            name for name in LABEL_GROUPS if name in groups and getattr(self.columns, name, None) is not None
        ]
        if twice:
            raise ValueError(f"{', '.join(twice)} is given both by columns and by the label pattern")
        if self.thousands is not None and self.thousands == self.decimal:
            raise ValueError("thousands and decimal are the same mark")
        return self


class ReferenceMaterials(Settings):
    """Which spots are reference materials, and their accepted values."""

    path: str | None = Field(
        None, description="table of accepted values: material, analyte, value, unit, sd, source"
    )
    names: dict[str, tuple[str, ...]] = Field(
        default_factory=dict,
        description="material -> its spellings in the phase, experiment or spot column, which may end in *; "
        "by default the materials of the accepted values",
    )


class Experiments(Settings):
    """Table of experimental conditions."""

    path: str = Field(description="table with one row per experiment")
    columns: dict[str, str] = Field(
        default_factory=lambda: {"experiment": "experiment"},
        description="name used from here on -> header; must include experiment",
    )

    @field_validator("columns")
    @classmethod
    def _has_experiment(cls, columns: dict[str, str]) -> dict[str, str]:
        if "experiment" not in columns:
            raise ValueError("must include experiment")
        return columns


class TableLimits(Settings):
    """Beyond these a table is refused, so that memory stays bounded whatever a file claims to be."""

    columns: int = Field(5_000, ge=1, description="columns of one table")
    cells: int = Field(100_000_000, ge=1, description="cells of one table, blank ones included")
    expanded_mb: int = Field(
        2_000, ge=1, description="megabytes of one file, and what a packed one may unpack to"
    )


class IngestSettings(Settings):
    """Section [ingest]."""

    tables: tuple[Table, ...] = Field(description="the spot tables", min_length=1)
    phases: dict[str, tuple[str, ...]] = Field(
        default_factory=dict,
        description="phase -> its spellings in the tables, beside the standard abbreviations",
    )
    experiments: Experiments | None = Field(None, description="experimental conditions")
    reference_materials: ReferenceMaterials = Field(ReferenceMaterials(), description="reference materials")
    on_unreadable: Literal["stop", "set-aside"] = Field(
        "stop", description="what to do with cells and rows that cannot be used"
    )
    on_duplicate_spot: Literal["stop", "number"] = Field(
        "stop", description="spot label twice in a table: stop, or make unique by numbering"
    )
    limits: TableLimits = Field(TableLimits(), description="the largest tables that are read")
