"""`overlap.use = "unmix"`: what overlapped spots would have been without the other phase in them.

Only flagged spots are changed, and only in new columns: the measured values stay as they are. What this cannot give
is left out with a finding: a tracer that decides how much is taken out has no value of its own, and an analyte
without a known contaminant cannot be freed of it. Own method; see `tieline.statistics.overlap_unmix`.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from tieline.arrays import BoolArray, FloatArray, IntArray
from tieline.screen.findings import Findings, joined
from tieline.screen.overlap import CRYSTAL_OVERLAP, GLASS_OVERLAP, Scored, provisional_groups
from tieline.screen.overlap_findings import Chosen, spot_verdicts
from tieline.screen.session import Measured, Session
from tieline.settings.screen import OverlapSettings


@dataclass(frozen=True)
class UnmixedValues:
    """Per row of `convert`, in ppm, NaN where nothing was taken out.

    sigma: standard uncertainty of the single value, with that of its own fraction; shared: the part common to all
    unmixed spots of the group, from the clean level, which averaging does not reduce.
    """

    value: FloatArray
    sigma: FloatArray
    shared: FloatArray


def unmixed_values(
    session: Session,
    scored: Sequence[Scored],
    settings: OverlapSettings,
    zoned: frozenset[tuple[str | None, ...]],
) -> tuple[UnmixedValues, list[Findings]]:
    """Unmixed values of all spots with overlap, and findings on the analytes that cannot be unmixed.

    Where findings are only provisional, because majors cannot tell overlap from zoning, nothing is taken out.
    """
    cells = np.full((3, session.spots.count, len(session.analyte.texts)), np.nan)
    findings = []
    techniques = sorted({part.measured.technique for part in scored})
    for technique in techniques:
        for code in (GLASS_OVERLAP, CRYSTAL_OVERLAP):
            parts = [part for part in scored if part.code == code and part.measured.technique == technique]
            verdicts = spot_verdicts(parts)
            found = []
            for number, part in enumerate(parts):
                certain = verdicts.within(number, ~provisional_groups(session, part, zoned))
                chosen = verdicts.at(certain & verdicts.overlapped())
                found.append(_unmix(part, chosen, cells, settings))
            findings.append(joined(code, found))
    at_rows = cells[:, session.spots.of_row, session.analyte.codes]
    return UnmixedValues(*at_rows), findings


def _unmix(part: Scored, chosen: Chosen, cells: FloatArray, settings: OverlapSettings) -> Findings:
    """Fills the cells of one part's overlapped spots; findings on those it must leave out."""
    measured, scores = part.measured, part.scores
    row, (group, spot) = chosen
    fraction = np.clip(scores.fraction[group, spot], 0.0, 1.0)[:, None]
    fraction_sd = scores.sd_fraction[group, spot][:, None]
    contrast, used = scores.contrast[group], scores.used[group]
    has_value = np.isfinite(measured.value[row])
    tracer = used & (np.nan_to_num(scores.weight_share[group]) >= settings.tracer_share)
    unmixed = has_value & used & ~tracer
    own = np.fmax(scores.spot_variance[group], part.tested.sigma[part.block.rows[group, spot]] ** 2)
    own = own + fraction**2 * part.contaminant_variance[group] + fraction_sd**2 * contrast**2
    level_sd = np.sqrt(scores.level_fraction_variance[group])[:, None]
    at = measured.spots[row][:, None], measured.analyte_codes[None, :]
    values = (
        measured.value[row] - fraction * contrast,
        np.sqrt(own),
        np.hypot(level_sd, _least_sd(part)[group][:, None]) * np.abs(contrast),
    )
    for layer, value in zip(cells, values, strict=True):
        layer[at] = np.where(unmixed, value, layer[at])
    return _left_out(part, row, has_value & ~unmixed, tracer, settings)


def _least_sd(part: Scored) -> FloatArray:
    """Smallest standard uncertainty of a fraction in each group (G,)."""
    sd = part.scores.sd_fraction
    least = np.min(np.where(np.isfinite(sd), sd, np.inf), axis=1, initial=np.inf)
    return np.where(np.isfinite(least), least, np.nan)


def _left_out(
    part: Scored, row: IntArray, left_out: BoolArray, tracer: BoolArray, settings: OverlapSettings
) -> Findings:
    measured: Measured = part.measured
    at, column = np.nonzero(left_out)
    share = part.scores.weight_share
    group = np.searchsorted(part.block.groups, measured.group[row[at]])
    return Findings(
        part.code,
        measured.spots[row[at]],
        measured.analyte_codes[column],
        np.where(tracer[at, column], share[group, column], np.nan),
        np.where(tracer[at, column], settings.tracer_share, np.nan),
        np.full(len(at), np.nan),
        ["drop"] * len(at),
        [
            f"{measured.analytes[c]} decides how much is taken out, and has no value of its own"
            if is_tracer
            else f"{measured.analytes[c]} cannot be unmixed: its value in the other phase is not known"
            for c, is_tracer in zip(column, tracer[at, column], strict=True)
        ],
    )
