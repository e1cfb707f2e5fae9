"""How well the screening statistics find what they are for, on simulated spots of known truth.

    python tests/benchmarks/screening.py [--quick] [--out DIR]

Prints tables and, with --out, writes each as CSV. The simulator and its invented compositions are described in
`simulate_spots`. Beside the program's matched filter stand the procedures it is meant to replace: generalized ESD
with Bonferroni's correction over the elements, and the modified z of 3.5, both per element, a spot being rejected
when any element rejects it. Seeds are fixed; they are not those the method was tried out with.
"""

import argparse
import csv
import sys
from collections.abc import Callable, Iterable
from pathlib import Path

import numpy as np
import numpy.typing as npt

sys.path[:0] = [str(Path(__file__).parents[1]), str(Path(__file__).parents[2] / "pipeline")]

from simulate_spots import Phase, Spots, oracle_filter, oracle_sd_fraction, phase, simulate  # noqa: E402
from tieline.statistics.means import MeanEstimate, phase_means, pooled_sigmas  # noqa: E402
from tieline.statistics.outliers import generalized_esd, joint_outliers, modified_z  # noqa: E402
from tieline.statistics.overlap import ORACLE_FACTOR, OverlapScores, overlap_scores  # noqa: E402
from tieline.statistics.overlap_bound import OverlapBound, overlap_bound  # noqa: E402
from tieline.statistics.overlap_unmix import unmix  # noqa: E402
from tieline.statistics.ratios import ratio_interval  # noqa: E402
from tieline.statistics.zoning import zoning_scores  # noqa: E402

Array = npt.NDArray[np.float64]
Mask = npt.NDArray[np.bool_]
Row = dict[str, str | float | int]

SEED = 8_204_517
HOSTS = ("olivine", "clinopyroxene", "plagioclase")
MULTIPLES = np.array([0.8, 1.0, 1.1, 1.2, 1.3, 1.4, 1.6, 2.0, 3.0, 5.0, 8.0])


def score(spots: Spots, nuisance: str = "yield-and-growth") -> OverlapScores:
    """The program's scores of simulated groups, with the contaminant as measured."""
    return overlap_scores(
        spots.values,
        spots.sigmas,
        spots.glass_mean,
        spots.glass_variance,
        spots.phase.is_trace,
        nuisance=nuisance,
    )


def rejected_by_esd(spots: Spots) -> Mask:
    """Spots (G, n) rejected by the generalized ESD of any element, alpha 0.05 over the number of elements."""
    by_element = np.swapaxes(spots.values, 1, 2)
    most = max(1, spots.values.shape[1] // 2)
    return generalized_esd(by_element, most, 0.05 / by_element.shape[1]).outlier.any(axis=1)


def rejected_by_modified_z(spots: Spots) -> Mask:
    """Spots (G, n) with |modified z| > 3.5 of any element."""
    return np.any(np.abs(modified_z(np.swapaxes(spots.values, 1, 2))) > 3.5, axis=1)


PROCEDURES: dict[str, Callable[[Spots], Mask]] = {
    "matched filter": lambda spots: score(spots).overlapped,
    "generalized ESD": rejected_by_esd,
    "modified z": rejected_by_modified_z,
}

# name, spots, contaminated, spread, growth zoning over the spots
DETECTION_CELLS = (
    ("n = 4, 1 contaminated", 4, 1, 0.0, 0.0),
    ("n = 8, 1 contaminated", 8, 1, 0.0, 0.0),
    ("n = 16, 1 contaminated", 16, 1, 0.0, 0.0),
    ("n = 10, 7 contaminated", 10, 7, 0.0, 0.0),
    ("n = 4, spread 15 %", 4, 1, 0.15, 0.0),
    ("n = 8, spread 15 %", 8, 1, 0.15, 0.0),
    ("n = 10, 7 contaminated, spread 15 %", 10, 7, 0.15, 0.0),
    ("n = 8, zoned by 50 %", 8, 1, 0.0, 0.5),
)


def _growth(spots: int, amount: float) -> Array:
    return amount * (np.arange(spots) / max(1, spots - 1) - 0.5)[None, :]


def detectable(
    cell: tuple[str, int, int, float, float], host: str, technique: str, replicates: int
) -> dict[str, float]:
    """Fraction found in 95 % of cases over that of the oracle, by procedure; inf when none of the grid is.

    The oracle knows composition, zoning, spread and variances, and calls one clean spot in 1,000 contaminated; its
    own fraction is given in units of 4.735 of its standard deviations for a clean spot, which it exceeds where a
    contaminated spot is noisier. Of several contaminated spots the one asked for has the fraction of the grid, the
    others 1 to 30 such units.
    """
    _, spots, contaminated, spread, zoned = cell
    of = phase(host, technique)
    weights, sd = oracle_filter(of, spread)
    unit = ORACLE_FACTOR * sd
    recall: dict[str, list[float]] = {name: [] for name in ("oracle", *PROCEDURES)}
    for place, multiple in enumerate(MULTIPLES):
        rng = np.random.default_rng([SEED, spots, contaminated, int(100 * spread), int(100 * zoned), place])
        fraction = np.zeros((replicates, spots))
        fraction[:, 0] = multiple * unit
        fraction[:, 1:contaminated] = unit * 30 ** rng.uniform(0, 1, (replicates, contaminated - 1))
        growth = rng.permuted(np.repeat(_growth(spots, zoned), replicates, axis=0), axis=1)
        made = simulate(rng, fraction, host=host, technique=technique, spread=spread, growth=growth)
        for name, rejected in PROCEDURES.items():
            recall[name].append(float(rejected(made)[:, 0].mean()))
        unzoned = simulate(rng, fraction[:, :1], host=host, technique=technique, spread=spread)
        found = (unzoned.values[:, 0] - of.host_ppm) @ weights > 3.090 * sd
        recall["oracle"].append(float(found.mean()))
    crossing = {name: _crossing(np.array(values)) for name, values in recall.items()}
    oracle = crossing["oracle"]
    return {"oracle": oracle} | {name: crossing[name] / oracle for name in PROCEDURES}


def _crossing(recall: Array, wanted: float = 0.95) -> float:
    above = np.nonzero(recall >= wanted)[0]
    if len(above) == 0:
        return float("inf")
    i = int(above[0])
    if i == 0:
        return float(MULTIPLES[0])
    part = (wanted - recall[i - 1]) / (recall[i] - recall[i - 1])
    return float(MULTIPLES[i - 1] + part * (MULTIPLES[i] - MULTIPLES[i - 1]))


def detection_table(replicates: int, hosts: Iterable[str] = HOSTS) -> list[Row]:
    """One row per host, technique and cell: detectable fraction over the oracle's."""
    return [
        {"host": host, "technique": technique, "cell": cell[0]}
        | detectable(cell, host, technique, replicates)
        for host in hosts
        for technique in ("probe", "laser")
        for cell in DETECTION_CELLS
    ]


def false_alarm_table(replicates: int, hosts: Iterable[str] = HOSTS) -> list[Row]:
    """Percentage of clean spots rejected, by procedure; "foreign" the residual test, "joint" the joint test."""
    cells = [(n, spread, 0.0) for spread in (0.0, 0.15) for n in (4, 6, 8, 16)] + [
        (8, 0.05, 0.5),
        (12, 0.05, 0.5),
    ]
    rows: list[Row] = []
    for host in hosts:
        for technique in ("probe", "laser"):
            for n, spread, zoned in cells:
                rng = np.random.default_rng([SEED, 2, n, int(100 * spread), int(100 * zoned)])
                growth = _growth(n, zoned)
                made = simulate(
                    rng,
                    np.zeros((replicates, n)),
                    host=host,
                    technique=technique,
                    spread=spread,
                    growth=growth,
                )
                row: Row = {"host": host, "technique": technique, "n": n, "spread": spread, "zoned": zoned}
                row |= {name: 100 * float(f(made).mean()) for name, f in PROCEDURES.items()}
                row["foreign"] = 100 * float(score(made).foreign.mean())
                row["joint, % of groups"] = 100 * float(
                    joint_outliers(made.values).outlier.any(axis=1).mean()
                )
                rows.append(row)
    return rows


def _clean_and_contaminated(
    rng: np.random.Generator, replicates: int, n: int, contaminated: int, unit: float
) -> Array:
    fraction = np.zeros((replicates, n))
    low, high = unit, 0.1
    fraction[:, :contaminated] = low * (high / low) ** rng.uniform(0, 1, (replicates, contaminated))
    return fraction


def contamination(name: str, rng: np.random.Generator, replicates: int, unit: float) -> Array:
    """Fractions (G, n) of a named situation; unit is the oracle's detectable fraction."""
    if name == "clean":
        return np.zeros((replicates, 8))
    if name == "1 of 8":
        return _clean_and_contaminated(rng, replicates, 8, 1, unit)
    if name == "6 of 10":
        return _clean_and_contaminated(rng, replicates, 10, 6, unit)
    if name == "8 of 10":
        return _clean_and_contaminated(rng, replicates, 10, 8, unit)
    if name == "all, small and varied":
        return unit * rng.uniform(0, 1, (replicates, 10))
    if name == "all, wide":
        return _clean_and_contaminated(rng, replicates, 10, 10, unit)
    if name == "all alike, 0.2 %":
        return np.full((replicates, 10), 0.002)
    raise ValueError(name)


SITUATIONS = (
    "clean",
    "1 of 8",
    "6 of 10",
    "8 of 10",
    "all, small and varied",
    "all, wide",
    "all alike, 0.2 %",
)


def partition_coefficients(spots: Spots, use: Mask) -> tuple[Array, Array, Array]:
    """D from the means and its interval (G, p), from the program's own functions, for the spots in `use`."""
    groups, _, elements = spots.values.shape

    def means(values: Array, sigmas: Array, keep: Mask) -> MeanEstimate:
        count = groups * elements
        code = np.broadcast_to(np.arange(count).reshape(groups, 1, elements), values.shape)
        kept = np.broadcast_to(keep[..., None], values.shape)
        x, group = values[kept], code[kept]
        pooled = pooled_sigmas(x, sigmas[kept], group, count)
        return phase_means(x, pooled, group, count).estimate(np.arange(count))

    host = means(spots.values, spots.sigmas, use)
    glass = means(spots.glass_values, spots.glass_sigmas, np.ones(spots.glass_values.shape[:2], dtype=bool))
    interval = ratio_interval(host, glass)
    shape = (groups, elements)
    return (host.mean / glass.mean).reshape(shape), interval.low.reshape(shape), interval.high.reshape(shape)


def coefficient_table(replicates: int, hosts: Iterable[str] = HOSTS) -> list[Row]:
    """Bias and coverage of D of the three most incompatible traces after each procedure, and of the bound F.

    bias: mean estimate over the truth; coverage in % of the intervals there are; none: % without interval. "all":
    coverage over all elements, which shows what screening costs on clean sessions.
    """
    rows: list[Row] = []
    for host in hosts:
        of = phase(host, "laser")
        lowest = np.argsort(of.coefficients)[:3]
        for number, name in enumerate(SITUATIONS):
            rng = np.random.default_rng([SEED, 3, number])
            unit = ORACLE_FACTOR * oracle_sd_fraction(of, 0.05)
            fraction = contamination(name, rng, replicates, unit)
            spots = simulate(rng, fraction, host=host, technique="laser", spread=0.05)
            scores = score(spots)
            keep_all = np.ones(fraction.shape, dtype=bool)
            keeps = {
                "none": keep_all,
                "modified z": ~rejected_by_modified_z(spots),
                "generalized ESD": ~rejected_by_esd(spots),
                "matched filter": ~(scores.overlapped | scores.foreign),
            }
            common: Row = {"host": host, "situation": name}
            for procedure, keep in keeps.items():
                rows.append(
                    common
                    | {"procedure": procedure}
                    | _judge(of, lowest, *partition_coefficients(spots, keep))
                )
            estimates = partition_coefficients(spots, keep_all)
            bound = _bound(spots)
            rows.append(
                common | {"procedure": "unmixed"} | _judge(of, lowest, *_unmixed(spots, scores, bound))
            )
            judged = _judge(of, lowest, estimates[0], bound.lowest, bound.highest)
            judged["F covers"] = 100 * float(np.mean(bound.fraction >= fraction.mean(axis=1)))
            rows.append(common | {"procedure": "bound"} | judged)
    return rows


def _judge(of: Phase, lowest: npt.NDArray[np.intp], value: Array, low: Array, high: Array) -> Row:
    truth = of.coefficients
    known = np.isfinite(low) & np.isfinite(high)
    inside = (low <= truth) & (truth <= high)
    wanted = np.zeros(known.shape, dtype=bool)
    wanted[:, lowest] = True
    return {
        "bias": float(np.nanmean(value[:, lowest] / truth[lowest])),
        "coverage": 100 * float(inside[known & wanted].mean()),
        "coverage all": 100 * float(inside[known].mean()),
        "without interval": 100 * float(1 - known[wanted].mean()),
    }


def _se(values: Array) -> Array:
    return values.std(axis=1, ddof=1) / np.sqrt(values.shape[1])


def _bound(spots: Spots) -> OverlapBound:
    host, glass = spots.values.mean(axis=1), spots.glass_mean
    apparent = host / glass
    error = np.hypot(_se(spots.values) / glass, apparent * _se(spots.glass_values) / glass)
    return overlap_bound(apparent, error, np.full(apparent.shape, spots.values.shape[1] - 1.0))


def _unmixed(spots: Spots, scores: OverlapScores, bound: OverlapBound) -> tuple[Array, Array, Array]:
    from scipy.special import stdtrit

    result = unmix(spots.values, spots.sigmas, spots.glass_variance, scores)
    glass = spots.glass_mean
    value = result.mean / glass
    error = np.hypot(np.sqrt(result.variance) / glass, value * _se(spots.glass_values) / glass)
    half = stdtrit(result.degrees_of_freedom, 0.975) * error
    low = value - half - np.maximum(result.widening, 0) / glass
    high = value + half - np.minimum(result.widening, 0) / glass
    needs = result.needs_bound[:, None]
    low = np.where(needs, np.minimum(low, bound.lowest), low)
    high = np.where(needs, np.maximum(high, bound.highest), high)
    return value, np.maximum(low, 0.0), high


def zoning_table(replicates: int, hosts: Iterable[str] = HOSTS) -> list[Row]:
    """Percentage of groups called zoned: three grains of four spots each, alpha 0.01."""
    position = np.tile(np.arange(4) / 3, 3)[None, :]
    grain = np.repeat(np.arange(3), 4)[None, :]
    rows: list[Row] = []
    for host in hosts:
        for spread in (0.03, 0.05, 0.10):
            row: Row = {"host": host, "spread": spread}
            for number, name in enumerate(
                ("clean", "contaminated rim", "grains differ", "10 %", "20 %", "50 %")
            ):
                rng = np.random.default_rng([SEED, 4, number, int(100 * spread)])
                distance = np.repeat(position, replicates, axis=0)
                growth: Array = np.zeros_like(distance)
                fraction = np.zeros_like(distance)
                if name == "contaminated rim":
                    fraction = np.where(distance < 0.2, 10 ** rng.uniform(-4, -2, distance.shape), 0.0)
                elif name == "grains differ":
                    growth = 0.2 * rng.standard_normal((replicates, 3))[:, grain[0]]
                    distance = 0.3 * distance + grain
                elif name != "clean":
                    growth = float(name.split()[0]) / 100 * distance
                spots = simulate(rng, fraction, host=host, technique="laser", spread=spread, growth=growth)
                scores = score(spots)
                grains = np.broadcast_to(grain, distance.shape)
                zoned = zoning_scores(
                    spots.values,
                    scores.level,
                    spots.glass_mean,
                    scores.spot_variance,
                    spots.phase.is_trace,
                    distance,
                    grains,
                    ~scores.foreign,
                )
                row[name] = 100 * float(zoned.zoned.mean())
            rows.append(row)
    return rows


def remark_table(replicates: int, hosts: Iterable[str] = HOSTS) -> list[Row]:
    """The remarks: scatter of all spots (% at p < 0.01), misstated sigma, and crystal in glass."""
    rows: list[Row] = []
    for host in hosts:
        for technique in ("probe", "laser"):
            unit = oracle_sd_fraction(phase(host, technique), 0.0)
            rng = np.random.default_rng([SEED, 5])
            clean = np.zeros((replicates, 10))
            row: Row = {"host": host, "technique": technique}
            quiet = score(simulate(rng, clean, host=host, technique=technique))
            some = score(
                simulate(rng, unit * rng.exponential(3, clean.shape), host=host, technique=technique)
            )
            row["scatter, clean"] = 100 * float(np.mean(quiet.overdispersion_p < 0.01))
            row["scatter, all f ~ 3 sd"] = 100 * float(np.mean(some.overdispersion_p < 0.01))
            for factor in (0.5, 1.5):
                one = clean.copy()
                one[:, 0] = 1.3 * ORACLE_FACTOR * unit
                made = simulate(rng, one, host=host, technique=technique)
                misstated = Spots(
                    made.phase, made.values, factor * made.sigmas, made.glass_values, made.glass_sigmas, one
                )
                scores = score(misstated)
                row[f"sigma × {factor}: false alarms"] = 100 * float(scores.overlapped[:, 1:].mean())
                row[f"sigma × {factor}: recall"] = 100 * float(scores.overlapped[:, 0].mean())
                row[f"sigma × {factor}: mswd"] = float(np.nanmedian(scores.mswd))
            glass = score(simulate(rng, clean, host=host, technique=technique, exchanged=True), "yield")
            row["crystal in glass: false alarms"] = 100 * float(glass.overlapped.mean())
            row["crystal in glass: detectable %"] = 100 * float(np.median(glass.detectable_fraction))
            rows.append(row)
    return rows


TABLES: dict[str, Callable[[int], list[Row]]] = {
    "detection": detection_table,
    "false_alarms": false_alarm_table,
    "coefficients": coefficient_table,
    "zoning": zoning_table,
    "remarks": remark_table,
}


def show(title: str, rows: list[Row]) -> None:
    """Print rows as an aligned table."""
    cells = [_columns(rows)]
    cells += [[_text(row.get(k, "")) for k in cells[0]] for row in rows]
    widths = [max(len(line[i]) for line in cells) for i in range(len(cells[0]))]
    print(f"\n{title}")
    for line in cells:
        print("  ".join(text.ljust(width) for text, width in zip(line, widths, strict=True)).rstrip())


def _columns(rows: list[Row]) -> list[str]:
    return list(dict.fromkeys(key for row in rows for key in row))


def _text(value: str | float | int) -> str:
    return f"{value:.2f}" if isinstance(value, float) else str(value)


def main(arguments: list[str] | None = None) -> None:
    """Run the tables and print them; with --out also write CSV."""
    parser = argparse.ArgumentParser(
        description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter
    )
    parser.add_argument("--quick", action="store_true", help="100 replicates per cell instead of 1,000")
    parser.add_argument("--out", type=Path, help="folder for one CSV file per table")
    parser.add_argument("--table", choices=sorted(TABLES), help="only this table")
    options = parser.parse_args(arguments)
    replicates = 100 if options.quick else 1_000
    for name, make in TABLES.items():
        if options.table not in (None, name):
            continue
        rows = make(replicates)
        show(f"{name} ({replicates} replicates per cell)", rows)
        if options.out:
            options.out.mkdir(parents=True, exist_ok=True)
            with (options.out / f"{name}.csv").open("w", newline="", encoding="utf-8") as stream:
                writer = csv.DictWriter(stream, _columns(rows))
                writer.writeheader()
                writer.writerows(rows)


if __name__ == "__main__":
    main()
