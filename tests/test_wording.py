"""What is told of a look while a run goes on."""

from __future__ import annotations

from typing import Any

import pytest

from daq.wording import look_in_words

LOOK: dict[str, Any] = {
    "separation_nm": 0.0297, "separation_u_nm": 0.0004, "ratio": 0.67, "ratio_u": 0.03,
    "max_log_e_pair": 0.0, "bound_pair": 6.908, "max_log_e_single": 0.0, "bound_single": 2.996,
    "max_log_e_reversed": 8.7, "bound_reversed": None,
}  # fmt: skip


@pytest.mark.parametrize(
    ("verdict", "bound_reversed", "told"),
    [
        ("pair", None, "pair, 29.70 ± 0.40 pm apart, ratio 0.670 ± 0.030"),
        ("single", None, "single (evidence for two 0.0 of 6.9, for one 0.0 of 3.0)"),
        ("undecided", None, "undecided: evidence for two 0.0 of 6.9, for one 0.0 of 3.0"),
        (
            "self-reversed",
            6.908,
            "self-reversed (evidence for two 0.0 of 6.9, for one 0.0 of 3.0, "
            "for a self-reversed one 8.7 of 6.9)",
        ),
    ],
)
def test_a_look_is_told_by_its_verdict(verdict: str, bound_reversed: float | None, told: str) -> None:
    assert look_in_words({**LOOK, "verdict": verdict, "bound_reversed": bound_reversed}) == told
