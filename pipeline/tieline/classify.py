"""Stage `classify`: the class of every D and how sure it is.

A class is declared exactly when the interval at the configured confidence lies inside it; D on a boundary
is then put on a given side in (1 - confidence)/2 of all cases.
"""

from __future__ import annotations

import numpy as np
import pyarrow as pa

from tieline.arrays import FloatArray, flags, labels, numbers
from tieline.columns import CLASSIFY, PARTITION
from tieline.results import Ledger, StageResult
from tieline.settings.results import ClassifySettings
from tieline.statistics.classes import class_probabilities, declared_class, probability_above_from_limits
from tieline.statistics.means import MeanEstimate
from tieline.statistics.ratios import probability_above
from tieline.tables import build

CLASSES = ("highly incompatible", "incompatible", "compatible")
UNRESOLVED = "unresolved"


def classify(partition: pa.Table, *, settings: ClassifySettings) -> StageResult:
    """The rows of `partition` with class and class probabilities."""
    boundaries = np.array([settings.highly_incompatible_below, settings.compatible_above])
    p_above = _probability_above(partition, boundaries)
    kind = labels(partition, "kind").text()
    probabilities = class_probabilities(p_above)
    # Where a needed uncertainty is unknown, the interval is too narrow to declare anything by.
    kind = np.where(flags(partition, "complete"), kind, "undetermined")
    number = declared_class(p_above, kind, settings.confidence)
    names = np.array([*CLASSES, UNRESOLVED], dtype=object)[number]
    for name, bounds in _widest_first(settings):
        # Judged against its own bounds alone, of which class 1 is the inside; D is never below zero.
        p_inside = _probability_above(partition, np.array(bounds))
        p_inside[:, 0] = np.where(bounds[0] == 0, 1.0, p_inside[:, 0])
        inside = declared_class(p_inside, kind, settings.confidence) == 1
        names[inside] = name
    columns = {column.name: partition.column(column.name) for column in PARTITION.columns}
    table = build(
        CLASSIFY,
        {
            **columns,
            "class": names,
            "p_highly_incompatible": probabilities[:, 0],
            "p_incompatible": probabilities[:, 1],
            "p_compatible": probabilities[:, 2],
        },
    )
    declarable = (*reversed(CLASSES), *settings.extra, UNRESOLVED)
    outcomes = {name: int((names == name).sum()) for name in declarable}
    return StageResult({"classify": table}, Ledger("D", partition.num_rows, outcomes))


def _widest_first(settings: ClassifySettings) -> list[tuple[str, tuple[float, float]]]:
    """Extra classes by falling width on a log scale, so that a narrower one is declared last and stands."""
    return sorted(settings.extra.items(), key=lambda item: (item[1][0] / item[1][1], -item[1][1], item[0]))


def _probability_above(partition: pa.Table, boundaries: FloatArray) -> FloatArray:
    """Probability that every D exceeds each boundary, shape (K, B), by the method that made its interval."""
    how = labels(partition, "interval").text()
    alpha, beta = (_estimate(partition, side) for side in ("alpha", "beta"))
    from_means = probability_above(
        alpha,
        beta,
        boundaries,
        u_alpha=numbers(partition, "shared_sd_alpha"),
        u_beta=numbers(partition, "shared_sd_beta"),
        # Means of two values always take the draws, so only a table without any Fieller interval needs telling.
        method="fieller" if (how == "fieller").any() else "gum-s1",
    )
    from_limits = probability_above_from_limits(
        numbers(partition, "D"),
        numbers(partition, "D_lo"),
        numbers(partition, "D_hi"),
        labels(partition, "kind").text(),
        boundaries,
        float(numbers(partition, "confidence").max(initial=0.5)),
    )
    return np.where((how == "likelihood")[:, None], from_limits, from_means)


def _estimate(partition: pa.Table, side: str) -> MeanEstimate:
    return MeanEstimate(
        numbers(partition, f"mean_{side}_ppm"),
        numbers(partition, f"se_{side}_ppm") ** 2,
        numbers(partition, f"counting_se_{side}_ppm") ** 2,
        np.nan_to_num(numbers(partition, f"dof_{side}")),
        np.asarray(numbers(partition, f"n_independent_{side}"), dtype=np.int64),
    )
