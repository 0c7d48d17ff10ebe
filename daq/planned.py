"""What a plan says, made into what computes: its scale, how its readings scatter, its tally."""

from __future__ import annotations

import json
from functools import lru_cache

from analysis.mounts import Mount, mount_from_json
from analysis.readings import AnalogueLaw, CounterLaw, ReferenceLaw
from daq.records import Body
from daq.tally import Tally


def mount_of(plan: Body) -> Mount:
    """The mount a plan was drawn up for."""
    return _mount_from(json.dumps(plan["mount"], sort_keys=True))


@lru_cache(maxsize=32)
def _mount_from(text: str) -> Mount:
    return mount_from_json(json.loads(text))


def detector_law(plan: Body) -> CounterLaw | AnalogueLaw:
    """How the detector's readings scatter, as the plan has it."""
    table = plan["detector"]
    if table["kind"] == "analogue":
        return AnalogueLaw(table["charge_unit_c"], table["read_noise_a"], table["shot_noise_c"])
    return CounterLaw(table["dead_time_ns"] * 1e-9, table["dead_time_uncertainty_ns"] * 1e-9)


def tally_of(plan: Body) -> Tally:
    """An empty tally that judges darks as this plan's detector makes them."""
    law = detector_law(plan) if "detector" in plan else None
    horizon_s = plan.get("dark_horizon_s", 0.0)
    return Tally(law if isinstance(law, AnalogueLaw) else None, dark_horizon_s=horizon_s)


def reference_law(plan: Body) -> ReferenceLaw | None:
    """The reference detector's, None without one."""
    table = plan["reference"]
    return None if table is None else ReferenceLaw(table["dead_time_ns"] * 1e-9, table["dark_rate_per_s"])
