"""The simulated bench as one whole: lamp, air, shutter, grating, drive and counter under one clock.

    [world]
    factory = "simulators.world:build"
    [world.options]      # what is true, whatever the rest of the bench file believes

The world never acts by itself: it answers what is true at a moment, and the in-memory drivers of
`simulators.memory` let the time of a move or a gate pass. It does not ask whether that time is real.
"""

from __future__ import annotations

import math
from typing import Any, NamedTuple, Protocol

import numpy as np
from pydantic import Field

from drivers.clock import Clock
from drivers.protocols import DriverContext
from drivers.settings import ListOf, StrictModel, parse_options
from simulators.air import Air, AirOptions, bench_wavelength_nm, standard_refractivity
from simulators.detector import Counter, DetectorOptions
from simulators.draw import Draws
from simulators.faults import Fault, FaultScript
from simulators.lamp import Lamp, LampOptions
from simulators.mechanics import DriveOptions, Stepper
from simulators.optics import LineProfile, OpticsOptions, Spectrometer
from simulators.shutter import ShutterBlade, ShutterOptions

_RINGING_SLICES = 40  # moments at which a gate that sees the grating move is sampled


class WorldOptions(StrictModel):
    """`[world.options]`"""

    optics: OpticsOptions
    lamp: LampOptions
    drive: DriveOptions = DriveOptions()
    detector: DetectorOptions = DetectorOptions()
    shutter: ShutterOptions = ShutterOptions()
    air: AirOptions = AirOptions()
    faults: ListOf[Fault] = Field(default=())


class SimulatedBench(Protocol):
    """What the in-memory drivers need of a world."""

    clock: Clock
    faults: FaultScript
    stepper: Stepper
    counter: Counter
    shutter: ShutterBlade
    air: Air
    seed: int
    brightest_rate_per_s: float  # no moment is brighter: spares the counter a look at every gate's start

    def mean_rate_per_s(self, start_ns: int, end_ns: int) -> float:
        """True mean rate at the detector between two monotonic moments, dark included."""
        ...


class Emission(NamedTuple):
    """One line of the lamp as it meets the spectrometer."""

    strength_per_s: float
    refractivity: float  # n - 1 of standard air at its wavelength
    profile: LineProfile


class World:
    """Everything that is true about the simulated bench. Moments are monotonic ns of its clock."""

    def __init__(self, options: WorldOptions, *, clock: Clock, seed: int) -> None:
        start_ns = clock.utc_ns()
        self.options = options
        self.clock = clock
        self.seed = seed
        self._utc_offset_ns = start_ns - clock.monotonic_ns()
        self.faults = FaultScript(list(options.faults))
        self.air = Air.build(options.air, seed)
        self.lamp = Lamp.build(options.lamp, seed, start_ns * 1e-9)
        self.stepper = Stepper(options.drive, Draws(seed, "drive", start_ns))
        self.counter = Counter(options.detector, Draws(seed, "detector", start_ns))
        self.shutter = ShutterBlade(options.shutter)
        self.spectrometer = Spectrometer(options.optics)
        half_mm = options.optics.exit_slit_um * 1e-3 / 2.0
        edges = [
            self.spectrometer.path_difference_nm(turn, 0.0, np.array([-half_mm, half_mm]))
            / options.optics.order
            for turn in (0.0, math.pi / 2.0)
        ]
        # a path difference is a cosine and a sine of the rotation, so the exit slit's width in nm is too
        self._exit_cosine_nm, self._exit_sine_nm = (float(high - low) for low, high in edges)
        widest_nm = abs(self._exit_cosine_nm) + abs(self._exit_sine_nm)
        lamp = options.lamp
        self.brightest_rate_per_s = 2.0 * (
            sum(line.strength_per_s for line in lamp.lines) + lamp.continuum_per_s_per_nm * widest_nm
        )
        self._mean_density = self.air.mean_density_ratio()
        self.lines = tuple(
            Emission(
                line.strength_per_s,
                standard_refractivity(line.wavelength_air_nm),
                LineProfile(
                    self.spectrometer,
                    wavelength_nm=bench_wavelength_nm(
                        wavelength_air_nm=line.wavelength_air_nm, density_ratio=self._mean_density
                    ),
                    fwhm_nm=line.fwhm_nm,
                ),
            )
            for line in options.lamp.lines
        )

    def light_rate_per_s(self, rotation_rad: float, *, utc_s: float) -> float:
        """Rate of the lamp's light at the detector, shutter open, at a rotation and a moment."""
        gain = self.lamp.gain(utc_s)
        if gain == 0.0:
            return 0.0
        # denser air shortens a wavelength by a tiny fraction; the sine of its rotation follows
        denser = self.air.density_ratio(utc_s) - self._mean_density
        rate = sum(
            strength
            * profile.share(rotation_rad - profile.rotation_rad + refractivity * denser * profile.tangent)
            for strength, refractivity, profile in self.lines
        )
        exit_nm = self._exit_cosine_nm * math.cos(rotation_rad) + self._exit_sine_nm * math.sin(rotation_rad)
        rate += self.options.lamp.continuum_per_s_per_nm * exit_nm
        return gain * rate

    def mean_rate_per_s(self, start_ns: int, end_ns: int) -> float:
        """True mean rate at the detector between two moments, dark included, dead time not."""
        middle_ns = (start_ns + end_ns) // 2
        utc_s = (middle_ns + self._utc_offset_ns) * 1e-9
        warmer_k = self.air.temperature_drift_k(utc_s)
        dark = self.counter.dark_rate_per_s(middle_ns, warmer_k)
        passed = self.shutter.passed_share(start_ns, end_ns)
        if passed == 0.0:
            return dark
        if self.stepper.is_still(start_ns):
            light = self.light_rate_per_s(self.stepper.rotation_rad(middle_ns, warmer_k), utc_s=utc_s)
        else:
            cell_ns = (end_ns - start_ns) / _RINGING_SLICES
            light = sum(
                self.light_rate_per_s(
                    self.stepper.rotation_rad(start_ns + round((k + 0.5) * cell_ns), warmer_k), utc_s=utc_s
                )
                for k in range(_RINGING_SLICES)
            )
            light /= _RINGING_SLICES
        return dark + passed * light

    def true_wavelength_nm(self, steps: float) -> float:
        """What passes from slit centre to slit centre with the drive at rest at `steps` after arriving from
        below; microstep error and true zero offset included. In air at the bench's mean conditions."""
        return float(self.spectrometer.wavelength_nm(self.stepper.rest_rotation_rad(steps)))

    def truth(self) -> dict[str, Any]:
        """What is true, for tests and for whoever wants to know after a night: lines (wavelengths in
        standard air and in the bench's air, nm; FWHM of the source and as recorded, pm), rates, bandpass."""
        lines = [
            {
                "wavelength_air_nm": line.wavelength_air_nm,
                "wavelength_bench_air_nm": float(self.spectrometer.wavelength_nm(profile.rotation_rad)),
                "strength_per_s": line.strength_per_s,
                "peak_rate_per_s": line.strength_per_s * profile.peak,
                "source_fwhm_pm": line.fwhm_nm * 1e3,
                "recorded_fwhm_pm": profile.fwhm_nm * 1e3,
                "bandpass_pm": [w * 1e3 for w in self.spectrometer.bandpass_nm(line.wavelength_air_nm)],
            }
            for line, (_, _, profile) in zip(self.options.lamp.lines, self.lines, strict=True)
        ]
        return {
            "lines": lines,
            "dark_rate_per_s": self.options.detector.dark_rate_per_s,
            "dead_time_ns": self.options.detector.dead_time_ns,
            "zero_order_steps": self.options.drive.zero_order_steps,
        }


def build(options: dict[str, Any], context: DriverContext) -> World:
    """Factory of the world, named in the bench file's `[world]` table."""
    return World(
        parse_options(WorldOptions, options, "world.options"), clock=context.clock, seed=context.seed
    )
