"""Rounding by the uncertainty: two digits of it (common practice; JCGM 100:2008, 7.2.6)."""

from __future__ import annotations

import math

import pytest

from analysis.digits import with_uncertainty


@pytest.mark.parametrize(
    ("value", "u", "text"),
    [
        (28.9312, 0.4149, "28.93 ± 0.41"),
        (1078.14, 0.93, "1078.14 ± 0.93"),
        (2105.6, 7.8, "2105.6 ± 7.8"),
        (230.8, 9.94, "230.8 ± 9.9"),
        (261.1, 12.3, "261 ± 12"),
        (2106.6, 143.0, "2110 ± 140"),
        (0.71912, 0.0324, "0.719 ± 0.032"),
        (-3.0, 0.00012, "-3.00000 ± 0.00012"),
        (None, 0.1, "-"),
        (12.3456, None, "12.35"),
        (12.3456, math.inf, "12.35"),
        (12.3456, 0.0, "12.35"),
    ],
)
def test_as_many_digits_as_the_uncertainty_allows(value: float | None, u: float | None, text: str) -> None:
    assert with_uncertainty(value, u) == text
