"""Stage tables of invented spots, as `screen` receives them: `convert`, `calibrate` and `ingest.spots`."""

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
import pyarrow as pa

from tieline.chemistry.oxides import parse_oxide
from tieline.columns import CALIBRATE, CONVERT, INGEST_SPOTS, SPOT_KEYS
from tieline.results import StageResult
from tieline.screen import screen
from tieline.settings.screen import ScreenSettings
from tieline.tables import build, empty


@dataclass(frozen=True)
class Block:
    """Spots of one group: values, sigmas and limits in ppm of the analyte's element, shape (n, p), NaN for none."""

    experiment: str | None
    phase: str
    analytes: Sequence[str]
    values: np.ndarray
    sigmas: np.ndarray
    technique: str = "EPMA"
    limits: np.ndarray | None = None
    grain: Sequence[str] | None = None
    zone: Sequence[str] | None = None
    distance_um: Sequence[float] | None = None
    material: str | None = None
    labels: Sequence[str] | None = None
    table: str = "spots.csv"


@dataclass(frozen=True)
class Inputs:
    """The three tables `screen` reads."""

    convert: pa.Table
    calibrate: pa.Table
    spots: pa.Table

    def screen(self, files=None, **settings) -> StageResult:
        return screen(
            self.convert,
            self.calibrate,
            self.spots,
            files=files or {},
            settings=ScreenSettings.model_validate(settings),
        )

    def shuffled(self, seed: int) -> "Inputs":
        """The same spots and values in another order of the rows of every table."""
        rng = np.random.default_rng(seed)
        order = [rng.permutation(table.num_rows) for table in (self.convert, self.spots)]
        return Inputs(self.convert.take(order[0]), self.calibrate, self.spots.take(order[1]))


def oxide_ppm(wt_percent: dict[str, float]) -> tuple[list[str], np.ndarray]:
    """Analytes and their element ppm from oxide wt%."""
    values = [wt * parse_oxide(name).element_fraction * 1e4 for name, wt in wt_percent.items()]
    return list(wt_percent), np.array(values)


def inputs(blocks: Sequence[Block]) -> Inputs:
    """Tables of all blocks, one below the other; rows count on within each table."""
    next_row: dict[str, int] = {}
    keys: dict[str, list] = {column.name: [] for column in SPOT_KEYS}
    cells: dict[str, list] = {"spot_number": [], "analyte": [], "value": [], "sigma": [], "limit": []}
    for number, block in enumerate(blocks):
        for at in range(len(block.values)):
            row = next_row.get(block.table, 1) + 1
            next_row[block.table] = row
            spot = block.labels[at] if block.labels else f"{number:03}-{at:03}"
            entry = {
                "spot": spot,
                "table": block.table,
                "row": row,
                "technique": block.technique,
                "batch": f"{block.technique}-1",
                "experiment": block.experiment,
                "phase": block.phase,
                "grain": block.grain[at] if block.grain else None,
                "zone": block.zone[at] if block.zone else None,
                "distance_um": block.distance_um[at] if block.distance_um is not None else None,
                "material": block.material,
            }
            for name, value in entry.items():
                keys[name].append(value)
        size = len(block.values)
        first = len(keys["spot"]) - size
        p = len(block.analytes)
        cells["spot_number"].append(np.repeat(np.arange(first, first + size), p))
        cells["analyte"].append(np.tile(np.array(block.analytes, dtype=object), size))
        cells["value"].append(block.values.ravel())
        cells["sigma"].append(block.sigmas.ravel())
        cells["limit"].append(
            np.full(size * p, np.nan)
            if block.limits is None
            else np.broadcast_to(block.limits, (size, p)).ravel()
        )
    spot_number = np.concatenate(cells["spot_number"])
    analyte = np.concatenate(cells["analyte"])
    value, sigma, limit = (np.concatenate(cells[name]) for name in ("value", "sigma", "limit"))
    only_limit = ~np.isfinite(value) & np.isfinite(limit)
    spots = build(
        INGEST_SPOTS,
        {**keys, "sequence": list(range(len(keys["spot"]))), "comment": [None] * len(keys["spot"])},
    )
    convert = build(
        CONVERT,
        {
            **{name: spots.column(name).take(pa.array(spot_number)) for name in keys},
            "analyte": analyte.tolist(),
            "element": [_element(name) for name in analyte.tolist()],
            "value_ppm": value,
            "sigma_ppm": np.where(only_limit, np.nan, sigma),
            "limit_ppm": limit,
            "below_limit": only_limit
            | (np.nan_to_num(value, nan=np.inf) < np.nan_to_num(limit, nan=-np.inf)),
        },
    )
    return Inputs(convert, empty(CALIBRATE), spots)


def _element(analyte: str) -> str:
    name = analyte.removesuffix("T")
    return parse_oxide(name if "O" in name[1:] else name.rstrip("0123456789")).element


def used(result: StageResult) -> dict[tuple[str, str], bool]:
    """(spot, analyte) -> used."""
    table = result.tables["screen"]
    rows = zip(*(table.column(name).to_pylist() for name in ("spot", "analyte", "use")), strict=True)
    return {(spot, analyte): use for spot, analyte, use in rows}


def found(result: StageResult, code: str) -> set[str]:
    """Labels of the spots with a finding of this code."""
    table = result.tables["screen.findings"]
    rows = zip(table.column("spot").to_pylist(), table.column("code").to_pylist(), strict=True)
    return {spot for spot, other in rows if other == code}
