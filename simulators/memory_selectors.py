"""What changes the beam: wheels and mirrors with named places, and the motors of the slits."""

from __future__ import annotations

from typing import Literal

from drivers.errors import LimitError
from drivers.protocols import DriverContext
from simulators.memory_device import MemoryOpticsDevice, MemoryOptions

_KINDS = ("filter", "lamp", "attenuator")


class SelectorOptions(MemoryOptions):
    """`[<role>.options]` of a wheel or mirror; `selects` is the role's name unless given."""

    selects: Literal["filter", "lamp", "attenuator"] | None = None


class MemorySelector(MemoryOpticsDevice):
    _maker = "Osier & Vane"
    _model = "Carousel 6"
    _serial = "OV-640"

    def __init__(self, options: SelectorOptions, context: DriverContext) -> None:
        super().__init__(options, context)
        self._kind = options.selects or context.role
        if self._kind not in _KINDS:
            raise LimitError(context.role, f"give options selects = one of {', '.join(_KINDS)}")

    async def select(self, position: str, *, deadline_s: float) -> None:
        places = self._optics.positions(self._kind)
        if position not in places:
            allowed = ", ".join(map(repr, places))
            raise LimitError(self._role, f"no place is called {position!r}; there are {allowed}")
        await self._faults.pass_or_fail(self._role, "select", deadline_s=deadline_s)
        if self._optics.in_beam[self._kind] != position:
            await self._after(
                self._optics.options.wheel_s,
                deadline_s,
                lambda: self._optics.select(self._kind, position),
            )


class MemorySlits(MemoryOpticsDevice):
    _maker = "Wick & Daughters"
    _model = "Twinblade slits"
    _serial = "WD-402"

    async def set_widths(self, *, entrance_um: float, exit_um: float, deadline_s: float) -> None:
        motors = self._optics.options.slits
        for side, width_um in (("entrance", entrance_um), ("exit", exit_um)):
            if not motors.narrowest_um <= width_um <= motors.widest_um:
                between = f"{motors.narrowest_um:g} to {motors.widest_um:g} um"
                raise LimitError(self._role, f"{side} slit of {width_um:g} um; allowed are {between}")
        await self._faults.pass_or_fail(self._role, "set_widths", deadline_s=deadline_s)
        if self._optics.slits_um != (entrance_um, exit_um):
            await self._after(
                motors.travel_s,
                deadline_s,
                lambda: self._optics.set_slits(entrance_um=entrance_um, exit_um=exit_um),
            )
