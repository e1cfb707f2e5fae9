"""Rulings as findings on their spots: those on unknowns decide what is used, those on reference materials have
decided what `calibrate` used."""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np

from tieline.errors import Problem
from tieline.ruled_spots import SpotRows, placed
from tieline.rulings import Ruling
from tieline.screen.findings import RULING, Findings, no_findings
from tieline.screen.session import Session


def ruling_findings(
    rulings: Sequence[Ruling], session: Session, malformed: Sequence[Problem] = ()
) -> Findings:
    """Every ruling as a finding on its spot.

    malformed: the problems of `rulings_as_written`. Raises InputError with these and with every spot and
    analyte that does not exist.
    """
    if not rulings and not malformed:
        return no_findings(RULING)
    spots = SpotRows(session.spots.keys, session.spots.of_row, session.analyte)
    places = placed(rulings, spots, malformed)
    unknown = np.full(len(rulings), np.nan)
    return Findings(
        RULING,
        places.spot,
        places.analyte,
        unknown,
        unknown,
        unknown,
        [ruling.verdict for ruling in rulings],
        [f"{ruling.reason} ({ruling.analyst}, {ruling.date})" for ruling in rulings],
    )
