"""Exchange coefficients of element pairs between two phases, from their correlated partition coefficients."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import numpy as np
from scipy import special

from tieline.assess.evidence import (
    CANNOT_TELL,
    CHECK_COLUMNS,
    CONSISTENT,
    DIFFERS,
    PAIR_KEYS,
    Variances,
    base_phase,
    by_pair,
    check,
)  # fmt: skip
from tieline.assess.ferric import FerricShare
from tieline.chemistry.exchange import windows_for

if TYPE_CHECKING:
    import pandas as pd

MELTS = ("glass", "melt", "liquid")
_NUMBERS = (
    "K_D", "K_D_sd", "K_D_lo", "K_D_hi", "ferric_share", "ferric_share_sd", "window_lo", "window_hi",
)  # fmt: skip
EXCHANGE_COLUMNS = (*PAIR_KEYS, "first", "second", *_NUMBERS, "window_source", "verdict")


@dataclass(frozen=True)
class ExchangeCoefficient:
    """K_D with its standard deviation and interval; nan and a reason where it cannot be told."""

    value: float
    sd: float
    low: float
    high: float
    reason: str = ""


def exchange_coefficient(
    D_first: float,
    D_second: float,
    covariance: np.ndarray,
    *,
    dof: float = np.inf,
    ferrous_factor: float = 1.0,
    ferrous_factor_relative_sd: float = 0.0,
    confidence: float = 0.95,
) -> ExchangeCoefficient:
    """K_D = (first/second in alpha) / (first/second in beta) = factor · D_first / D_second.

    covariance (2, 2) of the two D. Atomic weights cancel: K_D by mass and by amount of substance are the same number.
    ferrous_factor, (1 - ferric share in alpha) / (1 - ferric share in beta), turns total iron into Fe2+ where `first` is
    iron. The interval is Fieller's (1954, J. R. Stat. Soc. B 16:175) for correlated D; it is open, and the result
    "cannot tell", where D_second is not significantly above zero.
    """
    if not (np.isfinite(D_first) and np.isfinite(D_second) and np.all(np.isfinite(covariance))):
        return ExchangeCoefficient(
            np.nan, np.nan, np.nan, np.nan, "a partition coefficient or its error is missing"
        )
    if D_first <= 0 or D_second <= 0 or np.any(np.diag(covariance) < 0):
        return ExchangeCoefficient(
            np.nan, np.nan, np.nan, np.nan, "a partition coefficient is not above zero"
        )
    a, b = ferrous_factor * D_first, D_second
    variance_a = ferrous_factor**2 * covariance[0, 0] + (a * ferrous_factor_relative_sd) ** 2
    joint, variance_b = ferrous_factor * covariance[0, 1], float(covariance[1, 1])
    tail = 0.5 + 0.5 * confidence
    t = float(special.stdtrit(dof, tail) if np.isfinite(dof) and dof > 0 else special.ndtri(tail))
    value = a / b
    sd = float(np.sqrt(max(variance_a - 2 * value * joint + value**2 * variance_b, 0.0))) / b
    square, middle, rest = b**2 - t**2 * variance_b, a * b - t**2 * joint, a**2 - t**2 * variance_a
    if square <= 0:
        return ExchangeCoefficient(
            np.nan, np.nan, np.nan, np.nan, "the second partition coefficient is not significantly above zero"
        )
    half = float(np.sqrt(max(middle**2 - square * rest, 0.0)))
    return ExchangeCoefficient(value, sd, max((middle - half) / square, 0.0), (middle + half) / square)


def ferrous_factor(alpha: FerricShare | None, beta: FerricShare | None) -> tuple[float, float]:
    """(1 - share in alpha) / (1 - share in beta) and its relative sd; a phase without a share counts as ferrous."""
    parts = [(1 - share.value, share.sd) if share else (1.0, 0.0) for share in (alpha, beta)]
    relative = np.sqrt(sum((sd / ferrous) ** 2 for ferrous, sd in parts))
    return parts[0][0] / parts[1][0], float(relative)


def exchange_tables(
    partition: pd.DataFrame,
    covariance: pd.DataFrame,
    *,
    pairs: Sequence[tuple[str, str]] = (("Fe", "Mg"),),
    ferric: Mapping[tuple[str, str], FerricShare] | None = None,
    windows: Mapping[tuple[str, str], tuple[float, float, str]] | None = None,
    melts: Sequence[str] = MELTS,
    confidence: float = 0.95,
) -> tuple[pd.DataFrame, pd.DataFrame]:
    """One row per experiment, pair of phases and pair of elements: the coefficients, and rows of the `assess` table.

    partition, covariance: columns as in the stage files of those names. ferric: (experiment, phase) -> share; phases without
    one are taken as free of Fe3+, and the detail says so. windows: (phase, "Fe-Mg") -> low, high, source, in the place of
    the published ones, which hold for silicate melts and so are used where beta is one. Where a window's source gives
    no range, or none is known, the verdict is "cannot tell".
    """
    import pandas as pd

    rows: list[dict[str, Any]] = []
    coefficients: list[dict[str, Any]] = []
    wanted = sorted({element for pair in pairs for element in pair})
    variances = by_pair(covariance[covariance["element"].isin(wanted) & covariance["other"].isin(wanted)])
    for (experiment, alpha, beta), group in sorted(_values_by_pair(partition, wanted).items()):
        for first, second in pairs:
            if first not in group or second not in group:
                continue
            (D_first, dof_first), (D_second, dof_second) = group[first], group[second]
            factor, relative, assumption = 1.0, 0.0, ""
            if "Fe" in (first, second):
                shares = {phase: (ferric or {}).get((experiment, phase)) for phase in (alpha, beta)}
                factor, relative = ferrous_factor(shares[alpha], shares[beta])
                factor = factor if first == "Fe" else 1 / factor
                assumption = " Ferric share: " + "; ".join(
                    f"{phase} {share.value:.3f} ± {share.sd:.3f} ({share.source})"
                    if share
                    else f"{phase} none assumed"
                    for phase, share in shares.items()
                )
            matrix = _matrix(variances.get((experiment, alpha, beta), {}), first, second)
            dof = np.nanmin([np.inf, dof_first, dof_second])
            found = exchange_coefficient(
                D_first, D_second, matrix, dof=float(dof),
                ferrous_factor=factor, ferrous_factor_relative_sd=relative, confidence=confidence,
            )  # fmt: skip
            low, high, source = _window(alpha, beta, f"{first}-{second}", windows or {}, melts)
            keys = dict(zip(PAIR_KEYS, (experiment, alpha, beta), strict=True))
            verdict = compare(found, low, high)
            share = (ferric or {}).get((experiment, beta)) if "Fe" in (first, second) else None
            numbers = (
                found.value, found.sd, found.low, found.high, share.value if share else np.nan,
                share.sd if share else np.nan, low, high,
            )  # fmt: skip
            coefficients.append(
                {**keys, "first": first, "second": second, "window_source": source, "verdict": verdict}
                | dict(zip(_NUMBERS, numbers, strict=True))
            )
            rows.append(
                check(
                    "exchange", keys, f"K_D({first}-{second})", verdict,
                    _words(found, source, confidence) + assumption,
                    value=found.value, sd=found.sd, expected_lo=low, expected_hi=high,
                )
            )  # fmt: skip
    return (
        pd.DataFrame(coefficients, columns=list(EXCHANGE_COLUMNS)),
        pd.DataFrame(rows, columns=list(CHECK_COLUMNS)),
    )


def _values_by_pair(
    partition: pd.DataFrame, elements: Sequence[str]
) -> dict[tuple[str, str, str], dict[str, tuple[float, float]]]:
    """(experiment, alpha, beta) -> element -> D and its degrees of freedom, NaN where unknown."""
    found: dict[tuple[str, str, str], dict[str, tuple[float, float]]] = {}
    chosen = partition.loc[partition["element"].isin(elements), [*PAIR_KEYS, "element", "D", "dof"]]
    for experiment, alpha, beta, element, D, dof in chosen.itertuples(index=False):
        found.setdefault((experiment, alpha, beta), {})[element] = float(D), float(dof)
    return found


def compare(found: ExchangeCoefficient, low: float, high: float) -> str:
    """Consistent where the interval meets the window; cannot tell where it reaches beyond it on both sides."""
    if not all(np.isfinite(number) for number in (found.low, found.high, low, high)):
        return CANNOT_TELL
    if found.high < low or found.low > high:
        return DIFFERS
    return CANNOT_TELL if found.low < low and found.high > high else CONSISTENT


def _window(
    alpha: str,
    beta: str,
    exchange: str,
    given: Mapping[tuple[str, str], tuple[float, float, str]],
    melts: Sequence[str],
) -> tuple[float, float, str]:
    if (base_phase(alpha), exchange) in given:
        return given[base_phase(alpha), exchange]
    known = (
        windows_for(base_phase(alpha), "Fe-Mg") if exchange == "Fe-Mg" and base_phase(beta) in melts else ()
    )
    for window in known:
        if window.half_width is not None:
            memory = "" if window.verified else "; from memory in part"
            source = f"{window.source}, {window.holds_for}{memory}"
            return window.centre - window.half_width, window.centre + window.half_width, source
    return np.nan, np.nan, ""


def _words(found: ExchangeCoefficient, source: str, confidence: float) -> str:
    if found.reason:
        return f"No exchange coefficient: {found.reason}."
    window = f" Window: {source}." if source else " No window is known for this pair."
    return (
        f"K_D {found.value:.4g}, {found.low:.4g} to {found.high:.4g} at {confidence:.0%}; by mass and by amount alike."
        + window
    )


def _matrix(variances: Variances, first: str, second: str) -> np.ndarray:
    def entry(one: str, two: str) -> float:
        return variances.get((one, two), variances.get((two, one), 0.0 if one != two else np.nan))

    return np.array([[entry(one, two) for two in (first, second)] for one in (first, second)])
