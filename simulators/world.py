"""The simulated bench as one whole: lamps, air, filters, grating, drive and detectors under one clock.

    [world]
    factory = "simulators.world:build"
    [world.options]      # what is true, whatever the rest of the bench file believes

The world never acts by itself: it answers what is true at a moment, and the in-memory drivers of
`simulators.memory` let the time of a move or a gate pass. It does not ask whether that time is real.
"""

from __future__ import annotations

from collections.abc import Iterator
from typing import Any, Protocol

from pydantic import Field

from drivers.clock import Clock
from drivers.errors import SettingsError
from drivers.protocols import DriverContext
from drivers.settings import ListOf, StrictModel, parse_options
from simulators.air import Air, AirOptions
from simulators.analogue import Ammeter, AnalogueOptions
from simulators.detector import Counter, DetectorOptions
from simulators.draw import Draws
from simulators.faults import Fault, FaultScript
from simulators.filters import NONE, AttenuatorOptions, FilterOptions
from simulators.lamp import Lamp, LampOptions, NamedLampOptions
from simulators.mechanics import DriveOptions, Stepper
from simulators.mounts import OpticsOptions
from simulators.optics import Spectrometer
from simulators.profile import LineProfile
from simulators.reference import ReferenceCounter, ReferenceOptions
from simulators.shutter import ShutterBlade, ShutterOptions
from simulators.spectrum import Emission, Spectrum

_RINGING_SLICES = 40  # moments at which a gate that sees the grating move is sampled
_ONLY_LAMP = "lamp"  # the name of the lamp of `[world.options.lamp]`
_BRIGHTER = 2.0  # no drift, warm-up or flicker takes a lamp above this


class SlitMotorOptions(StrictModel):
    """`[world.options.slits]`: the motors of both slits."""

    narrowest_um: float = Field(default=5.0, gt=0.0)
    widest_um: float = Field(default=500.0, gt=0.0, le=5000.0)
    travel_s: float = Field(default=0.5, ge=0.0, le=60.0)

    def cross_checks(self) -> Iterator[tuple[str, str]]:
        if self.narrowest_um >= self.widest_um:
            yield "narrowest_um", f"must be below widest_um = {self.widest_um:g}"


class WorldOptions(StrictModel):
    """`[world.options]`. One `lamp`, or several `lamps`; the first stands in the beam at the start."""

    optics: OpticsOptions
    lamp: LampOptions | None = None
    lamps: ListOf[NamedLampOptions] = ()
    filters: ListOf[FilterOptions] = ()
    filter_at_start: str = NONE
    attenuators: ListOf[AttenuatorOptions] = ()
    attenuator_at_start: str = NONE
    drive: DriveOptions = DriveOptions()
    detector: DetectorOptions = DetectorOptions()
    analogue: AnalogueOptions = AnalogueOptions()
    reference: ReferenceOptions = ReferenceOptions()
    shutter: ShutterOptions = ShutterOptions()
    slits: SlitMotorOptions = SlitMotorOptions()
    wheel_s: float = Field(default=0.3, ge=0.0, le=60.0)  # a wheel or mirror from one place to any other
    air: AirOptions = AirOptions()
    faults: ListOf[Fault] = Field(default=())

    def cross_checks(self) -> Iterator[tuple[str, str]]:
        if (self.lamp is None) == (not self.lamps):
            yield "lamp", "give either one [world.options.lamp] or several [[world.options.lamps]]"
        for key, items in (
            ("lamps", self.lamps),
            ("filters", self.filters),
            ("attenuators", self.attenuators),
        ):
            names = [item.name for item in items]
            if len(set(names)) < len(names) or NONE in names:
                yield key, f"every name must be given once, and {NONE!r} is the empty place"
        for key, items in (("filter", self.filters), ("attenuator", self.attenuators)):
            allowed = [NONE, *(item.name for item in items)]
            if getattr(self, f"{key}_at_start") not in allowed:
                yield f"{key}_at_start", f"must be one of {', '.join(map(repr, allowed))}"

    @property
    def named_lamps(self) -> dict[str, LampOptions]:
        if self.lamp is not None:
            return {_ONLY_LAMP: self.lamp}
        return {lamp.name: lamp for lamp in self.lamps}


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
        self.lamps = {
            name: Lamp.build(lamp, seed, start_ns * 1e-9, "lamp" if name == _ONLY_LAMP else f"lamp {name}")
            for name, lamp in options.named_lamps.items()
        }
        self.stepper = Stepper(
            options.drive, Draws(seed, "drive", start_ns), Draws(seed, "drive's periodic errors")
        )
        self.counter = Counter(options.detector, Draws(seed, "detector", start_ns))
        self.ammeter = Ammeter(options.analogue, Draws(seed, "ammeter", start_ns))
        self.reference = ReferenceCounter(options.reference, Draws(seed, "reference", start_ns))
        self.shutter = ShutterBlade(options.shutter)
        self._filters = {filter_.name: filter_ for filter_ in options.filters}
        self._attenuations = {NONE: 1.0} | {a.name: a.transmission for a in options.attenuators}
        self._mean_density = self.air.mean_density_ratio()
        self._spectrometers: dict[tuple[float, float], Spectrometer] = {}
        self._profiles: dict[tuple[str, float, float], dict[tuple[int, float], LineProfile]] = {}
        self._spectra: dict[tuple[str, str, float, float], Spectrum] = {}
        self.in_beam = {
            "lamp": next(iter(self.lamps)),
            "filter": options.filter_at_start,
            "attenuator": options.attenuator_at_start,
        }
        self.slits_um = (options.optics.entrance_slit_um, options.optics.exit_slit_um)
        self._settle()

    # ---- what can be set ---------------------------------------------------------------------------------

    def positions(self, kind: str) -> tuple[str, ...]:
        """The places of a wheel: "filter", "lamp" or "attenuator"."""
        if kind == "lamp":
            return tuple(self.lamps)
        return (NONE, *self._filters) if kind == "filter" else tuple(self._attenuations)

    def select(self, kind: str, position: str) -> None:
        """Bring one place of a wheel into the beam, at once. Raises KeyError for a place it has not."""
        if position not in self.positions(kind):
            raise KeyError(position)
        self.in_beam[kind] = position
        self._settle()

    def set_slits(self, *, entrance_um: float, exit_um: float) -> None:
        """Set both slits, at once. Raises ValueError beyond what their motors can do."""
        motors = self.options.slits
        for width_um in (entrance_um, exit_um):
            if not motors.narrowest_um <= width_um <= motors.widest_um:
                raise ValueError(f"a slit of {width_um:g} um")
        self.slits_um = (entrance_um, exit_um)
        self._settle()

    def _settle(self) -> None:
        """Everything that follows from what stands in the beam."""
        entrance_um, exit_um = self.slits_um
        self.lamp = self.lamps[self.in_beam["lamp"]]
        if self.slits_um not in self._spectrometers:
            slits = {"entrance_slit_um": entrance_um, "exit_slit_um": exit_um}
            self._spectrometers[self.slits_um] = Spectrometer(self.options.optics.model_copy(update=slits))
        self.spectrometer = self._spectrometers[self.slits_um]
        self.spectrum = self._spectrum_of(self.in_beam["lamp"], self.in_beam["filter"])
        self._attenuation = self._attenuations[self.in_beam["attenuator"]]
        self.brightest_rate_per_s = _BRIGHTER * self.spectrum.brightest_per_s

    def _spectrum_of(self, lamp: str, filter_: str) -> Spectrum:
        """With the slits as they stand."""
        key = (lamp, filter_, *self.slits_um)
        if key not in self._spectra:
            band = self._filters.get(filter_)
            self._spectra[key] = Spectrum(
                self.lamps[lamp].options,
                self.spectrometer,
                density_ratio=self._mean_density,
                widening=self.slits_um[0] / self.options.optics.entrance_slit_um,
                profiles=self._profiles.setdefault((lamp, *self.slits_um), {}),
                transmission=band.at if band else _clear,
            )
        return self._spectra[key]

    # ---- what is true at a moment ------------------------------------------------------------------------

    @property
    def lines(self) -> tuple[Emission, ...]:
        """The lines of the lamp in the beam, in the order of the settings."""
        return self.spectrum.lines

    def light_rate_per_s(self, rotation_rad: float, *, utc_s: float) -> float:
        """Rate of the lamp's light at the detector, shutter open, at a rotation and a moment."""
        gain = self.lamp.gain(utc_s)
        if gain == 0.0:
            return 0.0
        denser = self.air.density_ratio(utc_s) - self._mean_density
        return gain * self._attenuation * self.spectrum.rate_per_s(rotation_rad, denser)

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
        return dark + passed * self._flicker(start_ns, end_ns) * light

    def mean_lamp_gain(self, start_ns: int, end_ns: int) -> float:
        """The lamp's own mean intensity between two moments, 1 when warm: what a reference detector sees."""
        utc_s = ((start_ns + end_ns) // 2 + self._utc_offset_ns) * 1e-9
        return self.lamp.gain(utc_s) * self._flicker(start_ns, end_ns)

    def _flicker(self, start_ns: int, end_ns: int) -> float:
        if not self.lamp.options.flicker_fraction:
            return 1.0
        start_s, end_s = ((moment + self._utc_offset_ns) * 1e-9 for moment in (start_ns, end_ns))
        return self.lamp.flicker(start_s, end_s)

    def true_wavelength_nm(self, steps: float) -> float:
        """What passes from slit centre to slit centre, in the order of the settings, with the drive at rest
        at `steps` after arriving from below; periodic errors and true zero offset included. In air at the
        bench's mean conditions."""
        return float(self.spectrometer.wavelength_nm(self.stepper.rest_rotation_rad(steps)))

    # ---- for tests, and for whoever wants to know after a night ------------------------------------------

    def truth(self) -> dict[str, Any]:
        """What is true with slits and filter as they stand: `lines` of the lamp in the beam and `lamps` with
        those of every lamp (wavelengths in standard air and in the bench's air, nm; strengths behind filter
        and absorbers, per s; FWHM of one component of the source and of the whole line as recorded, pm),
        orders, ghosts, stray light, drive, detectors."""
        o = self.options
        lamps = {name: self._lines_of(name) for name in self.lamps}
        return {
            "lines": lamps[self.in_beam["lamp"]],
            "lamps": lamps,
            "in_beam": dict(self.in_beam),
            "slits_um": list(self.slits_um),
            "order": o.optics.order,
            "order_efficiency": {str(k): v for k, v in o.optics.efficiencies.items()},
            "ghosts": o.optics.ghosts.model_dump() if o.optics.ghosts else None,
            "stray_per_s": self.spectrum.stray_per_s,
            "attenuation": self._attenuation,
            "dark_rate_per_s": o.detector.dark_rate_per_s,
            "dead_time_ns": o.detector.dead_time_ns,
            "zero_order_steps": o.drive.zero_order_steps,
            "periodic_errors": [
                {"name": error.name, "period_steps": error.period_steps, "amplitude_steps": a, "phase_rad": p}
                for error, (a, _, p) in zip(
                    o.drive.periodic_errors, self.stepper.periodic_errors, strict=True
                )
            ],
            "analogue": o.analogue.model_dump(),
            "reference": o.reference.model_dump(),
        }

    def _lines_of(self, name: str) -> list[dict[str, Any]]:
        spectrum = self._spectrum_of(name, self.in_beam["filter"])
        return [
            {
                "wavelength_air_nm": line.wavelength_air_nm,
                "wavelength_bench_air_nm": float(self.spectrometer.wavelength_nm(profile.rotation_rad)),
                "strength_per_s": strength,
                "peak_rate_per_s": strength * profile.peak,
                "source_fwhm_pm": line.fwhm_nm * 1e3,
                "lorentz_fwhm_pm": line.lorentz_fwhm_pm,
                "components": [component.model_dump() for component in line.components],
                "self_reversal": line.reversal.model_dump() if line.reversal else None,
                "escaped_fraction": line.shape(spectrum.lamp.cell).area,
                "recorded_fwhm_pm": profile.fwhm_nm * 1e3,
                "bandpass_pm": [w * 1e3 for w in self.spectrometer.bandpass_nm(line.wavelength_air_nm)],
                "blur_pm": self.spectrometer.blur_nm(line.wavelength_air_nm) * 1e3,
            }
            for line, (strength, _, profile) in zip(spectrum.lamp.lines, spectrum.lines, strict=True)
        ]


def _clear(wavelength_nm: float) -> float:
    return 1.0


def build(options: dict[str, Any], context: DriverContext) -> World:
    """Factory of the world, named in the bench file's `[world]` table. Raises SettingsError."""
    checked = parse_options(WorldOptions, options, "world.options")
    try:
        return World(checked, clock=context.clock, seed=context.seed)
    except ValueError as error:  # a line or a focus that the grating cannot reach
        raise SettingsError("world.options", [f"optics: {error}"]) from error
