"""What the phase means have in common: the calibration of their session, and what each has of its own."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np
import pyarrow as pa

from tieline.mean_sources import MeanSources

if TYPE_CHECKING:
    import pandas as pd


def mean_factors(pair: pa.Table, calibrate: pa.Table) -> pd.DataFrame:
    """One row per phase mean of `pair`: relative standard uncertainties of its factors.

    calibration_sd: of the calibration, NaN where unknown; means with one calibration_key share it. own_sd: of what the
    mean shares with no other phase: matrix, internal standard and the calibration behind it.
    """
    import pandas as pd

    sources = MeanSources(pair, calibrate)
    own = np.sqrt(sources.matrix**2 + sources.internal_standard**2 + sources.standard_calibration**2)
    return pd.DataFrame(
        {
            "calibration_sd": np.where(sources.calibration_known, sources.calibration, np.nan),
            "calibration_key": sources.calibration_key,
            "own_sd": own,
        }
    )
