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
from collections.abc import Awaitable, Callable, Mapping
from dataclasses import asdict, dataclass, field, fields
from typing import Any, TypeVar

from analysis.allocate import SHORTEST_DWELL_NS, Visit
from analysis.counting import LOAD_LIMIT
from analysis.readings import check_reading, recorded_counts
from daq.records import Kind
from drivers.clock import Clock
from drivers.errors import DeviceError, Halted, HardwareFault, LinkError, OverLight, ReplyError
from drivers.protocols import (
    Ambient,
    AnalogueDetector,
    Detector,
    Device,
    Gate,
    GratingDrive,
    Selector,
    Shutter,
    Slits,
)

log = logging.getLogger(__name__)

ABANDON_AFTER_S = 1.0
"""A driver that overstays its own deadline by this much is no longer waited for."""

LAMP_SIGMAS = 5.0
"""A reference that is not this much above its dark sees no lamp."""

SET_UP_WITHIN_S = 30.0
"""A lamp mirror, a filter wheel or a pair of slits that is not in its place by then has a fault."""

Answer = TypeVar("Answer")
Ending = tuple[str, dict[str, Any]]


@dataclass(frozen=True, slots=True)
class Devices:
    """What a bench file names, opened."""

    drive: GratingDrive
    detector: Detector | AnalogueDetector
    shutter: Shutter
    ambient: Ambient | None = None
    reference: Detector | None = None
    slits: Slits | None = None
    filter: Selector | None = None
    lamp: Selector | None = None

    def by_role(self) -> dict[str, Device]:
        every = {field.name: getattr(self, field.name) for field in fields(self)}
        return {role: device for role, device in every.items() if device is not None}

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
    """How this bench is to be handled. Times in ns and s, positions in steps.

    highest_rate_per_s : in recorded counts. charge_unit_c, highest_current_a : of an analogue detector, else
    None. filter, lamp, entrance_slit_um, exit_slit_um : what its devices are to set, None without one.
    """

    settle_ns: int
    backlash_steps: int
    lowest_steps: int
    longest_gate_ns: int
    highest_rate_per_s: float
    dead_time_ns: float
    move_timeout_s: float
    reply_timeout_s: float = 5.0
    charge_unit_c: float | None = None
    highest_current_a: float | None = None
    filter: str | None = None
    lamp: str | None = None
    entrance_slit_um: float | None = None
    exit_slit_um: float | None = None
    reference_dark_per_s: float = 0.0


@dataclass(slots=True)
class _Dwell:
    """The gates of one visit so far."""

    counts: int = 0
    gate_ns: int = 0
    gates: int = 0
    reference_counts: int = 0
    flags: set[str] = field(default_factory=set)

    def add(self, gate: Gate, reference: Gate | None) -> None:
        self.counts += gate.counts
        self.gate_ns += gate.gate_ns
        self.gates += 1
        self.flags.update(str(flag) for flag in gate.flags)
        if reference is not None:
            self.reference_counts += reference.counts
            self.flags.update(f"reference-{flag}" for flag in reference.flags)


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
        """Shutter closed first, then who is there, then what is to be set (lamp, filter, slits), then the
        drive's reference mark, then the air."""
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
            was_set = await self._set_up(SET_UP_WITHIN_S)
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
            **({"set": was_set} if was_set else {}),
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
                self._guard_lamp(visit, dwell)
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
        if self._devices.reference is not None:
            body["reference_counts"] = dwell.reference_counts
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

    async def _set_up(self, wait_s: float) -> dict[str, Any]:
        """Lamp, filter and slits as this run wants them, where devices set them; what was set."""
        devices, grip = self._devices, self._grip
        was_set: dict[str, Any] = {}
        for role, selector, position in (
            ("lamp", devices.lamp, grip.lamp),
            ("filter", devices.filter, grip.filter),
        ):
            if selector is not None and position is not None:
                await self._ask(role, selector.select(position, deadline_s=wait_s), wait_s)
                was_set[role] = position
        slits = devices.slits
        if slits is not None and grip.entrance_slit_um is not None and grip.exit_slit_um is not None:
            entrance_um, exit_um = grip.entrance_slit_um, grip.exit_slit_um
            call = slits.set_widths(entrance_um=entrance_um, exit_um=exit_um, deadline_s=wait_s)
            await self._ask("slits", call, wait_s)
            was_set |= {"entrance_slit_um": entrance_um, "exit_slit_um": exit_um}
        return was_set

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
            gate, reference = await self._gates(asked_ns, wait_s)
            dwell.add(gate, reference)
            if gate.counts * self._grip.dead_time_ns > LOAD_LIMIT * gate.gate_ns:
                dwell.flags.add("dead-time")
            await self._guard_light(gate.counts / (gate.gate_ns * 1e-9))

    async def _gates(self, asked_ns: int, wait_s: float) -> tuple[Gate, Gate | None]:
        """One gate of the detector, and of the reference at the same time where there is one."""
        reference = self._devices.reference
        if reference is None:
            return await self._gate(asked_ns, wait_s), None
        seen = asyncio.ensure_future(self._gate(asked_ns, wait_s))
        sent = asyncio.ensure_future(self._count("reference", reference, asked_ns, wait_s))
        try:
            return await asyncio.gather(seen, sent)
        finally:  # what one of them raised is what is told; nobody waits for the other
            seen.cancel()
            sent.cancel()

    async def _gate(self, asked_ns: int, wait_s: float) -> Gate:
        detector, unit_c = self._devices.detector, self._grip.charge_unit_c
        if unit_c is None:
            return await self._count("detector", detector, asked_ns, wait_s)  # type: ignore[arg-type]
        call = detector.measure(asked_ns, deadline_s=wait_s)  # type: ignore[union-attr]
        current = await self._ask("detector", call, wait_s)
        gate_ns = whole("detector", current.gate_ns)
        if gate_ns <= 0:
            raise ReplyError("detector", f"it reports a reading over {gate_ns} ns")
        highest_a = self._grip.highest_current_a or math.inf
        flags = check_reading(current.mean_a, highest_current_a=highest_a, flags=current.flags)
        return Gate(recorded_counts(current.mean_a, gate_ns * 1e-9, charge_unit_c=unit_c), gate_ns, flags)

    async def _count(self, role: str, counter: Detector, asked_ns: int, wait_s: float) -> Gate:
        gate = await self._ask(role, counter.gate(asked_ns, deadline_s=wait_s), wait_s)
        counts, gate_ns = whole(role, gate.counts), whole(role, gate.gate_ns)
        if gate_ns <= 0 or counts < 0:
            raise ReplyError(role, f"it reports {counts} counts in a gate of {gate_ns} ns")
        return Gate(counts, gate_ns, gate.flags)

    async def _guard_light(self, rate_per_s: float) -> None:
        if rate_per_s > self._grip.highest_rate_per_s:
            await self._set_shutter(False)
            raise OverLight(
                "detector",
                f"{rate_per_s:.3g} counts per second, the bench allows {self._grip.highest_rate_per_s:.3g}; "
                "narrow the slits or put in a filter",
            )

    def _guard_lamp(self, visit: Visit, dwell: _Dwell) -> None:
        """A lamp that has gone out makes no spectrum; only the reference tells before 08:00."""
        if self._devices.reference is None or not visit.light or dwell.gates == 0:
            return
        dark = self._grip.reference_dark_per_s * dwell.gate_ns * 1e-9
        if dwell.reference_counts <= dark + LAMP_SIGMAS * math.sqrt(dark + LAMP_SIGMAS**2):
            counts, gate_s = dwell.reference_counts, dwell.gate_ns * 1e-9
            dwell.gates = 0  # what was counted without a lamp is no point
            raise HardwareFault(
                "reference",
                f"it sees no lamp: {counts} counts in {gate_s:.3g} s; is the lamp lit, the way to it open?",
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
