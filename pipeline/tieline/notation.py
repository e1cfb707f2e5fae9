"""How a number with its uncertainty is written: 0.0123(14), limits as <0.004, uncertainty to two digits."""

from __future__ import annotations

import math
from collections.abc import Mapping
from typing import Any


def with_uncertainty(value: float, sd: float) -> str:
    """`value(sd)` with the standard uncertainty in the last digits, two digits of it (JCGM 100:2008, 7.2.2).

    Large or small values carry a power of ten. A value without an uncertainty is given to three digits.
    """
    if not math.isfinite(sd) or sd <= 0:
        return f"{value:.3g}"
    places = 1 - math.floor(math.log10(sd))
    if round(sd * 10.0**places) >= 100:  # 0.0996 rounds up to three digits
        places -= 1
    if places < 0 or places > 7:
        return _scientific(value, sd)
    digits = round(sd * 10.0**places)
    if places > 0 and digits * 10.0**-places >= 1:
        return f"{value:.{places}f}({sd:.{places}f})"
    return f"{value:.{places}f}({digits})"


def _scientific(value: float, sd: float) -> str:
    largest = max(abs(value), sd)
    exponent = math.floor(math.log10(largest))
    scaled, scaled_sd = value / 10.0**exponent, sd / 10.0**exponent
    places = max(0, 1 - math.floor(math.log10(scaled_sd)))
    return f"{scaled:.{places}f}({round(scaled_sd * 10.0**places)})e{exponent}"


def written(row: Mapping[str, Any]) -> str:
    """One D as text: value(uncertainty), <upper limit, >lower limit, or a dash."""
    kind = row["kind"]
    if kind == "upper-limit" and row["D_hi"] is not None:
        return f"<{row['D_hi']:.2g}"
    if kind == "lower-limit" and row["D_lo"] is not None:
        return f">{row['D_lo']:.2g}"
    if row["D"] is None:
        return "\N{EN DASH}"
    if kind == "undetermined":
        return f"{row['D']:.3g}"
    return with_uncertainty(row["D"], row["D_sd"] if row["D_sd"] is not None else math.nan)
