"""Small frames in the shape of the stage files, for the tests of the evidence."""

import numpy as np
import pandas as pd


def partition(rows: list[dict], **common) -> pd.DataFrame:
    """Partition rows; D_sd 5 %, a plain value with 8 degrees of freedom, unless the row says otherwise."""
    filled = []
    for row in rows:
        whole = {
            "experiment": "A", "alpha": "olivine", "beta": "glass", "kind": "value", "dof": 8.0,
            "share_counting": 0.4, "share_spread": 0.6, "share_calibration": 0.0, "share_internal_standard": 0.0,
        } | common | row  # fmt: skip
        D = whole.get("D", np.nan)
        whole.setdefault("D", np.nan)
        whole.setdefault("D_sd", 0.05 * D)
        whole.setdefault("D_lo", D * 0.9)
        whole.setdefault("D_hi", D * 1.1)
        for name, value in _means(whole).items():
            whole.setdefault(name, value)
        filled.append(whole)
    return pd.DataFrame(filled)


def _means(row: dict) -> dict:
    """Nine spots per phase, alpha's D times beta's 100 ppm, each mean with half of D's variance, all of it from the spots."""
    relative = row["D_sd"] / row["D"] / np.sqrt(2) if row["D"] > 0 else np.nan
    columns = {"shared_sd_alpha": 0.0, "shared_sd_beta": 0.0}
    for side, mean in (("alpha", 100.0 * row["D"]), ("beta", 100.0 if row["D"] > 0 else np.nan)):
        columns |= {
            f"mean_{side}_ppm": mean, f"se_{side}_ppm": relative * mean, f"counting_se_{side}_ppm": 0.3 * relative * mean,
            f"dof_{side}": 8.0, f"n_independent_{side}": 9, f"technique_{side}": "probe", f"batch_{side}": "1",
            f"analyte_{side}": row["element"],
        }  # fmt: skip
    return columns


def covariance(table: pd.DataFrame, shared_relative_sd: float = 0.0) -> pd.DataFrame:
    """The covariance table of a partition table: variances, and a relative error common to all elements of a pair."""
    rows = []
    for keys, group in table[table["kind"] == "value"].groupby(["experiment", "alpha", "beta"]):
        D, sd, names = group["D"].to_numpy(), group["D_sd"].to_numpy(), group["element"].tolist()
        for one in range(len(names)):
            for two in range(one, len(names)):
                value = sd[one] ** 2 if one == two else shared_relative_sd**2 * D[one] * D[two]
                rows.append([*keys, names[one], names[two], value])
    return pd.DataFrame(rows, columns=["experiment", "alpha", "beta", "element", "other", "covariance"])
