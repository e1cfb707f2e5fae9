"""Do independent ways to the same D agree: by way of a third phase, and rim against core."""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

import numpy as np
from scipy import special

from tieline.assess.evidence import CANNOT_TELL, CHECK_COLUMNS, CONSISTENT, DIFFERS, check

if TYPE_CHECKING:
    import pandas as pd

_SAME = 1e-9


def through_third_phase(partition: pd.DataFrame, confidence: float = 0.95) -> pd.DataFrame:
    """D(a/b) against D(a/c) / D(b/c) wherever all three exist, as rows of the `assess` table.

    value: ln of their ratio, sd as if the three D were independent, which is its largest possible size but for negative
    correlation. Built from the same means the ratio is one exactly; a difference says that the pairs used different means.
    """
    import pandas as pd

    usable = partition[(partition["kind"] == "value") & (partition["D"] > 0) & (partition["D_sd"] > 0)]
    usable = usable[["experiment", "alpha", "beta", "element", "D", "D_sd"]]
    direct = usable.merge(usable, on=["experiment", "element", "alpha"], suffixes=("", "_a"))
    direct = direct[direct["beta"] != direct["beta_a"]]
    third = usable.rename(columns={"alpha": "b", "beta": "beta_a", "D": "D_b", "D_sd": "D_sd_b"})
    every = direct.merge(
        third, left_on=["experiment", "element", "beta", "beta_a"], right_on=["experiment", "element", "b", "beta_a"]
    )  # fmt: skip
    every = every.sort_values(["experiment", "alpha", "beta", "element", "beta_a"], kind="stable")
    rows = []
    z = float(special.ndtri(0.5 + 0.5 * confidence))
    for one in every.to_dict("records"):
        difference = float(np.log(one["D"] * one["D_b"] / one["D_a"]))
        sd = float(np.sqrt(sum((one[f"D_sd{part}"] / one[f"D{part}"]) ** 2 for part in ("", "_a", "_b"))))
        same = abs(difference) < _SAME
        words = "the same means, so equal by construction" if same else "the pairs used different means"
        rows.append(
            check(
                "consistency", {key: one[key] for key in ("experiment", "alpha", "beta")},
                f"{one['element']}: by way of {one['beta_a']}",
                CONSISTENT if same or abs(difference) <= z * sd else DIFFERS,
                f"ln of D({one['alpha']}/{one['beta']}) over D({one['alpha']}/{one['beta_a']}) / "
                f"D({one['beta']}/{one['beta_a']}): {words}.",
                value=difference, sd=sd, expected_lo=0.0, expected_hi=0.0,
            )
        )  # fmt: skip
    return pd.DataFrame(rows, columns=list(CHECK_COLUMNS))


def rim_against_core(
    pair: pd.DataFrame, rim: str = "rim", core: str = "core", confidence: float = 0.95
) -> pd.DataFrame:
    """Means of phases split into zones, `olivine (rim)` and `olivine (core)`, element by element within one batch.

    pair: columns experiment, phase, element, batch, mean_ppm, se_ppm, dof as in the stage file. value: ln(rim/core), which is
    ln of the ratio of their D's over any common beta; calibration and beta cancel. The verdict uses Student's t with
    Welch's degrees of freedom (Welch 1947, Biometrika 34:28) and Holm's correction (1979, Scand. J. Stat. 6:65) over the
    elements of a phase. "cannot tell" where a mean is missing, has no error or is not above zero.
    """
    import pandas as pd

    columns = ["experiment", "element", "batch", "mean_ppm", "se_ppm", "dof"]
    parts = []
    for zone in (rim, core):
        ending = f" ({zone})"
        own = pair[pair["phase"].str.endswith(ending)]
        parts.append(own[columns].assign(phase=own["phase"].str.removesuffix(ending)))
    both = parts[0].merge(
        parts[1], on=["experiment", "phase", "element", "batch"], suffixes=("_rim", "_core")
    )
    both = both.sort_values(["experiment", "phase", "batch", "element"], kind="stable")
    rows: list[dict[str, Any]] = []
    for (experiment, phase, batch), group in both.groupby(
        ["experiment", "phase", "batch"], sort=True, observed=True
    ):
        difference, sd, p_values = _welch(group)
        rejected = holm(p_values, 1 - confidence)
        for element, value, error, p_value, out in zip(
            group["element"], difference, sd, p_values, rejected, strict=True
        ):
            told = np.isfinite(p_value)
            verdict = (DIFFERS if out else CONSISTENT) if told else CANNOT_TELL
            words = (
                f"ln({rim}/{core}), batch {batch}, p {p_value:.2g}, judged over {len(group)} elements together."
                if told
                else "A mean is missing, without an error, or not above zero."
            )
            keys = {"experiment": experiment, "alpha": phase}
            rows.append(
                check(
                    "rim-core", keys, str(element), verdict, words, value=float(value), sd=float(error),
                    expected_lo=0.0, expected_hi=0.0,
                )
            )  # fmt: skip
    return pd.DataFrame(rows, columns=list(CHECK_COLUMNS))


def _welch(group: pd.DataFrame) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    mean, se, dof = (
        group[[f"{name}_rim", f"{name}_core"]].to_numpy(dtype=np.float64)
        for name in ("mean_ppm", "se_ppm", "dof")
    )
    usable = np.all((mean > 0) & (se > 0) & (dof > 0), axis=1)
    parts = np.where(usable[:, None], (se / np.where(mean > 0, mean, 1.0)) ** 2, np.nan)
    difference = np.full(len(group), np.nan)
    difference[usable] = np.log(mean[usable, 0] / mean[usable, 1])
    variance = parts.sum(axis=1)
    welch = variance**2 / np.sum(parts**2 / np.where(dof > 0, dof, 1.0), axis=1)
    sd = np.sqrt(variance)
    return difference, sd, 2.0 * special.stdtr(welch, -np.abs(difference) / sd)


def holm(p_values: np.ndarray, level: float) -> np.ndarray:
    """Which hypotheses fall at a family-wise level; missing p-values do not count."""
    told = np.flatnonzero(np.isfinite(p_values))
    order = told[np.argsort(p_values[told], kind="stable")]
    rejected = np.zeros(len(p_values), dtype=bool)
    for rank, index in enumerate(order):
        if p_values[index] > level / (len(order) - rank):
            break
        rejected[index] = True
    return rejected
