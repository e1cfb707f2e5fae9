"""What every line of evidence shares: the columns of a check, its verdicts, and the covariance of D's by pair."""

from __future__ import annotations

from collections.abc import Mapping
from typing import TYPE_CHECKING, Any

import numpy as np

if TYPE_CHECKING:
    import pandas as pd

CONSISTENT, DIFFERS, CANNOT_TELL = "consistent", "differs", "cannot tell"
PAIR_KEYS = ("experiment", "alpha", "beta")
CHECK_COLUMNS = (
    "check", *PAIR_KEYS, "subject", "value", "sd", "expected_lo", "expected_hi", "verdict", "detail",
)  # fmt: skip
EXCESS = 0.05
"""p-value below which scatter is taken as larger than the stated errors."""

Variances = dict[tuple[str, str], float]


def check(
    name: str, keys: Mapping[str, Any], subject: str, verdict: str, detail: str, **numbers: float
) -> dict[str, Any]:
    """One row of the `assess` table; keys: what is known of experiment, alpha and beta, numbers: value, sd, expected_*."""
    empty = dict.fromkeys(("value", "sd", "expected_lo", "expected_hi"), np.nan)
    pair = dict.fromkeys(PAIR_KEYS) | dict(keys)
    return {
        "check": name,
        **pair,
        "subject": subject,
        **empty,
        **numbers,
        "verdict": verdict,
        "detail": detail,
    }


def base_phase(phase: str) -> str:
    """`olivine` of `olivine (rim)`: a zone of a phase shares what is known of the phase."""
    return phase.split(" (")[0]


def by_pair(covariance: pd.DataFrame) -> dict[tuple[str, str, str], Variances]:
    """The covariance table as (experiment, alpha, beta) -> (element, other) -> covariance."""
    found: dict[tuple[str, str, str], Variances] = {}
    names = (*PAIR_KEYS, "element", "other", "covariance")
    # Whole columns as objects first: a data frame takes ten times longer to hand out its texts one by one.
    columns = [covariance[name].to_numpy(dtype=object) for name in names]
    for experiment, alpha, beta, element, other, value in zip(*columns, strict=True):
        found.setdefault((experiment, alpha, beta), {})[element, other] = float(value)
    return found
