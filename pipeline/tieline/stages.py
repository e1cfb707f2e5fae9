"""The chain, in order. Reading this table is reading the program."""

from __future__ import annotations

from collections.abc import Callable, Mapping
from dataclasses import dataclass
from importlib import import_module
from typing import Any

from tieline.reading.input_file import InputFile
from tieline.results import StageResult
from tieline.settings import SessionSettings
from tieline.settings.base import Settings


@dataclass(frozen=True)
class Stage:
    """One stage: a pure function of tables, its settings and, for some, input files.

    The function `module.name` is called with one keyword argument per input table (dots become
    underscores), `settings`, and `files` where `reads_files`. `counted` is the table whose rows
    are what the stage's ledger says entered. `reader` names a function of the same module that reads
    `files` alone, so that their problems are found even when an earlier stage already failed. `rulings` tells
    which of the files is the table of rulings of a stage that has others too; it is called with it apart from them.
    """

    name: str
    revision: int
    inputs: tuple[str, ...]
    outputs: tuple[str, ...]
    settings: Callable[[SessionSettings], Settings]
    files: Callable[[SessionSettings], tuple[str, ...]] = lambda _: ()
    reads_files: bool = False
    counted: str | None = None
    reader: str | None = None
    rulings: Callable[[SessionSettings], tuple[str, ...]] = lambda _: ()

    def function(self) -> Callable[..., StageResult]:
        """The stage function, imported only when it is needed."""
        return self._member(self.name)

    def file_arguments(
        self, settings: SessionSettings, files: Mapping[str, InputFile]
    ) -> dict[str, dict[str, InputFile]]:
        """What the function is given of input files, as keyword arguments."""
        if not self.reads_files:
            return {}
        arguments = {"files": self.files_apart(settings), "rulings": self.rulings(settings)}
        return {
            name: {path: files[path] for path in paths}
            for name, paths in arguments.items()
            if paths or name == "files"
        }

    def files_apart(self, settings: SessionSettings) -> tuple[str, ...]:
        """The files but for a table of rulings that is given apart; a path may be named twice."""
        paths = list(self.files(settings))
        for path in self.rulings(settings):
            paths.remove(path)
        return tuple(paths)

    def read_files(self, files: Mapping[str, InputFile]) -> None:
        """Raises InputError with every problem of the stage's own small files."""
        if self.reader is not None and files:
            self._member(self.reader)(files)

    def _member(self, name: str) -> Callable[..., Any]:
        member: Callable[..., Any] = getattr(import_module(f"tieline.{self.name}"), name)
        return member

    def own_settings(self, settings: SessionSettings) -> dict[str, Any]:
        """The settings in effect for this stage, as plain values."""
        return self.settings(settings).model_dump(mode="json")


def _ingest_settings(settings: SessionSettings) -> Settings:
    # The accepted values are read by `calibrate`: a revised table must not make `ingest` stale.
    materials = settings.ingest.reference_materials.model_copy(update={"path": None})
    return settings.ingest.model_copy(update={"reference_materials": materials})


def _ingest_files(settings: SessionSettings) -> tuple[str, ...]:
    tables = [table.path for table in settings.ingest.tables]
    if settings.ingest.experiments is not None:
        tables.append(settings.ingest.experiments.path)
    return tuple(dict.fromkeys(tables))


def _pair_settings(settings: SessionSettings) -> Settings:
    # The spots are no longer at hand when `assess` takes ratios of elements.
    ratios = dict.fromkeys((*settings.pair.ratios, *settings.assess.exchange.pairs))
    return settings.pair.model_copy(update={"ratios": tuple(ratios)})


def _optional(path: str | None) -> tuple[str, ...]:
    return () if path is None else (path,)


STAGES: tuple[Stage, ...] = (
    Stage(
        name="ingest",
        revision=1,
        inputs=(),
        outputs=("ingest", "ingest.spots", "ingest.set_aside", "ingest.experiments"),
        settings=_ingest_settings,
        files=_ingest_files,
        reads_files=True,
    ),
    Stage(
        name="convert",
        revision=1,
        inputs=("ingest",),
        outputs=("convert", "convert.standards", "convert.formula", "convert.cations"),
        settings=lambda settings: settings.convert,
        counted="ingest",
    ),
    Stage(
        name="calibrate",
        revision=1,
        inputs=("convert", "ingest.spots"),
        outputs=("calibrate", "calibrate.materials"),
        settings=lambda settings: settings.calibrate,
        files=lambda settings: (
            *_optional(settings.ingest.reference_materials.path),
            *_optional(settings.screen.rulings),
        ),
        reads_files=True,
        counted="convert",
        # `screen` reads the rulings too, and tells what is wrong with their table when neither stage is reached.
        reader="read_accepted_values",
        rulings=lambda settings: _optional(settings.screen.rulings),
    ),
    Stage(
        name="screen",
        revision=1,
        inputs=("convert", "convert.standards", "calibrate", "ingest.spots"),
        outputs=("screen", "screen.findings", "screen.groups"),
        settings=lambda settings: settings.screen,
        files=lambda settings: _optional(settings.screen.rulings),
        reads_files=True,
        counted="convert",
        reader="read_rulings",
    ),
    Stage(
        name="pair",
        revision=1,
        inputs=("convert", "convert.standards", "calibrate", "screen", "ingest.spots"),
        outputs=("pair", "pair.pairs", "pair.limits", "pair.correlations", "pair.techniques"),
        settings=_pair_settings,
        counted="screen",
    ),
    Stage(
        name="partition",
        revision=1,
        inputs=("pair", "pair.pairs", "pair.limits", "calibrate"),
        outputs=("partition", "partition.alternatives", "partition.covariance"),
        settings=lambda settings: settings.partition,
        counted="pair",
    ),
    Stage(
        name="classify",
        revision=1,
        inputs=("partition",),
        outputs=("classify",),
        settings=lambda settings: settings.classify,
        counted="partition",
    ),
    Stage(
        name="assess",
        revision=1,
        inputs=(
            "partition",
            "partition.covariance",
            "pair",
            "pair.correlations",
            "calibrate",
            "ingest.experiments",
        ),
        outputs=(
            "assess",
            "assess.exchange",
            "assess.curves",
            "assess.elements",
            "assess.proportions",
            "assess.balance",
            "assess.bulk",
            "assess.trends",
            "assess.trend_points",
            "assess.trend_predictions",
        ),
        settings=lambda settings: settings.assess,
        files=lambda settings: _optional(settings.assess.mass_balance.starting_composition),
        reads_files=True,
        reader="read_starting_composition",
    ),
)

NAMES = tuple(stage.name for stage in STAGES)


def producer(table: str) -> str:
    """The stage that makes a table: the part of its name before the dot."""
    return table.partition(".")[0]
