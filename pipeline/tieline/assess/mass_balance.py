"""Mass balance of an experiment: proportions of its phases, what is missing or lost, and bulk partition coefficients."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import numpy as np

from tieline.assess.balance_input import Balance, collect, whole_phases
from tieline.assess.consistency import holm
from tieline.assess.evidence import CANNOT_TELL, CHECK_COLUMNS, CONSISTENT, DIFFERS, EXCESS, check
from tieline.statistics.mass_balance import FITTED, Mixture, Shortfall, mix, shortfall

if TYPE_CHECKING:
    import pandas as pd

LOSABLE = ("Fe", "Na", "K")
"""Elements lost to the capsule or under the beam: judged against the balance of the others, not fitted."""
LARGEST_SQUARES = 1.0
"""wt%², sum of squared residuals of oxides still called acceptable (common practice, from memory)."""
_STANDS_OUT = 3.0


@dataclass(frozen=True)
class BalanceTables:
    """proportions: experiment x phase; residuals: experiment x element, oxide wt%; checks: rows of `assess`."""

    proportions: pd.DataFrame
    residuals: pd.DataFrame
    checks: pd.DataFrame
    mixtures: dict[str, tuple[tuple[str, ...], Mixture]]


def mass_balance_tables(
    pair: pd.DataFrame,
    starting: pd.DataFrame,
    *,
    losable: Sequence[str] = LOSABLE,
    relative_sd: float = 0.0,
    sum_to_one: bool = False,
    largest_squares: float = LARGEST_SQUARES,
    confidence: float = 0.95,
) -> BalanceTables:
    """Balance every experiment that has a starting composition.

    pair: columns experiment, phase, element, mean_ppm, se_ppm as in the stage file, with the factors of `mean_factors`. A phase
    of which there are only parts (`olivine (rim)`) enters as their mean, as uncertain as they differ; where the whole phase is
    there its parts are left aside. Of several means of one element the most certain is taken. starting:
    experiment, element, value_ppm, sd_ppm. relative_sd: calibration uncertainty where none is known; phases measured in one
    session share it. losable: elements kept out of the fit and judged by what the others leave for them.
    """
    import pandas as pd

    proportions: list[dict[str, Any]] = []
    residuals: list[dict[str, Any]] = []
    checks: list[dict[str, Any]] = []
    mixtures: dict[str, tuple[tuple[str, ...], Mixture]] = {}
    for experiment, given in starting.groupby("experiment", sort=True, observed=True):
        own = whole_phases(pair[pair["experiment"] == experiment])
        balance = collect(own, given, relative_sd)
        kept = np.array([element not in losable for element in balance.elements], dtype=bool)
        mixture = mix(
            balance.start[kept], balance.start_sd[kept], balance.composition[kept], balance.composition_sd[kept],
            shared_sd=balance.shared_sd[:, kept], sum_to_one=sum_to_one, confidence=confidence,
        )  # fmt: skip
        mixtures[experiment] = (balance.phases, mixture)
        lost = shortfall(
            mixture, balance.start[~kept], balance.start_sd[~kept],
            balance.composition[~kept], balance.composition_sd[~kept], balance.shared_sd[:, ~kept],
        )  # fmt: skip
        proportions += _proportion_rows(experiment, balance.phases, mixture)
        residuals += _residual_rows(experiment, balance, kept, mixture, lost)
        checks += _checks(experiment, balance, kept, mixture, lost, largest_squares, sum_to_one)
    return BalanceTables(
        pd.DataFrame(proportions, columns=list(PROPORTION_COLUMNS)),
        pd.DataFrame(residuals, columns=list(RESIDUAL_COLUMNS)),
        pd.DataFrame(checks, columns=list(CHECK_COLUMNS)),
        mixtures,
    )


PROPORTION_COLUMNS = (
    "experiment", "phase", "proportion", "proportion_sd", "proportion_lo", "proportion_hi", "unweighted",
)  # fmt: skip
RESIDUAL_COLUMNS = (
    "experiment", "element", "use", "start_wt", "start_sd_wt", "phases_wt", "residual_wt", "sigmas",
    "loss", "loss_sd", "loss_lo", "loss_hi", "loss_p",
)  # fmt: skip


def _proportion_rows(experiment: str, phases: tuple[str, ...], mixture: Mixture) -> list[dict[str, Any]]:
    columns = (mixture.proportions, mixture.sd, mixture.low, mixture.high, mixture.unweighted)
    return [
        dict(zip(PROPORTION_COLUMNS, (experiment, phase, *(float(one[index]) for one in columns)), strict=True))
        for index, phase in enumerate(phases)
    ]  # fmt: skip


def _residual_rows(
    experiment: str, balance: Balance, kept: np.ndarray, mixture: Mixture, lost: Shortfall
) -> list[dict[str, Any]]:
    rows = []
    fitted, left = iter(range(int(kept.sum()))), iter(range(int((~kept).sum())))
    for index, element in enumerate(balance.elements):
        held = float(balance.composition[index] @ mixture.proportions)
        row: dict[str, Any] = {
            "experiment": experiment, "element": element, "use": bool(kept[index]),
            "start_wt": balance.start[index], "start_sd_wt": balance.start_sd[index], "phases_wt": held,
            "residual_wt": balance.start[index] - held,
        }  # fmt: skip
        if kept[index]:
            row["sigmas"] = mixture.sigmas[next(fitted)]
        else:
            place = next(left)
            row |= {
                "loss": lost.loss[place], "loss_sd": lost.sd[place], "loss_lo": lost.low[place],
                "loss_hi": lost.high[place], "loss_p": lost.p_value[place],
            }  # fmt: skip
        rows.append(row)
    return rows


def _checks(
    experiment: str,
    balance: Balance,
    kept: np.ndarray,
    mixture: Mixture,
    lost: Shortfall,
    largest: float,
    sum_to_one: bool,
) -> list[dict[str, Any]]:
    """The fit as a whole, the older yardstick, and every loss."""
    keys = {"experiment": experiment}
    unusable = _not_used(balance.unusable)
    if mixture.verdict != FITTED:
        apart = ", ".join(element for element, fit in zip(balance.elements, kept, strict=True) if not fit)
        words = f"No mass balance: {mixture.reason}.{unusable}{f' Kept apart as losable: {apart}.' if apart else ''}"
        return [check("mass-balance", keys, "phase proportions", CANNOT_TELL, words)]
    names = np.array(balance.elements)[kept]
    parts = ", ".join(
        f"{phase} {x:.3f} ({low:.3f} to {high:.3f})"
        for phase, x, low, high in zip(
            balance.phases, mixture.proportions, mixture.low, mixture.high, strict=True
        )
    )
    more = [f"{e} {s:+.1f}" for e, s in zip(names, mixture.sigmas, strict=True) if s > _STANDS_OUT]
    less = [f"{e} {s:+.1f}" for e, s in zip(names, mixture.sigmas, strict=True) if s < -_STANDS_OUT]
    pattern = f" Phases rich in {', '.join(more)} (sigmas) may be missing." if more else ""
    pattern += f" The phases hold too much {', '.join(less)} (sigmas)." if less else ""
    if mixture.scale > 1:
        pattern = f" The phases do not add up to the start within the errors: these are the least bad proportions.{pattern}"
    words = f"Proportions of the starting mass: {parts}; sum {mixture.total:.3f} ± {mixture.total_sd:.3f}.{pattern}{unusable}"
    rows = [_fit_check(keys, mixture, words)]
    if not sum_to_one:
        rows.append(_sum_check(keys, mixture))
    rows.append(
        check(
            "mass-balance", keys, "squared residuals, sum in wt%²",
            CONSISTENT if mixture.squares <= largest else DIFFERS,
            f"Unweighted fit of {', '.join(names)} as oxides; {largest:g} is common practice, not a test.",
            value=mixture.squares, expected_lo=0.0, expected_hi=largest,
        )
    )  # fmt: skip
    told = int(np.isfinite(lost.p_value).sum())
    together = f"; judged over {told} elements together" if told > 1 else ""
    numbers = (lost.loss, lost.sd, lost.low, lost.high, lost.p_value, holm(lost.p_value, EXCESS))
    for element, loss, sd, low, high, p_value, differs in zip(
        np.array(balance.elements)[~kept], *numbers, strict=True
    ):
        if not np.isfinite(p_value):
            continue
        gone = f"{element} {'lost' if loss > 0 else 'gained'} {abs(loss):.1%} of the start"
        rows.append(
            check(
                "mass-balance", keys, f"{element} loss", DIFFERS if differs else CONSISTENT,
                f"{gone} ({low:.1%} to {high:.1%}), p {p_value:.2g}{together}; not fitted.",
                value=float(loss), sd=float(sd), expected_lo=0.0, expected_hi=0.0,
            )
        )  # fmt: skip
    return rows


def _not_used(unusable: Mapping[str, str]) -> str:
    """The elements of the start that could not enter, reason by reason."""
    reasons: dict[str, list[str]] = {}
    for element, why in unusable.items():
        reasons.setdefault(why, []).append(element)
    return "".join(f" {', '.join(elements)} not used: {why}." for why, elements in reasons.items())


def _sum_check(keys: dict[str, Any], mixture: Mixture) -> dict[str, Any]:
    """Do the phases make up all of the starting mass?"""
    half = mixture.quantile * mixture.total_sd
    low, high = mixture.total - half, mixture.total + half
    inside = low <= 1.0 <= high
    what = "" if inside else " Mass is missing." if high < 1.0 else " There is more mass than was weighed in."
    return check(
        "mass-balance", keys, "sum of proportions", CONSISTENT if inside else DIFFERS,
        f"{mixture.total:.3f} ({low:.3f} to {high:.3f}) of the starting mass.{what}", value=mixture.total,
        sd=mixture.total_sd, expected_lo=1.0, expected_hi=1.0,
    )  # fmt: skip


def _fit_check(keys: dict[str, Any], mixture: Mixture, words: str) -> dict[str, Any]:
    from scipy.special import chdtri

    subject = "chi-square over degrees of freedom"
    if mixture.dof <= 0:
        return check("mass-balance", keys, subject, CANNOT_TELL, f"As many proportions as elements. {words}")
    return check(
        "mass-balance", keys, subject, DIFFERS if mixture.p_value < EXCESS else CONSISTENT,
        f"p {mixture.p_value:.2g}. {words}", value=mixture.chi_square / mixture.dof, expected_lo=0.0,
        expected_hi=float(chdtri(mixture.dof, EXCESS)) / mixture.dof,
    )  # fmt: skip
