"""What the daemon asks of an instrument: small async protocols, no base classes.

Units stand in the names; times are integer nanoseconds, drive positions whole steps, counts integers.
Every call takes a total deadline in seconds where it can take long. Cancelling a call means only "abandon".
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from typing import Any, Protocol

from drivers.clock import Clock


@dataclass(frozen=True, slots=True)
class Identity:
    """Who answers: as the device says it, never as the settings hope it."""

    maker: str
    model: str
    serial: str
    firmware: str = ""


@dataclass(frozen=True, slots=True)
class Moved:
    """The end of one move: where the drive says it stands, in steps, and how long it took."""

    steps: int
    duration_ns: int


@dataclass(frozen=True, slots=True)
class Gate:
    """One hardware gate of a counting detector.

    `counts` are the registered pulses, `gate_ns` the time the gate was open (dead time not removed).
    `flags` is empty for a good gate; otherwise any of "overload", "saturated", "late".
    """

    counts: int
    gate_ns: int
    flags: tuple[str, ...] = ()


@dataclass(frozen=True, slots=True)
class Current:
    """One reading of an analogue detector: the mean current over `gate_ns`, A; `flags` as a `Gate` has."""

    mean_a: float
    gate_ns: int
    flags: tuple[str, ...] = ()


@dataclass(frozen=True, slots=True)
class AmbientReading:
    """Air at the bench."""

    temperature_c: float
    pressure_pa: float
    humidity_percent: float


class Device(Protocol):
    """What every device can do."""

    async def identify(self, *, deadline_s: float) -> Identity: ...

    async def close(self) -> None:
        """Release the link. Legal at any time, any number of times."""
        ...


class GratingDrive(Device, Protocol):
    """A stepper-driven grating. Positions are absolute, in whole steps."""

    async def home(self, *, deadline_s: float) -> Moved:
        """Find the reference mark. Until then `move_to` raises LimitError."""
        ...

    async def move_to(self, steps: int, *, deadline_s: float) -> Moved:
        """Go there and stop. Raises LimitError outside the limits, Halted after `halt`, LinkError,
        ReplyError, HardwareFault (stall, limit switch)."""
        ...

    async def halt(self) -> None:
        """Stop any motion now. Legal at any time from any task, idempotent; the move then raises Halted."""
        ...


class Detector(Device, Protocol):
    """A photon counter."""

    async def gate(self, gate_ns: int, *, deadline_s: float) -> Gate:
        """Count for `gate_ns` (at most 1 s). Raises OverLight, LinkError, ReplyError."""
        ...


class AnalogueDetector(Device, Protocol):
    """A photocurrent and whatever reads it."""

    async def measure(self, gate_ns: int, *, deadline_s: float) -> Current:
        """Mean current over `gate_ns` (at most 1 s). Raises OverLight, LinkError, ReplyError."""
        ...


class Selector(Device, Protocol):
    """A wheel, turret or mirror with named positions: order-sorting filters, lamps."""

    async def select(self, position: str, *, deadline_s: float) -> None:
        """Returns when it stands there. Raises LimitError for a position it has not."""
        ...


class Slits(Device, Protocol):
    """Motorised entrance and exit slit."""

    async def set_widths(self, *, entrance_um: float, exit_um: float, deadline_s: float) -> None:
        """Returns when both stand there. Raises LimitError outside what they can do."""
        ...


class Shutter(Device, Protocol):
    """Between lamp and entrance slit, or before the detector."""

    async def set_open(self, is_open: bool, *, deadline_s: float) -> None: ...


class Ambient(Device, Protocol):
    """A sensor of the air at the bench."""

    async def read(self, *, deadline_s: float) -> AmbientReading: ...


@dataclass(frozen=True, slots=True)
class DriverContext:
    """What a driver's factory gets beside its own options.

    `world` is whatever the bench's `[world]` factory returned (None without one), `seed` the run's seed
    (simulated devices draw from it; real ones ignore it), `role` the device's place in the bench file,
    `folder` the folder that relative paths in the options start from.
    """

    clock: Clock
    role: str
    seed: int
    folder: str
    world: Any = None


DriverFactory = Callable[[dict[str, Any], DriverContext], Any]
"""`factory(options, context)`: options as they stand in the bench file, to be checked by the driver's own
strict model (drivers.settings.StrictModel)."""
