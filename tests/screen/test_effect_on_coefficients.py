"""What screening does to D: next to nothing on clean sessions, and the truth where most spots are contaminated.

A small version of what was measured with 150 experiments per case; here the seeds are fixed and the numbers few.
"""

import numpy as np

from screen.synthetic import Block, inputs
from simulate_spots import phase, simulate
from tieline.columns import CALIBRATE, CONVERT_STANDARDS
from tieline.pair import pair
from tieline.partition import partition
from tieline.settings.results import PairSettings, PartitionSettings
from tieline.tables import build, empty

OFF = {
    name: {"enabled": False}
    for name in ("total", "cations", "identity", "overlap", "zoning", "outlier", "imprecise")
}
EXPERIMENTS = 40


def session(seed, fraction, spread=0.05):
    rng = np.random.default_rng(seed)
    crystal = simulate(rng, fraction, technique="laser", spread=spread)
    glass = simulate(rng, np.zeros_like(fraction), technique="laser", exchanged=True)
    return inputs(
        [
            Block(f"E{at:02}", name, spots.phase.elements, spots.values[at], spots.sigmas[at], "laser")
            for name, spots in (("olivine", crystal), ("glass", glass))
            for at in range(len(fraction))
        ]
    )


def exact_calibration(analytes):
    """A calibration without any error: what is tested is what screening alone does. analytes: analyte -> element."""
    size = len(analytes)
    columns = {column.name: [None] * size for column in CALIBRATE.columns}
    columns |= {"technique": ["laser"] * size, "batch": ["laser-1"] * size, "analyte": list(analytes)}
    columns["element"] = list(analytes.values())
    columns |= {"n_spots": [0] * size, "n_materials": [0] * size, "factor": [1.0] * size}
    columns |= {name: [0.0] * size for name in ("drift_applied", "drift_left", "relative_sd", "matrix_sd")}
    return build(CALIBRATE, {**columns, "origin": ["configured"] * size})


def coefficients(tables, **settings):
    """True D, D and whether its interval covers the truth, one entry per experiment and element."""
    of = phase("olivine", "laser")
    names = tables.convert.select(["analyte", "element"]).to_pylist()
    calibrate = exact_calibration({row["analyte"]: row["element"] for row in names})
    used = tables.screen(**settings).tables["screen"]
    means = pair(
        tables.convert, empty(CONVERT_STANDARDS), calibrate, used, tables.spots, settings=PairSettings()
    ).tables
    table = partition(
        means["pair"], means["pair.pairs"], means["pair.limits"], calibrate, settings=PartitionSettings()
    ).tables["partition"]
    truth = dict(zip(of.elements, of.coefficients, strict=True))
    true = np.array([truth[element] for element in table.column("element").to_pylist()])
    low, high, value = (
        np.array(table.column(name).to_pylist(), dtype=float) for name in ("D_lo", "D_hi", "D")
    )
    covered = (np.nan_to_num(low) <= true) & (true <= np.nan_to_num(high, nan=np.inf))
    return true, value, covered


def test_screening_costs_clean_sessions_nothing():
    tables = session(61, np.zeros((EXPERIMENTS, 6)))
    with_screening = coefficients(tables)[2].mean()
    without = coefficients(tables, **OFF)[2].mean()
    assert without > 0.94
    assert abs(with_screening - without) < 0.01


def test_the_lowest_coefficients_survive_six_contaminated_spots_of_ten():
    fraction = np.zeros((EXPERIMENTS, 10))
    fraction[:, :6] = 10 ** np.random.default_rng(62).uniform(-3, -1.3, (EXPERIMENTS, 6))
    tables = session(63, fraction)
    true, value, covered = coefficients(tables)
    lowest = true < 1e-3
    assert covered[lowest].mean() >= 0.93
    assert abs(np.nanmedian(value[lowest] / true[lowest]) - 1) < 0.05
    untreated = coefficients(tables, **OFF)
    assert np.nanmedian(untreated[1][lowest] / true[lowest]) > 10
