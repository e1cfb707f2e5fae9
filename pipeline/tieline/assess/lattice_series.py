"""Which partition coefficients of a pair belong on one lattice-strain curve, with their radii and errors."""

from __future__ import annotations

from collections.abc import Iterator, Mapping, Sequence
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import numpy as np

from tieline.assess.evidence import PAIR_KEYS
from tieline.chemistry.radii import ionic_radius, known_radii, usual_charges
from tieline.statistics.lattice_strain import Coefficients
from tieline.statistics.least_squares import FloatArray
from tieline.statistics.moderated_variance import moderate

if TYPE_CHECKING:
    import pandas as pd

# Why an element is compared with the curve but does not shape it unless it is asked for (common practice, from memory).
OFF_THE_CURVE = {
    "Al": "also in tetrahedra",
    "Ga": "also in tetrahedra",
    "Si": "in tetrahedra",
    "Ti": "on the smaller site",
    "Cr": "crystal-field effects and more than one charge",
    "Ni": "crystal-field effects",
    "Co": "crystal-field effects",
    "Cu": "more than one charge",
    "Fe": "more than one charge",
    "Eu": "more than one charge",
    "V": "more than one charge",
    "U": "more than one charge",
    "Mo": "more than one charge",
    "W": "more than one charge",
    "Pb": "lone pair of electrons",
}
NO_RADIUS = "no radius"
_TEXTS = ("element", "kind")
_NEEDED = [*_TEXTS, "D", "D_sd", "D_hi", "dof", "share_counting", "share_spread"]
_LIMIT_OVER_SD = 3.0
_NORMAL_975 = 1.959964


@dataclass(frozen=True)
class Series:
    """The ions of one charge in one pair of phases.

    data: what is fitted, in the order of `elements` and `limit_elements`. compared: element -> (radius, D, D_sd) measured
    but kept off the fit, with the reason in `remarks`. unmeasured: element -> radius. missing: element -> why it is of no use.
    """

    charge: int
    coordination: int
    data: Coefficients
    elements: tuple[str, ...]
    limit_elements: tuple[str, ...]
    compared: Mapping[str, tuple[float, float, float]]
    unmeasured: Mapping[str, float]
    missing: Mapping[str, str]
    remarks: tuple[str, ...]


def charge_of(element: str, charges: Mapping[str, int]) -> int | None:
    """The given charge of an element, else its usual one; None for what is no cation."""
    if element in charges:
        return charges[element]
    usual = usual_charges(element)
    return usual[0] if usual else None


Row = Mapping[str, Any]


def pair_rows(partition: pd.DataFrame) -> Iterator[tuple[tuple[str, str, str], list[Row]]]:
    """(experiment, alpha, beta), in order, with their rows of the partition table: the columns that a series needs.

    One pair after the other, for the rows of all at once would be many times as large as the table.
    """
    number = partition.groupby(list(PAIR_KEYS)).ngroup().to_numpy()
    order = np.argsort(number, kind="stable")
    # Texts as objects first: a data frame takes ten times longer to hand them out one by one.
    keys = [partition[name].to_numpy(dtype=object) for name in PAIR_KEYS]
    columns = [partition[name].to_numpy(object if name in _TEXTS else np.float64) for name in _NEEDED]
    starts = np.flatnonzero(np.diff(number[order], prepend=-1))
    for rows in np.split(order, starts[1:]) if len(order) else ():
        experiment, alpha, beta = (column[rows[0]] for column in keys)
        values = zip(*(column[rows].tolist() for column in columns), strict=True)
        yield (experiment, alpha, beta), [dict(zip(_NEEDED, row, strict=True)) for row in values]


def collect_series(
    rows: Sequence[Row],
    covariances: Mapping[tuple[str, str], float],
    charge: int,
    coordination: int,
    *,
    charges: Mapping[str, int] | None = None,
    leave_out: tuple[str, ...] = (),
) -> Series:
    """Sort one pair's rows of the partition table into a series of one charge.

    rows: those of one experiment, alpha and beta (`pair_rows`). covariances: (element, other) -> covariance
    of the two D. charges: element -> charge, for elements whose usual charge is not the one here; naming an element also
    lets it shape the curve where `OFF_THE_CURVE` would keep it off. leave_out: compared, not fitted.

    The scatter of few spots is moderated over the elements of the series (`moderate`). An upper limit D_hi enters
    as a value known to lie below L with a blur of L/3, L such that a true D = D_hi would be found below L in 2.5 % of
    cases (ours: the stage file keeps D_hi, not the limits of the spots).
    """
    given = charges or {}
    fitted, compared, missing, remarks = [], {}, {}, []
    limits: list[tuple[str, float, float]] = []
    rows = [row for row in rows if charge_of(row["element"], given) == charge]
    for row in sorted(rows, key=lambda row: row["element"]):
        element = str(row["element"])
        radius = ionic_radius(element, charge, coordination)
        if not np.isfinite(radius):
            missing[element] = f"{NO_RADIUS} for charge {charge} and coordination {coordination}"
        elif row["kind"] == "upper-limit" and np.isfinite(row["D_hi"]) and row["D_hi"] > 0:
            if element not in leave_out and (element not in OFF_THE_CURVE or element in given):
                limits.append((element, radius, float(row["D_hi"])))
        elif row["kind"] != "value" or not (row["D"] > 0 and row["D_sd"] > 0):
            missing[element] = (
                "its D is not above zero, or has no error"
                if row["kind"] == "value"
                else f"its D is {row['kind']}"
            )
        elif element in leave_out or (element in OFF_THE_CURVE and element not in given):
            compared[element] = (radius, float(row["D"]), float(row["D_sd"]))
            why = "left out by the settings" if element in leave_out else OFF_THE_CURVE[element]
            remarks.append(f"{element} is compared, not fitted: {why}")
        else:
            fitted.append({**row, "radius": radius})
    data, trouble = _coefficients(fitted, limits, covariances)
    measured = {row["element"] for row in rows}
    return Series(
        charge, coordination, data, tuple(str(row["element"]) for row in fitted),
        tuple(element for element, _radius, _limit in limits), compared,
        {
            element: radius
            for (element, its_charge, its_coordination), radius in sorted(known_radii().items())
            if (its_charge, its_coordination) == (charge, coordination)
            and charge_of(element, given) == charge and element not in measured and element not in OFF_THE_CURVE
        },
        missing, (*remarks, *trouble),
    )  # fmt: skip


def _coefficients(
    rows: list[dict[Any, Any]],
    limits: list[tuple[str, float, float]],
    covariances: Mapping[tuple[str, str], float],
) -> tuple[Coefficients, list[str]]:
    elements = [str(row["element"]) for row in rows]
    value = np.array([float(row["D"]) for row in rows])
    total = np.array([(float(row["D_sd"]) / float(row["D"])) ** 2 for row in rows])
    dof = np.array([float(row["dof"]) for row in rows])
    share = np.array([float(row["share_counting"]) + float(row["share_spread"]) for row in rows])
    spots = total * np.clip(np.where(np.isfinite(share), share, 1.0), 0.0, 1.0)
    shared = np.diag(total - spots)
    for one, first in enumerate(elements):
        for two, second in enumerate(elements[:one]):
            pair = covariances.get((first, second), covariances.get((second, first), 0.0))
            shared[one, two] = shared[two, one] = pair / (value[one] * value[two])
    trouble = []
    spot_dof = _dof_of_spots(dof, spots / total)
    few = np.isfinite(spot_dof) & (spot_dof > 0)
    moderated, moderated_dof = moderate(spots, np.where(few, spot_dof, np.inf))
    relative = np.where(few, moderated, 0.0)
    variance = np.where(few, 0.0, spots * value**2)
    whole = shared + np.diag(relative + variance / value**2) if rows else shared
    if rows and np.linalg.eigvalsh(whole).min() <= 1e-9 * np.trace(whole) / len(rows):
        trouble.append("the covariances of the D contradict their errors and were left out")
        shared = np.diag(np.diag(shared))
    limit = np.array([high for _element, _radius, high in limits]) / (1.0 + _NORMAL_975 / _LIMIT_OVER_SD)
    return (
        Coefficients(
            np.array([float(row["radius"]) for row in rows]), value, variance, shared,
            np.array([radius for _element, radius, _high in limits]), limit, limit / _LIMIT_OVER_SD,
            relative_variance=relative, dof=np.where(few, moderated_dof, np.inf),
        ),
        trouble,
    )  # fmt: skip


def _dof_of_spots(dof: FloatArray, share: FloatArray) -> FloatArray:
    """Degrees of freedom of the part of an error that comes from the spots, from those of the whole.

    share: of the spots in the variance. The rest is taken as known, which made dof larger; this undoes the formula of
    `statistics.ratios.ratio_dof` where one of the two means makes the error, and is on the safe side where both do.
    """
    return np.asarray(dof * share ** (1.0 + share**4 - 0.5 * share * (1.0 - share)))
