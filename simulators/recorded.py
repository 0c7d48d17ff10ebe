"""The recorded-spectrum bench: a measured spectrum stands in for lamp and optics.

    [world]
    factory = "simulators.recorded:build"
    [world.options]
    spectrum = "../spectra/hg-577-579.csv"   # relative to the bench file
    rate_scale_per_s = 0.05                  # recorded counts to true rate, 1/s

Step k stands at row k of the file. The rate there is what was recorded, times the scale; what was recorded
below zero counts as no light. The recording's own noise is therefore a fixed pattern, the same in every
sweep, and no amount of light averages it out. What the counter adds, shot noise, dark counts and dead time,
is drawn anew at every gate.
"""

from __future__ import annotations

import csv
import math
from pathlib import Path
from typing import Any

from pydantic import Field

from drivers.clock import Clock
from drivers.errors import SettingsError
from drivers.protocols import DriverContext
from drivers.settings import ListOf, StrictModel, parse_options
from simulators.air import Air, AirOptions
from simulators.detector import Counter, DetectorOptions
from simulators.draw import Draws
from simulators.faults import Fault, FaultScript
from simulators.mechanics import DriveOptions, Stepper
from simulators.shutter import ShutterBlade, ShutterOptions

_WAVELENGTH_COLUMNS = ("wavelength_air_nm", "wavelength_vacuum_nm")


class RecordedOptions(StrictModel):
    """`[world.options]` of the recorded-spectrum bench."""

    spectrum: str = Field(min_length=1)
    rate_scale_per_s: float = Field(default=1.0, gt=0.0)
    detector: DetectorOptions = DetectorOptions(dark_rate_per_s=5.0, trip_rate_per_s=1e7)
    shutter: ShutterOptions = ShutterOptions()
    air: AirOptions = AirOptions()
    row_s: float = Field(default=0.02, ge=0.0, le=10.0)  # time to go from one row to the next
    home_s: float = Field(default=2.0, ge=0.0)
    faults: ListOf[Fault] = Field(default=())


class RecordedWorld:
    """A `SimulatedBench` whose light comes from a table. Moments are monotonic ns of its clock."""

    def __init__(
        self,
        options: RecordedOptions,
        *,
        wavelength_nm: tuple[float, ...],
        recorded_counts: tuple[float, ...],
        clock: Clock,
        seed: int,
    ) -> None:
        start_ns = clock.utc_ns()
        self.options = options
        self.clock = clock
        self.seed = seed
        self.wavelength_nm = wavelength_nm
        self.rate_per_s = tuple(max(c, 0.0) * options.rate_scale_per_s for c in recorded_counts)
        self.brightest_rate_per_s = max(self.rate_per_s) + options.detector.dark_rate_per_s
        self.faults = FaultScript(list(options.faults))
        self.air = Air.build(options.air, seed)
        self.stepper = Stepper(_table_drive(options, len(wavelength_nm)), Draws(seed, "drive", start_ns))
        self.counter = Counter(options.detector, Draws(seed, "detector", start_ns))
        self.shutter = ShutterBlade(options.shutter)

    def mean_rate_per_s(self, start_ns: int, end_ns: int) -> float:
        """True mean rate at the detector between two moments, dark included; the row is the nearest one."""
        middle_ns = (start_ns + end_ns) // 2
        row = min(max(round(self.stepper.commanded_steps(middle_ns)), 0), len(self.rate_per_s) - 1)
        dark = self.counter.dark_rate_per_s(middle_ns, 0.0)
        return dark + self.shutter.passed_share(start_ns, end_ns) * self.rate_per_s[row]

    def true_wavelength_nm(self, steps: float) -> float:
        """The wavelength the recording gives for a row, in its own medium; between rows, linear."""
        row = min(max(math.floor(steps), 0), len(self.wavelength_nm) - 2)
        low, high = self.wavelength_nm[row : row + 2]
        return low + (steps - row) * (high - low)

    def truth(self) -> dict[str, Any]:
        """What is known: rates per row and the counter's own. What the lamp was, only the recording's makers
        could tell."""
        return {
            "rate_per_s": list(self.rate_per_s),
            "dark_rate_per_s": self.options.detector.dark_rate_per_s,
            "dead_time_ns": self.options.detector.dead_time_ns,
        }


def _table_drive(options: RecordedOptions, rows: int) -> DriveOptions:
    """A drive without mechanics: no play, no ringing, no microstep error, limits at the table's ends."""
    quick = 1.0 / max(options.row_s, 1e-6)
    return DriveOptions(
        lowest_steps=0,
        highest_steps=rows - 1,
        microstep_error_full_steps=0.0,
        ring_steps=0.0,
        speed_steps_per_s=10.0 * quick,
        acceleration_steps_per_s2=4.0 * quick * quick,  # one row: 2 sqrt(1/a) = row_s
        home_s=options.home_s,
    )


def read_table(path: Path, key: str) -> tuple[tuple[float, ...], tuple[float, ...]]:
    """Wavelengths (nm) and counts of a recorded spectrum.

    SettingsError names the file, the line and what is allowed.
    """

    def wrong(text: str) -> SettingsError:
        return SettingsError(str(path), [f"{key}: {text}"])

    try:
        with path.open(encoding="utf-8", newline="") as stream:
            rows = list(csv.DictReader(stream))
    except (OSError, UnicodeDecodeError, csv.Error) as error:
        raise wrong(f"cannot be read as a CSV spectrum: {error}") from error
    columns = [name for name in _WAVELENGTH_COLUMNS if rows and name in rows[0]]
    if len(columns) != 1 or "counts" not in rows[0]:
        raise wrong(f"needs a header line with counts and one of {', '.join(_WAVELENGTH_COLUMNS)}")
    wavelengths: list[float] = []
    counts: list[float] = []
    for line, row in enumerate(rows, start=2):
        try:
            pair = float(row[columns[0]]), float(row["counts"])
        except (TypeError, ValueError):
            raise wrong(f"line {line}: not a number: {row}") from None
        if not all(map(math.isfinite, pair)):
            raise wrong(f"line {line}: wavelength and counts must be finite")
        if wavelengths and pair[0] <= wavelengths[-1]:
            raise wrong(f"line {line}: wavelengths must rise from row to row")
        wavelengths.append(pair[0])
        counts.append(pair[1])
    if len(wavelengths) < 2:
        raise wrong("needs at least two rows")
    return tuple(wavelengths), tuple(counts)


def build(options: dict[str, Any], context: DriverContext) -> RecordedWorld:
    """Factory of the recorded world, named in the bench file's `[world]` table."""
    checked = parse_options(RecordedOptions, options, "world.options")
    wavelengths, counts = read_table(Path(context.folder) / checked.spectrum, "world.options.spectrum")
    return RecordedWorld(
        checked, wavelength_nm=wavelengths, recorded_counts=counts, clock=context.clock, seed=context.seed
    )
