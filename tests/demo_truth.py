"""What the demo night may say: the truth behind it, and what is allowed of each target."""

from __future__ import annotations

import math
from collections.abc import Iterator, Sequence
from typing import Any

NARROW, WIDE = "Hg 313 nm, narrow slits", "Hg 313 nm, wide slits"
REVERSED, UNSETTLED, CONTROL = "Hg 254 nm resonance line", "Ne 640 nm isotopes", "Ar 696 nm control"

TRUTH: dict[str, dict[str, float]] = {
    NARROW: {"separation_pm": 29.0, "ratio": 0.70},
    WIDE: {"separation_pm": 29.0, "ratio": 0.70},
    "Hg 579 nm pair": {"separation_pm": 101.0, "ratio": 140.0 / 480.0},
    "Cd 361 nm group": {"separation_pm": 236.0, "ratio": 140.0 / 480.0},
    "H 656 nm with deuterium": {"separation_pm": 178.0, "ratio": 0.03},
    "Cs 852 nm hyperfine groups": {"separation_pm": 21.45, "ratio": 7.0 / 9.0},
}
"""As in the world of configs/benches/emberlight-7.toml."""

ALLOWED: dict[str, set[str]] = {
    NARROW: {"pair"},
    WIDE: {"pair", "undecided"},
    REVERSED: {"self-reversed", "undecided"},
    "Hg 579 nm pair": {"pair"},
    "Cd 361 nm group": {"pair"},
    "H 656 nm with deuterium": {"pair"},
    "Cs 852 nm hyperfine groups": {"pair"},
    UNSETTLED: {"undecided"},
    CONTROL: {"single"},
}
"""Pairs wider than a line must be found, the control is never a pair, a self-reversed line never plain."""


def faults_of(runs: Sequence[dict[str, Any]]) -> Iterator[str]:
    """What a night says that it must not say. Five standard uncertainties off are a fault."""
    by_target = {run["target"]: run for run in runs}
    if set(by_target) != set(ALLOWED):
        yield f"targets {sorted(set(by_target) ^ set(ALLOWED))} are missing or unknown"
        return
    for target, run in by_target.items():
        if run["verdict"] not in ALLOWED[target]:
            yield f"{target}: {run['verdict']}"
        for key, truth in TRUTH.get(target, {}).items():
            u = run["separation_u_pm"] if key == "separation_pm" else run["ratio_u"]
            if run["verdict"] == "pair" and abs(run[key] - truth) > 5.0 * u:
                yield f"{target}: {key} {run[key]:.4g} ± {u:.2g}, true {truth:.4g}"
    one, other = by_target[NARROW], by_target[WIDE]
    if {one["verdict"], other["verdict"]} == {"pair"}:
        apart = abs(one["separation_pm"] - other["separation_pm"])
        if apart > 4.0 * math.hypot(one["separation_u_pm"], other["separation_u_pm"]):
            yield f"the two slit widths do not agree: {apart:.2f} pm apart"
