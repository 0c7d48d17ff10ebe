"""What all in-memory drivers have in common: a world, a place in it, a script of faults."""

from __future__ import annotations

import asyncio
from collections.abc import Callable

from pydantic import Field

from drivers.errors import LimitError, LinkError
from drivers.protocols import DriverContext, Identity
from drivers.settings import StrictModel
from simulators.world import SimulatedBench, World


class MemoryOptions(StrictModel):
    """`[<role>.options]` of every in-memory device."""

    serial: str = Field(default="", max_length=40)


class MemoryDevice:
    """One device on a simulated bench."""

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


class MemoryOpticsDevice(MemoryDevice):
    """One that needs a world with lamps and optics, not a recorded spectrum."""

    def __init__(self, options: MemoryOptions, context: DriverContext) -> None:
        super().__init__(options, context)
        if not isinstance(context.world, World):
            raise LimitError(context.role, "this driver needs [world] factory = 'simulators.world:build'")
        self._optics: World = context.world

    async def _after(self, travel_s: float, deadline_s: float, arrive: Callable[[], None]) -> None:
        """Let a motor run; it arrives even when nobody waits for it any more."""
        loop = asyncio.get_running_loop()
        arrived: asyncio.Future[None] = loop.create_future()

        def end() -> None:
            arrive()
            if not arrived.done():
                arrived.set_result(None)

        loop.call_later(travel_s, end)
        if travel_s > deadline_s:
            await asyncio.sleep(deadline_s)
            raise LinkError(self._role, f"not in place within {deadline_s:g} s")
        await arrived
