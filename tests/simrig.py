"""The shipped simulated bench with all its in-memory drivers, for one story at a time under virtual time."""

from __future__ import annotations

import tomllib
from collections.abc import Awaitable, Callable
from dataclasses import dataclass
from pathlib import Path
from typing import Any

from drivers.clock import Clock, run_virtual
from drivers.protocols import (
    Ambient,
    AnalogueDetector,
    Detector,
    DriverContext,
    GratingDrive,
    Selector,
    Shutter,
    Slits,
)
from simulators import memory
from simulators.world import World, build

BENCH = Path(__file__).parent.parent / "configs" / "benches" / "emberlight-3.toml"
START_NS = 1_928_599_200_000_000_000
S = 1_000_000_000


@dataclass(frozen=True)
class Rig:
    """One simulated bench with all its drivers."""

    clock: Clock
    world: World
    drive: GratingDrive
    detector: Detector
    shutter: Shutter
    ambient: Ambient
    filter: Selector
    lamp: Selector
    slits: Slits
    reference: Detector
    analogue: AnalogueDetector

    @property
    def top_steps(self) -> int:
        """Where the strong line of the 313 nm pair stands."""
        drive = self.world.options.drive
        rotation = self.world.lines[0].profile.rotation_rad
        return round(drive.zero_order_steps + drive.steps_per_radian * rotation)


def play(
    story: Callable[[Rig], Awaitable[Any]],
    *,
    seed: int = 1,
    faults: list[Any] | None = None,
    without: tuple[str, ...] = (),
    **changes: Any,
) -> Any:
    """Run one story on a fresh rig under virtual time; keys of `changes` replace those of the world's tables,
    `without` takes tables out."""
    with BENCH.open("rb") as stream:
        options = tomllib.load(stream)["world"]["options"]
    for table, keys in changes.items():
        options[table] = options.get(table, {}) | keys if isinstance(keys, dict) else keys
    for table in without:
        del options[table]
    options["faults"] = faults or []

    async def main(clock: Clock) -> Any:
        world = build(options, DriverContext(clock, "world", seed, str(BENCH.parent)))

        def context(role: str) -> DriverContext:
            return DriverContext(clock, role, seed, str(BENCH.parent), world)

        rig = Rig(
            clock,
            world,
            memory.grating_drive({}, context("drive")),
            memory.counter({}, context("detector")),
            memory.shutter({}, context("shutter")),
            memory.ambient({}, context("ambient")),
            memory.selector({}, context("filter")),
            memory.selector({}, context("lamp")),
            memory.slits({}, context("slits")),
            memory.reference({}, context("reference")),
            memory.analogue({}, context("detector")),
        )
        return await story(rig)

    return run_virtual(main, START_NS)


def bright(rate_per_s: float) -> dict[str, Any]:
    line = {"wavelength_air_nm": 313.155, "strength_per_s": rate_per_s, "doppler_fwhm_pm": 1.0}
    return {"lines": [line]}
