"""Stage `assess`: lines of evidence for equilibrium, side by side; the verdict stays with a person."""

from __future__ import annotations

import pyarrow as pa

from tieline.columns import ASSESS
from tieline.results import Ledger, StageResult
from tieline.settings.results import AssessSettings
from tieline.tables import empty


def assess(
    classify: pa.Table,
    partition_covariance: pa.Table,
    pair: pa.Table,
    ingest_experiments: pa.Table,
    *,
    settings: AssessSettings,
) -> StageResult:
    """No checks yet: the table of evidence is empty."""
    return StageResult({"assess": empty(ASSESS)}, Ledger("checks", 0, {}))
