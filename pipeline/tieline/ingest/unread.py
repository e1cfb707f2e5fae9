"""What is said about columns that are not read."""

from __future__ import annotations

from collections.abc import Sequence

from tieline.chemistry.names import Analyte, looks_like_analyte
from tieline.ingest.asides import shown
from tieline.ingest.assigning import Assigning, did_you_mean, listed, role_words

MOST_REMARKS = 20


def remark_unread(work: Assigning, recognised: Sequence[Analyte | None], unread: set[int]) -> None:
    """Nothing is passed over in silence: unread columns are told, with the nearest name where one is likely."""
    plain: list[str] = []
    limits: list[str] = []
    known: list[str] = []
    strange: list[str] = []
    for index, header in enumerate(work.full):
        if index not in unread or not header.strip():
            continue
        analyte = recognised[index]
        role = role_words(header, analyte)
        if role == "limit":
            limits.append(work.headers[index])
        elif analyte is not None:
            known.append(work.headers[index])
        elif looks_like_analyte(header):
            strange.append(header)
        elif role != "sigma":
            plain.append(work.headers[index])
    for header in strange[:MOST_REMARKS]:
        guess = did_you_mean(header)
        work.remark(
            f'"{shown(header)}" looks like an analyte but is not recognised; not read. {guess}'.strip()
        )
    if len(strange) > MOST_REMARKS:
        work.remark(
            f"{len(strange) - MOST_REMARKS} more columns look like analytes but are not recognised; not read."
        )
    if limits:
        remedy = 'state limit = { pattern = "{analyte} ..." } to use them'
        work.remark(f"columns that look like detection limits are not read ({remedy}): {listed(limits)}.")
    if known:
        work.remark(f"recognised columns that are not read: {listed(known)}.")
    if plain:
        work.remark(f"columns not read: {listed(plain)}.")
