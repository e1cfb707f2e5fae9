"""How a table is laid out, as far as the configuration says so; None is found out."""

from __future__ import annotations

from dataclasses import dataclass


@dataclass(frozen=True)
class Layout:
    """See the settings of a table for the meaning; `expected_headers` help to find the header row."""

    sheet: str | int | None = None
    delimiter: str | None = None
    decimal: str | None = None
    thousands: str | None = None
    encoding: str | None = None
    header_row: int | None = None
    units_row: bool | None = None
    skip_rows: int = 0
    expected_headers: tuple[str, ...] = ()
