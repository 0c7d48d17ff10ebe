"""The bench: one instrument as it is set up, read from a TOML file.

Angles are in degrees here because a person types them; everything else works in radians.
"""

from __future__ import annotations

import datetime
import hashlib
import math
from collections.abc import Iterator
from dataclasses import dataclass
from pathlib import Path
from typing import Annotated, Any, Literal

from pydantic import Field

from drivers.errors import SettingsError
from drivers.settings import (
    Factory,
    ListOf,
    Name,
    Steps,
    StrictModel,
    load_toml,
    parse,
    toml_table,
)
from drivers.slug import slug_of

LARGEST_DEAD_FRACTION = 0.3
"""Registered rate times dead time beyond which the dead-time correction is not to be trusted."""


class Time(StrictModel):
    """`[time]`: the computer's clock, or virtual time that starts at `start_utc`."""

    kind: Literal["real", "virtual"] = "real"
    start_utc: datetime.datetime | None = None

    def cross_checks(self) -> Iterator[tuple[str, str]]:
        if self.kind == "virtual" and self.start_utc is None:
            yield "start_utc", "missing; virtual time needs its start, such as 2031-02-11T18:00:00Z"
        if self.kind == "real" and self.start_utc is not None:
            yield "start_utc", "only for kind = 'virtual'; real time starts when you start"
        if self.start_utc is None:
            return
        if self.start_utc.utcoffset() != datetime.timedelta(0):
            yield "start_utc", "must be in UTC, with a Z at its end, such as 2031-02-11T18:00:00Z"
        elif not 1970 <= self.start_utc.year <= 2200:
            yield "start_utc", "must lie in the years 1970 to 2200"

    @property
    def start_utc_ns(self) -> int | None:
        """Nanoseconds since 1970-01-01T00:00:00Z, exact; None under real time."""
        if self.start_utc is None:
            return None
        since = self.start_utc - datetime.datetime(1970, 1, 1, tzinfo=datetime.UTC)
        return (since // datetime.timedelta(microseconds=1)) * 1000


class World(StrictModel):
    """`[world]`: what simulated devices share; the factory's own model checks the options."""

    factory: Factory
    options: dict[str, Any] = Field(default_factory=dict)


class PlaneOptics(StrictModel):
    """`[optics]` with a plane grating turned under a constant included angle."""

    mount: Literal["plane"]
    groove_density_per_mm: Annotated[float, Field(gt=0.0, le=20_000.0)]
    ruled_width_mm: Annotated[float, Field(gt=0.0, le=1_000.0)]
    focal_length_mm: Annotated[float, Field(gt=0.0, le=100_000.0)]
    included_angle_deg: Annotated[float, Field(ge=0.0, lt=180.0)]
    order: Annotated[int, Field(ge=1, le=100)]
    entrance_slit_um: Annotated[float, Field(gt=0.0, le=20_000.0)]
    exit_slit_um: Annotated[float, Field(gt=0.0, le=20_000.0)]


class TableOptics(StrictModel):
    """`[optics]` of a recorded spectrum: step k of the drive stands at row k of the CSV file."""

    mount: Literal["table"]
    spectrum: Annotated[str, Field(min_length=1, max_length=1000)]


class Scale(StrictModel):
    """`[scale]`: how well the dispersion is known, as a fraction of a separation."""

    relative_uncertainty: Annotated[float, Field(ge=0.0, le=0.1)] = 1e-4


class Shape(StrictModel):
    """`[shape]`: what is left of the line-shape error, as a fraction of the peak."""

    allowance: Annotated[float, Field(ge=0.0, le=0.2)] = 0.01


class Drive(StrictModel):
    """`[drive]`: the grating drive; positions are whole steps."""

    factory: Factory
    steps_per_radian: Annotated[float, Field(gt=0.0, le=1e12)] | None = None
    zero_order_steps: Steps | None = None
    lowest_steps: Steps
    highest_steps: Steps
    backlash_steps: Annotated[int, Field(ge=0, le=10_000_000)] = 0
    settle_s: Annotated[float, Field(ge=0.0, le=60.0)] = 0.05
    microstep_period_steps: Annotated[int, Field(ge=2, le=1_000_000)] | None = None
    move_timeout_s: Annotated[float, Field(gt=0.0, le=3600.0)] = 60.0
    options: dict[str, Any] = Field(default_factory=dict)

    def cross_checks(self) -> Iterator[tuple[str, str]]:
        if self.lowest_steps >= self.highest_steps:
            yield "lowest_steps", f"must be below highest_steps = {self.highest_steps}"
        elif self.backlash_steps >= self.highest_steps - self.lowest_steps:
            room = self.highest_steps - self.lowest_steps
            yield "backlash_steps", f"must be below the drive's whole travel of {room} steps"


class Detector(StrictModel):
    """`[detector]`: a photon counter."""

    factory: Factory
    dead_time_ns: Annotated[float, Field(ge=0.0, le=1e6)]
    dead_time_uncertainty_ns: Annotated[float, Field(ge=0.0, le=1e6)] = 0.0
    highest_rate_per_s: Annotated[float, Field(gt=0.0, le=1e12)]
    longest_gate_s: Annotated[float, Field(gt=0.0, le=1.0)] = 1.0
    options: dict[str, Any] = Field(default_factory=dict)

    def cross_checks(self) -> Iterator[tuple[str, str]]:
        if self.dead_time_uncertainty_ns > self.dead_time_ns:
            yield "dead_time_uncertainty_ns", f"must be at most dead_time_ns = {self.dead_time_ns:g}"
        dead = self.highest_rate_per_s * self.dead_time_ns / 1e9
        if dead > LARGEST_DEAD_FRACTION:
            most = LARGEST_DEAD_FRACTION * 1e9 / self.dead_time_ns
            yield (
                "highest_rate_per_s",
                f"with dead_time_ns = {self.dead_time_ns:g} the counter would be dead {dead:.0%} of the time;"
                f" must be at most {most:.3g}, in 1/s",
            )


class Shutter(StrictModel):
    """`[shutter]`: between the lamp and the entrance slit, or before the detector."""

    factory: Factory
    options: dict[str, Any] = Field(default_factory=dict)


class Ambient(StrictModel):
    """`[ambient]`: a sensor of the air; without it the bench assumes 20 C, 101 325 Pa, 50 %."""

    factory: Factory
    options: dict[str, Any] = Field(default_factory=dict)


class Paths(StrictModel):
    """`[paths]`: folders, relative to the bench file, that hold a lab's own drivers."""

    drivers: ListOf[Annotated[str, Field(min_length=1, max_length=1000)]] = ()


class Bench(StrictModel):
    """A whole bench file."""

    format: Literal[1]
    name: Name
    time: Time = Time()
    world: World | None = None
    optics: Annotated[PlaneOptics | TableOptics, Field(discriminator="mount")]
    scale: Scale = Scale()
    shape: Shape = Shape()
    drive: Drive
    detector: Detector
    shutter: Shutter
    ambient: Ambient | None = None
    paths: Paths = Paths()

    def cross_checks(self) -> Iterator[tuple[str, str]]:
        if not slug_of(self.name):
            yield "name", "must hold a letter or a digit: files are named after it"
        drive = self.drive
        if isinstance(self.optics, PlaneOptics):
            yield from self._plane_checks()
        else:
            for key in ("steps_per_radian", "zero_order_steps"):
                if getattr(drive, key) is not None:
                    yield f"drive.{key}", "only for mount = 'plane'; in a recorded spectrum step k is row k"
            if drive.lowest_steps < 0:
                yield "drive.lowest_steps", "must not be below 0 with mount = 'table': rows count from 0"

    def _plane_checks(self) -> Iterator[tuple[str, str]]:
        drive = self.drive
        if drive.steps_per_radian is None:
            yield "drive.steps_per_radian", "missing; mount = 'plane' needs the drive's steps per radian"
            return
        zero = self.zero_order_steps
        if not drive.lowest_steps <= zero <= drive.highest_steps:
            between = f"lowest_steps = {drive.lowest_steps} and highest_steps = {drive.highest_steps}"
            yield "drive.zero_order_steps", f"must lie between {between}"
            return
        for key in ("lowest_steps", "highest_steps"):
            rotation_rad = (getattr(drive, key) - zero) / drive.steps_per_radian
            if abs(rotation_rad) >= math.pi / 2:
                turned = math.degrees(rotation_rad)
                yield (
                    f"drive.{key}",
                    f"would turn the grating by {turned:.4g} degrees from zero order; must stay within"
                    f" 90 degrees (steps_per_radian = {drive.steps_per_radian:g})",
                )

    @property
    def zero_order_steps(self) -> int:
        """Where zero order stands, in steps; 0 unless the file says otherwise."""
        return self.drive.zero_order_steps or 0


@dataclass(frozen=True, slots=True)
class LoadedBench:
    """A bench with the file it came from; `sha256` is of the text in UTF-8."""

    bench: Bench
    path: Path
    text: str
    sha256: str
    folder: Path
    slug: str

    @property
    def spectrum_path(self) -> Path | None:
        """The recorded spectrum of a table mount; None for a real mount."""
        optics = self.bench.optics
        return self.folder / optics.spectrum if isinstance(optics, TableOptics) else None


def read_bench(text: str, file: str) -> Bench:
    """The bench in a TOML text, as a run's file carries it. Raises SettingsError naming `file`."""
    return parse(Bench, toml_table(text, file), file)


def load_bench(path: str | Path) -> LoadedBench:
    """Read and check a bench file, and that the files it names are there. Raises SettingsError."""
    data, text = load_toml(path)
    bench = parse(Bench, data, str(path))
    where = Path(path).absolute()
    loaded = LoadedBench(
        bench=bench,
        path=where,
        text=text,
        sha256=hashlib.sha256(text.encode()).hexdigest(),
        folder=where.parent,
        slug=slug_of(bench.name),
    )
    problems = []
    optics, spectrum = bench.optics, loaded.spectrum_path
    if isinstance(optics, TableOptics) and spectrum is not None and not spectrum.is_file():
        problems.append(f"optics.spectrum = {optics.spectrum!r}: no such file, looked for {spectrum}")
    for index, folder in enumerate(bench.paths.drivers):
        if not (loaded.folder / folder).is_dir():
            looked = loaded.folder / folder
            problems.append(f"paths.drivers[{index}] = {folder!r}: no such folder, looked for {looked}")
    if problems:
        raise SettingsError(str(path), problems)
    return loaded
