"""In-memory drivers: the device protocols played on a simulated bench.

Their moves, gates and shutter travels take the time they would take, by asyncio.sleep or a timer, so the same
code serves virtual and real time. `context.world` is any `SimulatedBench`. A cancelled call means only that
nobody waits any more: the motor arrives all the same.
"""

from __future__ import annotations

import asyncio
from typing import Any

from pydantic import Field

from drivers.errors import Halted, LimitError, LinkError, OverLight
from drivers.protocols import (
    Ambient,
    AmbientReading,
    Detector,
    DriverContext,
    Gate,
    GratingDrive,
    Identity,
    Moved,
    Shutter,
)
from drivers.settings import StrictModel, parse_options
from simulators.draw import Draws
from simulators.world import SimulatedBench

_LONGEST_GATE_NS = 1_000_000_000
_TRIP_S = 0.001  # how fast the counter's supply notices over-light


class MemoryOptions(StrictModel):
    """`[<role>.options]` of every in-memory device."""

    serial: str = Field(default="", max_length=40)


class _MemoryDevice:
    """What the four have in common: a world, a name in it, a script of faults."""

    _maker = ""
    _model = ""
    _serial = ""

    def __init__(self, options: MemoryOptions, context: DriverContext) -> None:
        if context.world is None:
            raise LimitError(context.role, "this driver plays on a simulated bench: give a [world] table")
        self._world: SimulatedBench = context.world
        self._role = context.role
        self._clock = context.clock
        self._serial = options.serial or self._serial
        self._faults = self._world.faults

    async def identify(self, *, deadline_s: float) -> Identity:
        await self._faults.pass_or_fail(self._role, "identify", deadline_s=deadline_s)
        return Identity(self._maker, self._model, self._serial, "sim 1")

    async def close(self) -> None:
        await self._faults.pass_or_fail(self._role, "close")


class MemoryGratingDrive(_MemoryDevice):
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


class MemoryCounter(_MemoryDevice):
    _maker = "Nightjar Counting"
    _model = "Hush 2 photon counter"
    _serial = "NJ-2210"

    async def gate(self, gate_ns: int, *, deadline_s: float) -> Gate:
        if not 0 < gate_ns <= _LONGEST_GATE_NS:
            raise LimitError(self._role, f"a gate of {gate_ns} ns; allowed are 1 ns to 1 s")
        await self._faults.pass_or_fail(self._role, "gate", deadline_s=deadline_s)
        counter, clock = self._world.counter, self._clock
        start_ns = clock.monotonic_ns()
        if counter.is_too_bright(self._world.brightest_rate_per_s) and counter.is_too_bright(
            self._world.mean_rate_per_s(start_ns, start_ns + 1)
        ):
            await asyncio.sleep(_TRIP_S)
            raise self._over_light()
        gate_s = gate_ns * 1e-9
        await asyncio.sleep(min(gate_s, deadline_s))
        if gate_s > deadline_s:
            raise LinkError(self._role, f"no counts within {deadline_s:g} s")
        rate_per_s = self._world.mean_rate_per_s(start_ns, start_ns + gate_ns)
        if counter.is_too_bright(rate_per_s):
            raise self._over_light()
        counts, flags = counter.count(rate_per_s=rate_per_s, gate_s=gate_s)
        return Gate(counts, gate_ns, flags)

    def _over_light(self) -> OverLight:
        self._world.counter.trip(self._clock.monotonic_ns())
        trip = self._world.counter.options.trip_rate_per_s
        return OverLight(self._role, f"more than {trip:g} counts per s: the supply has tripped")


class MemoryShutter(_MemoryDevice):
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


class MemoryAmbient(_MemoryDevice):
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
