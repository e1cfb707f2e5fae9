"""Stage `assess`: lines of evidence for equilibrium, side by side; the verdict stays with a person."""

from __future__ import annotations

from collections.abc import Mapping
from typing import TYPE_CHECKING

import numpy as np
import pyarrow as pa

from tieline.assess.condition_values import condition_values, varies
from tieline.assess.frames import Conditions, conditions_frame, frame, stage_table
from tieline.assess.mean_factors import mean_factors
from tieline.assess.overlap import overlap_checks
from tieline.assess.remarks import remarks
from tieline.assess.starting_composition import Start, read_starting_composition
from tieline.columns import EVIDENCE
from tieline.reading.input_file import InputFile
from tieline.results import Ledger, StageResult
from tieline.settings.assess import AssessSettings

if TYPE_CHECKING:
    import pandas as pd

PARTITION_COLUMNS = (
    "experiment", "alpha", "beta", "element", "D", "D_sd", "D_lo", "D_hi", "kind", "dof", "share_counting",
    "share_spread", "D_overlap_lo", "overlap_bound", "shared_sd_alpha", "shared_sd_beta",
    *(
        name.replace("*", side)
        for side in ("alpha", "beta")
        for name in (
            "technique_*", "batch_*", "analyte_*", "n_independent_*", "mean_*_ppm", "se_*_ppm", "counting_se_*_ppm", "dof_*",
        )
    ),
)  # fmt: skip
PAIR_COLUMNS = ("experiment", "phase", "element", "batch", "mean_ppm", "se_ppm", "dof")
Frames = dict[str, "pd.DataFrame"]


def assess(
    partition: pa.Table,
    partition_covariance: pa.Table,
    pair: pa.Table,
    pair_correlations: pa.Table,
    calibrate: pa.Table,
    ingest_experiments: pa.Table,
    *,
    settings: AssessSettings,
    files: Mapping[str, InputFile],
) -> StageResult:
    """Every check as a row of `assess`, and the side tables it rests on.

    Raises InputError for a starting composition that cannot be used.
    """
    start = read_starting_composition(files)
    D, means = frame(partition, PARTITION_COLUMNS), frame(pair, PAIR_COLUMNS)
    means = means.join(mean_factors(pair, calibrate))
    covariance = frame(partition_covariance, partition_covariance.column_names)
    conditions = conditions_frame(ingest_experiments, settings)
    parts = [
        _exchange(D, covariance, means, pair_correlations, conditions, settings),
        _lattice_strain(D, covariance, conditions, settings),
        _mass_balance(D, means, start, settings),
        _trends(D, conditions, means, settings),
    ]
    checks = [part.pop("assess") for part in parts]
    checks.append(overlap_checks(D))
    if settings.consistency:
        checks += _consistency(D, means, settings)
    frames = {name: table for part in parts for name, table in part.items()}
    every = [row for table in checks for row in table.to_dict("records")]
    tables = {
        spec.name: stage_table(spec, every if spec.name == "assess" else frames.get(spec.name))
        for spec in EVIDENCE
    }
    verdicts = tables["assess"].column("verdict").to_pylist()
    outcomes = {verdict: verdicts.count(verdict) for verdict in ("consistent", "differs", "cannot tell")}
    return StageResult(
        tables,
        Ledger("checks", len(verdicts), outcomes),
        remarks(every, conditions, means, D, start, settings),
    )


def _exchange(
    D: pd.DataFrame,
    covariance: pd.DataFrame,
    means: pd.DataFrame,
    correlations: pa.Table,
    conditions: Conditions,
    settings: AssessSettings,
) -> Frames:
    from tieline.assess.exchange import exchange_tables
    from tieline.assess.melt_iron import ferric_shares

    own = settings.exchange
    windows = {(one.phase, one.pair, one.beta): (one.low, one.high, one.source) for one in own.windows}
    shares, lacking = ferric_shares(means, conditions, settings)
    coefficients, checks = exchange_tables(
        D, covariance, frame(correlations, correlations.column_names), pairs=own.pairs, ferric=shares, lacking=lacking,
        windows=windows, melts=settings.melts, confidence=settings.confidence,
    )  # fmt: skip
    return {"assess": checks, "assess.exchange": coefficients}


def _lattice_strain(
    D: pd.DataFrame, covariance: pd.DataFrame, conditions: Conditions, settings: AssessSettings
) -> Frames:
    import pandas as pd

    from tieline.assess.evidence import CHECK_COLUMNS
    from tieline.assess.lattice_strain import lattice_strain_tables
    from tieline.statistics.lattice_strain import Prior

    own = settings.lattice_strain
    if not own.enabled:
        return {"assess": pd.DataFrame(columns=list(CHECK_COLUMNS))}
    priors: dict[tuple[str, int], dict[str, Prior]] = {}
    for known in own.known:
        given = {
            name: Prior(*value) for name, value in (("r0", known.r0), ("E", known.E)) if value is not None
        }
        priors.setdefault((known.phase, known.charge), {}).update(given)
    found = lattice_strain_tables(
        D, covariance, conditions.temperatures_C, coordination=own.coordination, charges=own.element_charges,
        fit_charges=own.charges, least_values=own.least_values, leave_out=own.leave_out, priors=priors,
        without_each=own.without_each, confidence=settings.confidence,
    )  # fmt: skip
    return {"assess": found.checks, "assess.curves": found.curves, "assess.elements": found.elements}


def _mass_balance(
    D: pd.DataFrame,
    means: pd.DataFrame,
    start: Mapping[tuple[str | None, str], Start],
    settings: AssessSettings,
) -> Frames:
    import pandas as pd

    from tieline.assess.bulk import bulk_partition, common_sd, modes_of_mixture, stated_modes
    from tieline.assess.evidence import CHECK_COLUMNS
    from tieline.assess.mass_balance import mass_balance_tables

    own = settings.mass_balance
    result: Frames = {"assess": pd.DataFrame(columns=list(CHECK_COLUMNS))}
    modes = {
        experiment: stated_modes(given, settings.modes.relative_sd, settings.confidence)
        for experiment, given in settings.modes.proportions.items()
    }
    if start:
        balance = mass_balance_tables(
            means, _starting_frame(start, means, own.starting_relative_sd), losable=own.losable,
            relative_sd=own.phases_relative_sd, sum_to_one=own.sum_to_one, largest_squares=own.largest_squares,
            confidence=settings.confidence,
        )  # fmt: skip
        result = {
            "assess": balance.checks, "assess.proportions": balance.proportions, "assess.balance": balance.residuals,
        }  # fmt: skip
        found = {
            experiment: modes_of_mixture(phases, mixture)
            for experiment, (phases, mixture) in balance.mixtures.items()
            if np.isfinite(mixture.proportions).all()
        }
        modes = found | modes
    if modes:
        result["assess.bulk"] = bulk_partition(D.assign(common_sd=common_sd(D)), modes)
    return result


def _starting_frame(
    start: Mapping[tuple[str | None, str], Start], means: pd.DataFrame, relative_sd: float
) -> pd.DataFrame:
    """One row per experiment and element: its own starting composition, else the one that holds for all."""
    import pandas as pd

    named = {experiment for experiment, _element in start if experiment is not None}
    rows = [
        (experiment, element, one.value_ppm, one.sd_ppm or relative_sd * one.value_ppm)
        for experiment in sorted(means["experiment"].unique())
        for (whose, element), one in start.items()
        if whose == (experiment if experiment in named else None)
    ]
    return pd.DataFrame(rows, columns=["experiment", "element", "value_ppm", "sd_ppm"])


def _trends(D: pd.DataFrame, conditions: Conditions, means: pd.DataFrame, settings: AssessSettings) -> Frames:
    import pandas as pd

    from tieline.assess.approach import approach_checks
    from tieline.assess.trends import trend_tables

    own = settings.trends
    made = []
    for condition in own.conditions:
        values = condition_values(condition, conditions, means, settings)
        if values is not None and varies(values.x):
            made.append(
                trend_tables(
                    D, condition, values.x, values.x_sd, settings.confidence, without_each=own.without_each,
                    predict=own.predict.get(condition, ()), common=values.common,
                )
            )  # fmt: skip
    approach = approach_checks(
        D, conditions.whole(), settings.duration, settings.same_conditions, settings.confidence
    )
    checks = [one.to_dict("records") for one in (*(each.checks for each in made), approach)]
    result: Frames = {
        "assess": pd.DataFrame([row for rows in checks for row in rows], columns=approach.columns)
    }
    for name in ("trends", "points", "predictions") if made else ():
        table = pd.concat([getattr(one, name) for one in made])
        result["assess.trends" if name == "trends" else f"assess.trend_{name}"] = table
    return result


def _consistency(D: pd.DataFrame, means: pd.DataFrame, settings: AssessSettings) -> list[pd.DataFrame]:
    from tieline.assess.consistency import rim_against_core, through_third_phase

    return [
        through_third_phase(D, settings.confidence),
        rim_against_core(means, confidence=settings.confidence),
    ]
