"""Numbers with as many digits as their uncertainty allows."""

from __future__ import annotations

import math

NOTHING = "-"


def with_uncertainty(value: float | None, u: float | None) -> str:
    """`28.93 ± 0.41`: the uncertainty with two digits, the value to the same place; "-" for no value."""
    if value is None:
        return NOTHING
    if u is None or not math.isfinite(u) or u <= 0:
        return f"{value:.4g}"
    places = 1 - math.floor(math.log10(u))
    if places < 0:  # 2100 ± 140: whole tens or hundreds
        value, u, places = round(value, places), round(u, places), 0
    return f"{value:.{places}f} ± {u:.{places}f}"
