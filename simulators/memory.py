"""In-memory drivers: the device protocols played on a simulated bench.

Their moves, gates and shutter travels take the time they would take, by asyncio.sleep or a timer, so the same
code serves virtual and real time. `context.world` is any `SimulatedBench`. A cancelled call means only that
nobody waits any more: the motor arrives all the same.
"""

from __future__ import annotations

import asyncio
from typing import Any

from drivers.errors import Halted, LimitError, LinkError
from drivers.protocols import (
    Ambient,
    AmbientReading,
    AnalogueDetector,
    Detector,
    DriverContext,
    GratingDrive,
    Moved,
    Selector,
    Shutter,
    Slits,
)
from drivers.settings import parse_options
from simulators.draw import Draws
from simulators.memory_detectors import MemoryAmmeter, MemoryCounter, MemoryReference
from simulators.memory_device import MemoryDevice, MemoryOptions
from simulators.memory_selectors import MemorySelector, MemorySlits, SelectorOptions


class MemoryGratingDrive(MemoryDevice):
    _maker = "Tallow & Reed"
    _model = "Quarterstaff 7 grating drive"
    _serial = "TR7-0031"

    def __init__(self, options: MemoryOptions, context: DriverContext) -> None:
        super().__init__(options, context)
        self._waiting: asyncio.Future[bool] | None = None  # its result: did the motor arrive

    async def home(self, *, deadline_s: float) -> Moved:
        """The reference mark stands at step 0; its repeatability is the world's."""
        self._refuse_second()
        await self._faults.pass_or_fail(self._role, "home", deadline_s=deadline_s)
        stepper = self._world.stepper
        stepper.is_homed = False
        moved = await self._travel(0, stepper.options.home_s, deadline_s)
        stepper.found_mark()
        return moved

    async def move_to(self, steps: int, *, deadline_s: float) -> Moved:
        self._refuse_second()
        stepper = self._world.stepper
        limits = stepper.options
        if not stepper.is_homed:
            raise LimitError(self._role, "not homed: the position is unknown until home() has ended")
        if not limits.lowest_steps <= steps <= limits.highest_steps:
            raise LimitError(
                self._role,
                f"{steps} steps is beyond the limits {limits.lowest_steps}..{limits.highest_steps}",
            )
        await self._faults.pass_or_fail(self._role, "move_to", deadline_s=deadline_s)
        return await self._travel(steps, 0.0, deadline_s)

    async def halt(self) -> None:
        await self._faults.pass_or_fail(self._role, "halt")
        self._world.stepper.stop(self._clock.monotonic_ns())
        if self._waiting is not None and not self._waiting.done():
            self._waiting.set_result(False)

    def _refuse_second(self) -> None:
        if self._waiting is not None:
            raise LimitError(self._role, "a move is under way; halt it or wait for its end")

    async def _travel(self, steps: int, extra_s: float, deadline_s: float) -> Moved:
        self._refuse_second()
        stepper = self._world.stepper
        start_ns = self._clock.monotonic_ns()
        arrival_ns = stepper.begin(float(steps), start_ns) + round(extra_s * 1e9)
        wait_s = (arrival_ns - start_ns) * 1e-9
        if wait_s > 0.0:
            loop = asyncio.get_running_loop()
            self._waiting = loop.create_future()
            timer = loop.call_later(min(wait_s, deadline_s), self._arrive)
            try:
                arrived = await self._waiting
            finally:
                timer.cancel()
                self._waiting = None
            if not arrived:
                at = stepper.commanded_steps(self._clock.monotonic_ns())
                raise Halted(self._role, f"halted at step {at:.0f} on the way to {steps}")
            if wait_s > deadline_s:
                raise LinkError(self._role, f"no arrival at step {steps} within {deadline_s:g} s")
        return Moved(steps, self._clock.monotonic_ns() - start_ns)

    def _arrive(self) -> None:
        if self._waiting is not None and not self._waiting.done():
            self._waiting.set_result(True)


class MemoryShutter(MemoryDevice):
    _maker = "Wick & Daughters"
    _model = "Blink shutter"
    _serial = "WD-118"

    async def set_open(self, is_open: bool, *, deadline_s: float) -> None:
        await self._faults.pass_or_fail(self._role, "set_open", deadline_s=deadline_s)
        blade = self._world.shutter
        if is_open != blade.is_open:
            # the blade clears the beam at the end of its way, and covers it at the beginning
            if not is_open:
                blade.set(False, self._clock.monotonic_ns())
            await asyncio.sleep(blade.options.travel_s)
            if is_open:
                blade.set(True, self._clock.monotonic_ns())


class MemoryAmbient(MemoryDevice):
    _maker = "Fenwick Glass"
    _model = "Weather post"
    _serial = "FG-7"

    def __init__(self, options: MemoryOptions, context: DriverContext) -> None:
        super().__init__(options, context)
        self._draws = Draws(self._world.seed, "ambient", self._clock.utc_ns())

    async def read(self, *, deadline_s: float) -> AmbientReading:
        await self._faults.pass_or_fail(self._role, "read", deadline_s=deadline_s)
        return self._world.air.reading(self._clock.utc_ns() * 1e-9, self._draws)


def _options(options: dict[str, Any], context: DriverContext) -> MemoryOptions:
    return parse_options(MemoryOptions, options, f"{context.role}.options")


def grating_drive(options: dict[str, Any], context: DriverContext) -> GratingDrive:
    """Factory of the drive."""
    return MemoryGratingDrive(_options(options, context), context)


def counter(options: dict[str, Any], context: DriverContext) -> Detector:
    """Factory of the photon counter."""
    return MemoryCounter(_options(options, context), context)


def shutter(options: dict[str, Any], context: DriverContext) -> Shutter:
    """Factory of the shutter."""
    return MemoryShutter(_options(options, context), context)


def ambient(options: dict[str, Any], context: DriverContext) -> Ambient:
    """Factory of the air sensor."""
    return MemoryAmbient(_options(options, context), context)


def analogue(options: dict[str, Any], context: DriverContext) -> AnalogueDetector:
    """Factory of the photocurrent amplifier on the counter's tube."""
    return MemoryAmmeter(_options(options, context), context)


def reference(options: dict[str, Any], context: DriverContext) -> Detector:
    """Factory of the counter that looks at the lamp itself."""
    return MemoryReference(_options(options, context), context)


def selector(options: dict[str, Any], context: DriverContext) -> Selector:
    """Factory of a filter wheel, a lamp mirror or an attenuator wheel: which one, the role says."""
    return MemorySelector(parse_options(SelectorOptions, options, f"{context.role}.options"), context)


def slits(options: dict[str, Any], context: DriverContext) -> Slits:
    """Factory of the motorised slits."""
    return MemorySlits(_options(options, context), context)
