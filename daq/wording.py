"""Looks, durations and what is still to be done, in words."""

from __future__ import annotations

import math
from collections.abc import Mapping
from typing import Any

from analysis.digits import NOTHING, with_uncertainty


def duration(seconds: float | None) -> str:
    """`42 s`, `3 min 20 s`, `2 h 05 min`."""
    if seconds is None or not math.isfinite(seconds):
        return NOTHING
    if seconds < 59.95:
        return f"{seconds:.3g} s"
    minutes, rest = divmod(round(seconds), 60)
    if minutes < 60:
        return f"{minutes} min {rest:02d} s"
    return f"{minutes // 60} h {minutes % 60:02d} min"


def look_in_words(look: Mapping[str, Any]) -> str:
    """What a look says, in one line."""
    separation = with_uncertainty(_pm(look["separation_nm"]), _pm(look["separation_u_nm"]))
    evidence = (
        f"evidence for two {_share(look['max_log_e_pair'], look['bound_pair'])}, "
        f"for one {_share(look['max_log_e_single'], look['bound_single'])}"
    )
    if look.get("bound_reversed") is not None:
        evidence += f", for a self-reversed one {_share(look['max_log_e_reversed'], look['bound_reversed'])}"
    if look["verdict"] == "pair":
        return f"pair, {separation} pm apart, ratio {with_uncertainty(look['ratio'], look['ratio_u'])}"
    if look["verdict"] in ("single", "self-reversed"):
        return f"{look['verdict']} ({evidence})"
    return f"undecided: {evidence}"


def _share(evidence: float, bound: float) -> str:
    return f"{max(0.0, evidence):.1f} of {bound:.1f}"


def _pm(value_nm: float | None) -> float | None:
    return None if value_nm is None else 1e3 * value_nm


def light_to_goal(look: Mapping[str, Any], question: Mapping[str, Any], light_s: float) -> float | None:
    """How much more open-shutter time the goal needs, in s, if things go on so; None: unknown.

    An uncertainty falls with the root of the light until it meets its floor (shape and scale); evidence grows
    in proportion to the light.
    """
    if look["goal_reached"]:
        return 0.0
    goal_nm, budget = question["separation_uncertainty_nm"], look["budget"]
    if look["verdict"] == "pair":
        if goal_nm is None or budget is None:
            return None
        floor = math.hypot(budget["shape_nm"], budget["scale_nm"], budget["drive_nm"])
        if goal_nm <= floor:
            return None
        share: float = budget["statistics_nm"] ** 2 / (goal_nm**2 - floor**2)
        return max(0.0, light_s * (share - 1.0))
    claims = [key for key in ("pair", "single", "reversed") if look.get(f"bound_{key}")]
    progress: float = max(look[f"log_e_{key}"] / look[f"bound_{key}"] for key in claims)
    return light_s * (1.0 / progress - 1.0) if progress > 0.05 else None


def length(nm: float) -> str:
    """`18.6 pm`, `2.31 nm`."""
    return f"{nm:.3g} nm" if abs(nm) >= 0.9995 else f"{1e3 * nm:.3g} pm"


def whole(value: float) -> str:
    """A large number to four digits: `13 980`."""
    return f"{float(f'{value:.4g}'):,.0f}".replace(",", " ")
