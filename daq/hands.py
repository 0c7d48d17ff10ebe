"""The hands: the only code that awaits drivers. One call, one record.

Every public coroutine here is one action of the run machine and returns the record that ends it, as
`(kind, body)`; device errors pass through to the runner, which makes fault records of them. `arm` is called
before an action is started, `end_dwell` and `halt` may come at any time while it runs.
"""

from __future__ import annotations

import asyncio
import logging
import math
import operator
from collections.abc import Awaitable, Callable, Iterable, Mapping
from dataclasses import asdict, dataclass, field
from typing import Any, TypeVar

from analysis.allocate import SHORTEST_DWELL_NS, Visit
from daq.records import Kind
from drivers.clock import Clock
from drivers.errors import DeviceError, Halted, HardwareFault, LinkError, OverLight, ReplyError
from drivers.protocols import Ambient, Detector, Device, GratingDrive, Shutter

log = logging.getLogger(__name__)

HIGHEST_DEAD_TIME_FRACTION = 0.3
"""Counts times dead time over gate time: above it the correction is not trusted and the point is flagged
(common practice)."""

ABANDON_AFTER_S = 1.0
"""A driver that overstays its own deadline by this much is no longer waited for."""

Answer = TypeVar("Answer")
Ending = tuple[str, dict[str, Any]]


@dataclass(frozen=True, slots=True)
class Devices:
    """What a bench file names, opened."""

    drive: GratingDrive
    detector: Detector
    shutter: Shutter
    ambient: Ambient | None

    def by_role(self) -> dict[str, Device]:
        every = {"drive": self.drive, "detector": self.detector, "shutter": self.shutter}
        return every | ({"ambient": self.ambient} if self.ambient is not None else {})

    async def close(self) -> list[str]:
        """Release every link; what went wrong is returned, never raised."""
        return await close_devices(self.by_role())


async def close_devices(devices: Mapping[str, Device]) -> list[str]:
    """Release what was opened, by role; what went wrong is returned, never raised."""
    problems = []
    for role, device in devices.items():
        try:
            async with asyncio.timeout(ABANDON_AFTER_S):
                await device.close()
        except Exception as error:
            problems.append(f"{role}: {error!r}")
    return problems


@dataclass(frozen=True, slots=True)
class Grip:
    """How this bench is to be handled. Times in ns and s, positions in steps."""

    settle_ns: int
    backlash_steps: int
    lowest_steps: int
    longest_gate_ns: int
    highest_rate_per_s: float
    dead_time_ns: float
    move_timeout_s: float
    reply_timeout_s: float = 5.0


@dataclass(slots=True)
class _Dwell:
    """The gates of one visit so far."""

    counts: int = 0
    gate_ns: int = 0
    gates: int = 0
    flags: set[str] = field(default_factory=set)

    def add(self, counts: int, gate_ns: int, flags: Iterable[str]) -> None:
        self.counts += counts
        self.gate_ns += gate_ns
        self.gates += 1
        self.flags.update(str(flag) for flag in flags)


def whole(role: str, value: object) -> int:
    """A plain int of whatever whole number a driver gives; ReplyError for anything else."""
    try:
        return operator.index(value)  # type: ignore[arg-type]
    except TypeError:
        raise ReplyError(role, f"it reports {value!r}; a driver gives whole numbers") from None


class Hands:
    """Move, settle, expose; and let go."""

    def __init__(self, devices: Devices, grip: Grip, clock: Clock) -> None:
        self._devices = devices
        self._grip = grip
        self._clock = clock
        self._start_ns = clock.monotonic_ns()
        self._position_steps: int | None = None
        self._shutter_is_open: bool | None = None
        self._dwell_ends = False
        self._halted = False
        self._owed: Exception | None = None
        self._grave: Exception | None = None
        self._air_sensor: dict[str, str] | None = None

    def at_ns(self) -> int:
        """Nanoseconds since the session began."""
        return self._clock.monotonic_ns() - self._start_ns

    def arm(self) -> None:
        """Forget earlier wishes; called in the same breath that starts an action."""
        self._dwell_ends = self._halted = False

    def end_dwell(self) -> None:
        """The point ends after the gate in progress."""
        self._dwell_ends = True

    async def halt(self) -> None:
        """Stop motion now; the point ends after the gate in progress."""
        self._dwell_ends = self._halted = True
        await self._ask("drive", self._devices.drive.halt(), self._grip.reply_timeout_s)

    async def prepare(self) -> Ending:
        """Shutter closed first, then who is there, then the drive's reference mark, then the air."""
        self._owed = self._position_steps = None  # preparing anew is the answer to what was owed
        self._shutter_is_open = None
        wait_s = self._grip.reply_timeout_s
        try:
            await self._set_shutter(False)
            identities = {
                role: await self._identify(role, device, wait_s)
                for role, device in self._devices.by_role().items()
                if role != "ambient"
            }
            if self._halted:
                return Kind.HALTED, {"at_ns": self.at_ns()}
            wait_s = self._grip.move_timeout_s
            homed = await self._ask("drive", self._devices.drive.home(deadline_s=wait_s), wait_s)
            self._position_steps = whole("drive", homed.steps)
            ambient = await self._read_ambient()
            if self._air_sensor is not None:
                identities["ambient"] = self._air_sensor
        except Halted:
            return self._let_go()
        return Kind.PREPARED, {
            "at_ns": self.at_ns(),
            "identities": identities,
            "home_steps": self._position_steps,
            "ambient": ambient,
        }

    async def point(self, *, sweep: int, index: int, visit: Visit) -> Ending:
        """One visit. Whole gates counted before an interruption or an error are kept as a shorter point; an
        error that came after them is owed, and raised by the next action."""
        if self._owed is not None:
            owed, self._owed = self._owed, None
            raise owed
        started_ns = self.at_ns()
        dwell = _Dwell()
        ambient = None
        try:
            reported_steps = await self._go_to(visit.steps)
            if not self._dwell_ends:
                await self._set_shutter(visit.light)
                await self._expose(visit, dwell)
                if not visit.light:
                    ambient = await self._read_ambient()
            if self._dwell_ends:
                await self._set_shutter(False)
        except Halted:
            if dwell.gates == 0:
                return self._let_go()
        except Exception as error:
            if dwell.gates == 0:
                raise
            await self._keep(error)
        if dwell.gates == 0:
            return Kind.HALTED, {"at_ns": self.at_ns()}
        body: dict[str, Any] = {
            "at_ns": started_ns,
            "end_ns": self.at_ns(),
            "sweep": sweep,
            "index": index,
            "group": visit.group,
            "light": visit.light,
            "steps": visit.steps,
            "reported_steps": reported_steps,
            "counts": dwell.counts,
            "gate_ns": dwell.gate_ns,
            "gates": dwell.gates,
            "flags": sorted(dwell.flags),
            "complete": dwell.gate_ns > visit.dwell_ns - SHORTEST_DWELL_NS,
        }
        if ambient is not None:
            body["ambient"] = ambient
        return Kind.POINT, body

    async def safe(self) -> Ending:
        """Shutter closed and motion stopped, whatever else fails. Never raises: problems are reported."""
        problems: list[str] = []
        if self._owed is not None:  # repairing is over; what it was about is not forgotten
            problems.append(str(self._owed))
            self._owed = None
        # The shutter first: light harms more than motion. Its remembered state is not trusted here.
        closed = await self._close_shutter(problems)
        stopped = await self._attempt("drive", lambda: self._devices.drive.halt(), problems)
        return Kind.SAFE, {
            "at_ns": self.at_ns(),
            "shutter": "closed" if closed else "unknown",
            "drive": "stopped" if stopped else "unknown",
            "problems": problems,
        }

    def grave(self) -> Exception | None:
        """An error after counted gates that no repair mends; told once, after the point's record."""
        error, self._grave = self._grave, None
        return error

    # ---- parts ------------------------------------------------------------------------------------------

    async def _close_shutter(self, problems: list[str]) -> bool:
        wait_s = self._grip.reply_timeout_s
        closed = await self._attempt(
            "shutter", lambda: self._devices.shutter.set_open(False, deadline_s=wait_s), problems
        )
        self._shutter_is_open = False if closed else None
        return closed

    async def _attempt(self, role: str, call: Callable[[], Awaitable[None]], problems: list[str]) -> bool:
        try:
            async with asyncio.timeout(self._grip.reply_timeout_s):
                await call()
        except Exception as error:
            problems.append(str(error) if isinstance(error, DeviceError) else f"{role}: {error!r}")
            return False
        return True

    async def _keep(self, error: Exception) -> None:
        """An error after counted gates: their record comes first."""
        if isinstance(error, DeviceError) and error.repeat:
            self._owed = error
        else:
            self._grave = error
            await self._close_shutter([])

    def _let_go(self) -> Ending:
        if not self._halted:
            raise HardwareFault("drive", "it halted by itself; look for a limit switch or a stop button")
        return Kind.HALTED, {"at_ns": self.at_ns()}

    async def _ask(self, role: str, call: Awaitable[Answer], deadline_s: float) -> Answer:
        """What a driver answers. It keeps its own deadline; one that does not is abandoned a little later."""
        try:
            async with asyncio.timeout(deadline_s + ABANDON_AFTER_S):
                return await call
        except TimeoutError:
            raise LinkError(
                role, f"no answer within {deadline_s:g} s, and the driver did not say so"
            ) from None

    async def _go_to(self, steps: int) -> int:
        """Arrive from below: a worm's slack is then always taken up on the same side."""
        here = self._position_steps
        if here == steps:
            return steps
        self._position_steps = None  # unknown until the drive has answered
        if (here is None or steps < here) and self._grip.backlash_steps > 0:
            await self._move_to(max(steps - self._grip.backlash_steps, self._grip.lowest_steps))
        reported_steps = await self._move_to(steps)
        if reported_steps != steps:
            raise HardwareFault("drive", f"asked to go to {steps} steps, it reports {reported_steps}")
        self._position_steps = reported_steps
        await asyncio.sleep(self._grip.settle_ns * 1e-9)
        return reported_steps

    async def _move_to(self, steps: int) -> int:
        if self._halted:
            raise Halted("drive", "a halt was asked for between two moves")
        wait_s = self._grip.move_timeout_s
        moved = await self._ask("drive", self._devices.drive.move_to(steps, deadline_s=wait_s), wait_s)
        return whole("drive", moved.steps)

    async def _expose(self, visit: Visit, dwell: _Dwell) -> None:
        while not self._dwell_ends:
            if dwell.gates > 0 and visit.dwell_ns - dwell.gate_ns < SHORTEST_DWELL_NS:
                return
            asked_ns = min(self._grip.longest_gate_ns, visit.dwell_ns - dwell.gate_ns)
            wait_s = asked_ns * 1e-9 + self._grip.reply_timeout_s
            gate = await self._ask(
                "detector", self._devices.detector.gate(asked_ns, deadline_s=wait_s), wait_s
            )
            counts, gate_ns = whole("detector", gate.counts), whole("detector", gate.gate_ns)
            if gate_ns <= 0 or counts < 0:
                raise ReplyError("detector", f"it reports {counts} counts in a gate of {gate_ns} ns")
            dwell.add(counts, gate_ns, gate.flags)
            if counts * self._grip.dead_time_ns > HIGHEST_DEAD_TIME_FRACTION * gate_ns:
                dwell.flags.add("dead-time")
            await self._guard_light(counts / (gate_ns * 1e-9))

    async def _guard_light(self, rate_per_s: float) -> None:
        if rate_per_s > self._grip.highest_rate_per_s:
            await self._set_shutter(False)
            raise OverLight(
                "detector",
                f"{rate_per_s:.3g} counts per second, the bench allows {self._grip.highest_rate_per_s:.3g}; "
                "narrow the slits or put in a filter",
            )

    async def _set_shutter(self, is_open: bool) -> None:
        if self._shutter_is_open is not is_open:
            self._shutter_is_open = None
            wait_s = self._grip.reply_timeout_s
            await self._ask("shutter", self._devices.shutter.set_open(is_open, deadline_s=wait_s), wait_s)
            self._shutter_is_open = is_open

    async def _identify(self, role: str, device: Device, wait_s: float) -> dict[str, str]:
        identity = asdict(await self._ask(role, device.identify(deadline_s=wait_s), wait_s))
        return {key: str(value) for key, value in identity.items()}

    async def _read_ambient(self) -> dict[str, float] | None:
        """The air, for the record. A sensor that fails costs its reading and a warning, never the run."""
        sensor, wait_s = self._devices.ambient, self._grip.reply_timeout_s
        if sensor is None:
            return None
        try:
            if self._air_sensor is None:
                self._air_sensor = await self._identify("ambient", sensor, wait_s)
            given = asdict(await self._ask("ambient", sensor.read(deadline_s=wait_s), wait_s))
            reading = {key: float(value) for key, value in given.items()}
            if not all(math.isfinite(value) for value in reading.values()):
                raise ReplyError("ambient", f"it reports {reading}")
        except Exception as error:
            log.warning("no reading of the air: %s", error)
            return None
        return reading
