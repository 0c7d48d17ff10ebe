"""The detectors: a photon counter, the current of the same tube, and a counter that looks at the lamp."""

from __future__ import annotations

import asyncio

from drivers.errors import LimitError, LinkError, OverLight
from drivers.protocols import Current, Gate
from simulators.memory_device import MemoryDevice, MemoryOpticsDevice

_LONGEST_GATE_NS = 1_000_000_000
_TRIP_S = 0.001  # how fast the tube's supply notices over-light


class _Gated(MemoryDevice):
    """Opens gates; the tube's detectors also trip on too much light."""

    async def _pass(self, call: str, gate_ns: int, deadline_s: float) -> None:
        if not 0 < gate_ns <= _LONGEST_GATE_NS:
            raise LimitError(self._role, f"a gate of {gate_ns} ns; allowed are 1 ns to 1 s")
        await self._faults.pass_or_fail(self._role, call, deadline_s=deadline_s)

    async def _wait(self, gate_ns: int, deadline_s: float) -> None:
        gate_s = gate_ns * 1e-9
        await asyncio.sleep(min(gate_s, deadline_s))
        if gate_s > deadline_s:
            raise LinkError(self._role, f"no counts within {deadline_s:g} s")

    async def _tube_rate_per_s(self, gate_ns: int, deadline_s: float) -> float:
        """The gate itself: true mean rate over it. Raises OverLight."""
        counter, world = self._world.counter, self._world
        start_ns = self._clock.monotonic_ns()
        if counter.is_too_bright(world.brightest_rate_per_s) and counter.is_too_bright(
            world.mean_rate_per_s(start_ns, start_ns + 1)
        ):
            await asyncio.sleep(_TRIP_S)
            raise self._over_light()
        await self._wait(gate_ns, deadline_s)
        rate_per_s = world.mean_rate_per_s(start_ns, start_ns + gate_ns)
        if counter.is_too_bright(rate_per_s):
            raise self._over_light()
        return rate_per_s

    def _over_light(self) -> OverLight:
        self._world.counter.trip(self._clock.monotonic_ns())
        trip = self._world.counter.options.trip_rate_per_s
        return OverLight(self._role, f"more than {trip:g} counts per s: the supply has tripped")


class MemoryCounter(_Gated):
    _maker = "Nightjar Counting"
    _model = "Hush 2 photon counter"
    _serial = "NJ-2210"

    async def gate(self, gate_ns: int, *, deadline_s: float) -> Gate:
        await self._pass("gate", gate_ns, deadline_s)
        rate_per_s = await self._tube_rate_per_s(gate_ns, deadline_s)
        counts, flags = self._world.counter.count(rate_per_s=rate_per_s, gate_s=gate_ns * 1e-9)
        return Gate(counts, gate_ns, flags)


class MemoryAmmeter(_Gated, MemoryOpticsDevice):
    _maker = "Nightjar Counting"
    _model = "Murmur photocurrent amplifier"
    _serial = "NJ-0907"

    async def measure(self, gate_ns: int, *, deadline_s: float) -> Current:
        await self._pass("measure", gate_ns, deadline_s)
        rate_per_s = await self._tube_rate_per_s(gate_ns, deadline_s)
        mean_a, flags = self._optics.ammeter.read(rate_per_s=rate_per_s, gate_s=gate_ns * 1e-9)
        return Current(mean_a, gate_ns, flags)


class MemoryReference(_Gated, MemoryOpticsDevice):
    _maker = "Nightjar Counting"
    _model = "Vigil lamp monitor"
    _serial = "NJ-3312"

    async def gate(self, gate_ns: int, *, deadline_s: float) -> Gate:
        await self._pass("gate", gate_ns, deadline_s)
        start_ns = self._clock.monotonic_ns()
        await self._wait(gate_ns, deadline_s)
        gain = self._optics.mean_lamp_gain(start_ns, start_ns + gate_ns)
        return Gate(self._optics.reference.count(gain=gain, gate_s=gate_ns * 1e-9), gate_ns)
