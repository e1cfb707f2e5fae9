"""The interval and the class of one D with every number that their formulas need."""

from __future__ import annotations

import math
from collections.abc import Mapping
from typing import Any

import numpy as np
import pyarrow as pa
from scipy import special

from tieline.arrays import numbers
from tieline.settings import SessionSettings
from tieline.settings.results import PartitionSettings
from tieline.statistics.censored import censored_limits
from tieline.statistics.limits import mean_limits
from tieline.statistics.means import MeanEstimate
from tieline.statistics.ratios import fieller_set

Row = Mapping[str, Any]
SIDES = ("alpha", "beta")

FIELLER = "ends: roots D of (b² − q²·V_b) D² − 2 a b D + (a² − q²·V_a) = 0; V = se² + (u·mean)²; the wider of the two"
UNSHARED = (
    "u² = (w·calibration)² + matrix² + (w·internal standard)² + (calibration of the standard)² of a mean, as far as "
    "they do not cancel, u_a² with the drift's square of the budget; w = t(dof of that factor)/z, 1 where it has none"
)
DOF = (
    "1/dof = Σ rᵢ^x / dofᵢ, r: share of each mean in (b²·se_a² + a²·se_b² + (a b)²(u_a² + u_b²)), "
    "x = 1 + (smaller dof / larger dof)(1 − r_u)⁴ − ½ r_u (1 − r_u)"
)
DRAWS = (
    "ends: quantiles of the ratio of mean + se·t(dof), t drawn at 8192 fixed points, both means positive; "
    "no narrower than by counting"
)
MOVER = (
    "low = L_a(2a − L_a) / (a b + √((a b)² − L_a(2a − L_a)·U_b(2b − U_b))); high: 1/low of b/a; "
    "L, U: limits of a mean, those of beta (alpha, where beta is below its limits) drawn apart by z·u·mean"
)
LIMITS = (
    "limits of a mean with values known only as limits: where its profile likelihood has fallen by "
    "½ n ln(1 + t²/(n − 1)); where all are limits its lower end and mean are 0"
)


PROBABILITIES = {
    "gum-s1": ["P(D > B): share of the same draws, or by counting, the one nearer to ½"],
    "likelihood": [
        "P(D > B): normal probability of z(D − B)/(distance of D to its end on B's side); "
        "upper limit: −z·B/D_hi; lower limit: z·D_lo/B"
    ],
}


def interval_account(
    row: Row, pair_rows: Mapping[str, Row], limits: Mapping[str, pa.Table], settings: PartitionSettings
) -> dict[str, Any]:
    """How the ends of D came about. row: of `classify`; pair_rows: of `pair` for alpha and beta.

    limits: their rows of `pair.limits`, empty where a mean holds no limit.
    """
    account: dict[str, Any] = {
        "method": row["interval"],
        "confidence": row["confidence"],
        "D_lo": row["D_lo"],
        "D_hi": row["D_hi"],
        "u_alpha": row["shared_sd_alpha"],
        "u_beta": row["shared_sd_beta"],
    }
    tail = 0.5 + 0.5 * row["confidence"]
    z = float(special.ndtri(tail))
    account["z"] = z
    if row["interval"] == "likelihood":
        for side in SIDES:
            account[f"limits_{side}"] = _limits(pair_rows[side], limits[side], settings)
        return account | {"how": [UNSHARED, LIMITS, MOVER]}
    if row["interval"] not in ("fieller", "gum-s1"):
        return account | {"how": ["no interval"]}
    dof = row["dof"]
    t = float(special.stdtrit(dof, tail)) if dof and math.isfinite(dof) else z
    account |= {"dof": dof, "t": t, **_dof_parts(row)}
    account["V_alpha"], account["V_beta"] = _variances(row, "se")
    account["V_alpha_counting"], account["V_beta_counting"] = _variances(row, "counting_se")
    ends = _ends(row, account["V_alpha"], account["V_beta"], t)
    floor = _ends(row, account["V_alpha_counting"], account["V_beta_counting"], z)
    account["ends_by_counting"] = floor
    if row["interval"] == "fieller":
        return account | {"ends_by_scatter": ends, "how": [UNSHARED, DOF, FIELLER]}
    return account | {"how": [UNSHARED, DRAWS]}


def _variances(row: Row, kind: str) -> tuple[float, float]:
    first, second = (
        (row[f"{kind}_{side}_ppm"] or 0.0) ** 2 + (row[f"shared_sd_{side}"] * row[f"mean_{side}_ppm"]) ** 2
        for side in SIDES
    )
    return first, second


def _ends(row: Row, variance_a: float, variance_b: float, quantile: float) -> list[float | None]:
    a, b = row["mean_alpha_ppm"], row["mean_beta_ppm"]
    ends = fieller_set(*(np.array([one]) for one in (a, b, variance_a, variance_b, quantile)))
    return [_finite(float(ends.low[0])), _finite(float(ends.high[0]))]


def _dof_parts(row: Row) -> dict[str, Any]:
    """Shares of the two means and of the unshared factors in the variance, and the exponent of the formula."""
    a, b = row["mean_alpha_ppm"], row["mean_beta_ppm"]
    parts = {
        "alpha": (b * row["se_alpha_ppm"]) ** 2,
        "beta": (a * row["se_beta_ppm"]) ** 2,
        "u": (a * b) ** 2 * (row["shared_sd_alpha"] ** 2 + row["shared_sd_beta"] ** 2),
    }
    total = sum(parts.values())
    if not total:
        return {}
    shares = {name: part / total for name, part in parts.items()}
    dofs = row["dof_alpha"], row["dof_beta"]
    q = min(dofs) / max(dofs) if max(dofs) else 1.0
    return {
        "r_alpha": shares["alpha"],
        "r_beta": shares["beta"],
        "r_u": shares["u"],
        "exponent": 1.0 + q * (1.0 - shares["u"]) ** 4 - 0.5 * shares["u"] * (1.0 - shares["u"]),
        "dof_alpha": dofs[0],
        "dof_beta": dofs[1],
    }


def widening(dof: float | None, confidence: float) -> float:
    """What a factor known with `dof` degrees of freedom is multiplied by for the interval: t over normal quantile."""
    tail = 0.5 + 0.5 * confidence
    return float(special.stdtrit(dof, tail) / special.ndtri(tail)) if dof else 1.0


def _limits(pair_row: Row, limits: pa.Table, settings: PartitionSettings) -> dict[str, Any]:
    """Mean and limits of one phase mean, from the likelihood of its values or from its standard error."""
    if pair_row["n_limit_only"]:
        value, sigma, limit = (numbers(limits, f"{name}_ppm") for name in ("value", "sigma", "limit"))
        one = np.zeros(len(value), dtype=np.int64)
        found = censored_limits(
            value, sigma, limit, np.isnan(value), one, 1,
            confidence=settings.confidence, limit_in_sigmas=settings.sigma_from_limit,
        )  # fmt: skip
    else:
        found = mean_limits(_estimate(pair_row), confidence=settings.confidence)
    return {
        "mean_ppm": _finite(float(found.mean[0])),
        "low_ppm": _finite(float(found.low[0])),
        "high_ppm": _finite(float(found.high[0])),
        "n": int(found.n[0]),
        "n_limits_only": int(found.n_censored[0]),
    }


def _estimate(pair_row: Row) -> MeanEstimate:
    def number(name: str) -> float:
        return float("nan") if pair_row[name] is None else float(pair_row[name])

    return MeanEstimate(
        np.array([number("mean_ppm")]),
        np.array([number("se_ppm") ** 2]),
        np.array([number("counting_se_ppm") ** 2]),
        np.nan_to_num(np.array([number("dof")])),
        np.array([pair_row["n_independent"]]),
    )


def class_account(row: Row, interval: Mapping[str, Any], settings: SessionSettings) -> dict[str, Any]:
    """The class, its probabilities, and for each boundary how the probability of lying above it came about."""
    boundaries = {
        "highly_incompatible_below": settings.classify.highly_incompatible_below,
        "compatible_above": settings.classify.compatible_above,
    }
    names = ("p_compatible", "p_incompatible", "p_highly_incompatible")
    account: dict[str, Any] = {
        "class": row["class"],
        "needed": 0.5 + 0.5 * settings.classify.confidence,
        **{name: row[name] for name in names},
        "boundaries": [],
        "how": [
            "a class is declared when D lies above its lower and below its upper boundary, each this surely"
        ],
    }
    if not row["complete"]:
        account["how"].append("no class: the interval does not cover every uncertainty that D needs")
    if interval["method"] != "fieller":
        account["how"] += PROBABILITIES.get(interval["method"], [])
        return account
    account["how"].append(
        "P(D > B): t or normal probability of (a − B b) / √(V_a + B² V_b), the one nearer to ½"
    )
    for name, boundary in boundaries.items():
        account["boundaries"].append(
            {"boundary": name, "value": boundary, **_pivots(row, interval, boundary)}
        )
    return account


def _pivots(row: Row, interval: Mapping[str, Any], boundary: float) -> dict[str, Any]:
    difference = row["mean_alpha_ppm"] - boundary * row["mean_beta_ppm"]

    def pivot(kind: str) -> float | None:
        spread = math.sqrt(interval[f"V_alpha{kind}"] + boundary**2 * interval[f"V_beta{kind}"])
        return difference / spread if spread else None

    by_scatter, by_counting = pivot(""), pivot("_counting")
    return {
        "pivot": by_scatter,
        "p_above": None
        if by_scatter is None
        else float(special.stdtr(interval["dof"] or math.inf, by_scatter)),
        "pivot_by_counting": by_counting,
        "p_above_by_counting": None if by_counting is None else float(special.ndtr(by_counting)),
    }


def _finite(x: float) -> float | None:
    return x if math.isfinite(x) else None
