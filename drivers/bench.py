"""The bench: one instrument as it is set up, read from a TOML file.

What its devices set, the devices answer for. What a person has set, a person confirms: `[by_hand]`.
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

from drivers.bench_devices import (
    Ambient,
    Detector,
    Drive,
    FilterWheel,
    LampTurret,
    MotorisedSlits,
    Reference,
    Shutter,
)
from drivers.bench_optics import (
    NO_FILTER,
    ConcaveOptics,
    FilterBand,
    GratingOptics,
    LittrowOptics,
    Optics,
    PlaneOptics,
    TableOptics,
)
from drivers.errors import SettingsError
from drivers.settings import Factory, ListOf, Name, StrictModel, load_toml, parse, toml_table
from drivers.slug import slug_of

__all__ = [
    "NO_FILTER",
    "Bench",
    "ByHand",
    "ConcaveOptics",
    "GratingOptics",
    "LittrowOptics",
    "LoadedBench",
    "PlaneOptics",
    "TableOptics",
    "load_bench",
    "read_bench",
]


class Time(StrictModel):
    """`[time]`: the computer's clock, or virtual time that starts at `start_utc`."""

    kind: Literal["real", "virtual"] = "real"
    start_utc: datetime.datetime | None = None
    """When virtual time begins."""

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
    """What is true in it, for the factory's own model."""


class Scale(StrictModel):
    """`[scale]`: how well the dispersion is known, as a fraction of a separation."""

    relative_uncertainty: Annotated[float, Field(ge=0.0, le=0.1)] = 1e-4
    """Standard uncertainty of the dispersion, as a fraction: of a separation, that fraction."""


class Shape(StrictModel):
    """`[shape]`: what is left of the line-shape error, as a fraction of the peak."""

    allowance: Annotated[float, Field(ge=0.0, le=0.2)] = 0.01
    """Largest misfit of the line shape, as a fraction of the peak; it floors what is claimed."""


class ByHand(StrictModel):
    """`[by_hand]`: what a person has set; confirmed when a night begins, and recorded."""

    filter: Name | None = None
    """A name of [[filters]], or none."""
    lamp: Name | None = None
    """Which lamp is lit."""
    lamp_current_a: Annotated[float, Field(gt=0.0, le=1000.0)] | None = None
    high_voltage_v: Annotated[float, Field(gt=0.0, le=100_000.0)] | None = None
    """Of the detector."""
    gain: Annotated[float, Field(gt=0.0, le=1e12)] | None = None
    """Of the detector's amplifier."""
    attenuator: Name | None = None
    lamp_serial: Name | None = None
    grating_serial: Name | None = None
    detector_serial: Name | None = None


class Paths(StrictModel):
    """`[paths]`: folders, relative to the bench file, that hold a lab's own drivers."""

    drivers: ListOf[Annotated[str, Field(min_length=1, max_length=1000)]] = ()
    """Folders, relative to this file."""


class Bench(StrictModel):
    """A whole bench file."""

    format: Literal[1]
    name: Name
    time: Time = Time()
    world: World | None = None
    optics: Optics
    filters: ListOf[FilterBand] = ()
    scale: Scale = Scale()
    shape: Shape = Shape()
    drive: Drive
    detector: Detector
    reference: Reference | None = None
    shutter: Shutter
    filter: FilterWheel | None = None
    lamp: LampTurret | None = None
    slits: MotorisedSlits | None = None
    ambient: Ambient | None = None
    by_hand: ByHand = ByHand()
    paths: Paths = Paths()

    def cross_checks(self) -> Iterator[tuple[str, str]]:
        if not slug_of(self.name):
            yield "name", "must hold a letter or a digit: files are named after it"
        yield from self._filter_checks()
        if self.lamp is not None and self.by_hand.lamp is not None:
            yield "by_hand.lamp", "the table [lamp] sets it; leave it out here"
        if isinstance(self.optics, GratingOptics):
            yield from self._slit_checks(self.optics)
            yield from self._travel_checks()
            return
        drive = self.drive
        for key in ("steps_per_radian", "steps_per_unit_sine", "zero_order_steps"):
            if getattr(drive, key) is not None:
                yield f"drive.{key}", "only for a grating; in a recorded spectrum step k is row k"
        for key in ("filters", "filter", "slits"):
            if getattr(self, key):
                yield key, "only for a grating; a recorded spectrum has neither slits nor filters"
        if drive.lowest_steps < 0:
            yield "drive.lowest_steps", "must not be below 0 with mount = 'table': rows count from 0"

    def _filter_checks(self) -> Iterator[tuple[str, str]]:
        names = [band.name for band in self.filters]
        twice = sorted({name for name in names if names.count(name) > 1})
        if twice:
            yield "filters", f"names {twice[0]!r} twice; each filter once"
        if self.filter is not None:
            if not names:
                yield "filters", "missing; the wheel of [filter] needs its filters as [[filters]]"
            if self.by_hand.filter is not None:
                yield "by_hand.filter", "the wheel of [filter] sets it; leave it out here"
        elif self.by_hand.filter not in (None, NO_FILTER, *names):
            known = ", ".join(repr(name) for name in (NO_FILTER, *names))
            yield "by_hand.filter", f"is none of [[filters]]; allowed: {known}"

    def _slit_checks(self, optics: GratingOptics) -> Iterator[tuple[str, str]]:
        if self.slits is None:
            return
        for key in ("entrance_slit_um", "exit_slit_um"):
            if not self.slits.narrowest_um <= getattr(optics, key) <= self.slits.widest_um:
                between = (
                    f"narrowest_um = {self.slits.narrowest_um:g} and widest_um = {self.slits.widest_um:g}"
                )
                yield f"optics.{key}", f"must lie between slits.{between}"

    def _travel_checks(self) -> Iterator[tuple[str, str]]:
        drive, zero = self.drive, self.zero_order_steps
        key = "steps_per_radian" if drive.kind == "rotary" else "steps_per_unit_sine"
        if drive.steps_per_unit is None:
            yield f"drive.{key}", f"missing; a {drive.kind} drive of a grating needs its {key}"
            return
        if not drive.lowest_steps <= zero <= drive.highest_steps:
            between = f"lowest_steps = {drive.lowest_steps} and highest_steps = {drive.highest_steps}"
            yield "drive.zero_order_steps", f"must lie between {between}"
            return
        for end in ("lowest_steps", "highest_steps"):
            turned = (getattr(drive, end) - zero) / drive.steps_per_unit
            furthest = math.pi / 2 if drive.kind == "rotary" else 1.0
            if abs(turned) >= furthest:
                told = (
                    f"{math.degrees(turned):.4g} degrees"
                    if drive.kind == "rotary"
                    else f"a sine of {turned:.4g}"
                )
                yield (
                    f"drive.{end}",
                    f"would turn the grating by {told} from zero order; must stay within"
                    f" 90 degrees ({key} = {drive.steps_per_unit:g}{self._per_degree(turned)})",
                )

    def _per_degree(self, turned: float) -> str:
        """What was probably meant where so many degrees would be within reach and radians are not."""
        given = self.drive.steps_per_radian
        if given is None or abs(math.radians(turned)) >= math.pi / 2:
            return ""
        return f"; if that is per degree, per radian it is {math.degrees(given):.8g}"

    @property
    def zero_order_steps(self) -> int:
        """Where zero order stands, in steps; 0 unless the file says otherwise."""
        return self.drive.zero_steps

    def band(self, name: str) -> FilterBand | None:
        """The filter of that name; None for no filter in the beam."""
        return next((band for band in self.filters if band.name == name), None)


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
