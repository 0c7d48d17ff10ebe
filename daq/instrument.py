"""The instrument as it stands for a target: the bench file and the target's [setup] made into optics, and
what they do to a line there. What is checked beforehand and what a run is computed from are the same numbers.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

from analysis.air import LABORATORY_AIR, STANDARD_AIR, air_from_vacuum_nm, vacuum_from_air_nm
from analysis.optics import Mount, PeriodicError, TableMount, expected_fwhm_nm, mount_from_json
from daq.spectrum import Spectrum
from daq.target import Setup, Target
from drivers.bench import NO_FILTER, Bench, GratingOptics

DITHER_GROUPS = 4
"""Sweeps start at this many different fractions of a step, where a step holds as many."""


@dataclass(frozen=True, slots=True)
class Stretch:
    """One stretch of wavelengths to be swept, nm in the mount's medium, and the drive's positions at its
    ends."""

    centre_nm: float
    lowest_nm: float
    highest_nm: float
    lowest_steps: int
    highest_steps: int


@dataclass(frozen=True, slots=True, kw_only=True)
class View:
    """What the bench makes of a target's main line. Lengths are nm in the mount's medium.

    boxes_nm : full widths of the images of entrance and exit slit (or of the pixel and 0.0).
    source_nm : FWHM that the source line is taken to have. fwhm_nm : expected FWHM of one line as recorded.
    step_steps : distance of the points of a sweep, in steps of the drive; each of `groups` sweeps starts at
    another fraction of it.
    """

    mount: Mount
    wavelength_nm: float
    boxes_nm: tuple[float, float]
    diffraction_nm: float
    blur_nm: float
    source_nm: float
    fwhm_nm: float
    nm_per_step: float
    step_steps: int
    groups: int

    @property
    def slits_nm(self) -> float:
        """FWHM, nm, that the slits alone leave: the wider image."""
        return max(self.boxes_nm)

    @property
    def step_nm(self) -> float:
        return self.step_steps * self.nm_per_step

    @property
    def resolving_power(self) -> float:
        return self.wavelength_nm / self.fwhm_nm


def mount_of_bench(bench: Bench, setup: Setup, spectrum: Spectrum | None) -> Mount:
    """The optics with the order and the slits that `setup` asks for, else the bench's own.

    `spectrum` is the recording of a table mount. Raises ValueError for optics that cannot be.
    """
    optics, drive = bench.optics, bench.drive
    if not isinstance(optics, GratingOptics):
        if spectrum is None:
            raise ValueError("a recorded spectrum's mount needs the spectrum")
        return TableMount(tuple(float(w) for w in spectrum.wavelength_nm), spectrum.medium)
    entrance_um, exit_um = slits_um(optics, setup)
    of_the_optics = optics.model_dump(exclude={"mount", "ghosts"})
    set_up = {
        "kind": optics.mount,
        "order": setup.order or optics.order,
        "entrance_slit_um": entrance_um,
        "exit_slit_um": exit_um,
        "drive": drive.kind,
        "steps_per_radian": drive.steps_per_radian or 0.0,
        "steps_per_unit_sine": drive.steps_per_unit_sine or 0.0,
        "zero_order_steps": bench.zero_order_steps,
    }
    return mount_from_json(of_the_optics | set_up)


def slits_um(optics: GratingOptics, setup: Setup) -> tuple[float, float]:
    """Widths of entrance and exit slit, um."""
    return setup.entrance_slit_um or optics.entrance_slit_um, setup.exit_slit_um or optics.exit_slit_um


def filter_in_beam(bench: Bench, setup: Setup) -> str:
    """The filter that stands in the beam; "none" for none."""
    if bench.filter is not None:
        return setup.filter or NO_FILTER
    return bench.by_hand.filter or NO_FILTER


def lamp_lit(bench: Bench, setup: Setup) -> str | None:
    """The lamp before the slit; None where nobody says."""
    if bench.lamp is not None:
        return setup.lamp or bench.lamp.positions[0]
    return bench.by_hand.lamp


def periodic_errors(bench: Bench) -> tuple[PeriodicError, ...]:
    """What is left of the drive's periodic errors."""
    return tuple(
        PeriodicError(name=error.name, period_steps=error.period_steps, amplitude_steps=error.amplitude_steps)
        for error in bench.drive.periodic_errors
    )


def view_of(mount: Mount, target: Target) -> View:
    """What the mount makes of the target's main line. ValueError where the mount cannot reach it."""
    where_nm = in_medium(target.wavelength_nm, target.medium, mount.medium)
    nm_per_step = abs(mount.dispersion_nm_per_step(mount.steps(where_nm)))
    first, second = mount.bandpass_nm(where_nm)
    diffraction_nm, blur_nm = mount.diffraction_fwhm_nm(where_nm), mount.blur_nm(where_nm)
    source_nm = 1e-3 * target.model.line_fwhm_pm
    fwhm_nm = expected_fwhm_nm(
        box_widths_nm=(first, second, blur_nm),
        gaussian_fwhm_nm=source_nm,
        diffraction_fwhm_nm=diffraction_nm,
    )
    asked_nm = fwhm_nm / 8 if target.sweep.step_pm is None else 1e-3 * target.sweep.step_pm
    step_steps = 1 if isinstance(mount, TableMount) else max(1, round(asked_nm / nm_per_step))
    return View(
        mount=mount,
        wavelength_nm=where_nm,
        boxes_nm=(first, second),
        diffraction_nm=diffraction_nm,
        blur_nm=blur_nm,
        source_nm=source_nm,
        fwhm_nm=fwhm_nm,
        nm_per_step=nm_per_step,
        step_steps=step_steps,
        groups=min(DITHER_GROUPS, step_steps),
    )


def stretches_of(view: View, target: Target) -> tuple[Stretch, ...]:
    """The stretches to be swept, in the file's order. ValueError where the mount cannot reach one's end."""
    mount, found = view.mount, []
    for given_nm, window in target.stretches:
        centre_nm = in_medium(given_nm, target.medium, mount.medium)
        outright = window.outright_pm
        below_nm, above_nm = (
            (window.half_width * view.fwhm_nm,) * 2
            if outright is None
            else (1e-3 * outright[0], 1e-3 * outright[1])
        )
        lowest_nm, highest_nm = centre_nm - below_nm, centre_nm + above_nm
        ends = sorted((mount.steps(lowest_nm), mount.steps(highest_nm)))
        found.append(Stretch(centre_nm, lowest_nm, highest_nm, math.floor(ends[0]), math.ceil(ends[1])))
    return tuple(found)


def in_medium(wavelength_nm: float, given: str, wanted: str, *, at_bench: bool = True) -> float:
    """A catalogue wavelength (in standard air, or vacuum) on another scale.

    "air" is the bench's own, taken as 20 C, 101 325 Pa, 50 %, or standard air if not `at_bench`. A real
    laboratory differs by some 1e-6 of the wavelength, which moves where a feature is looked for, not how far
    apart its lines are.
    """
    if given == wanted and not (wanted == "air" and at_bench):
        return wavelength_nm
    vacuum_nm = wavelength_nm if given == "vacuum" else vacuum_from_air_nm(wavelength_air_nm=wavelength_nm)
    if wanted == "vacuum":
        return vacuum_nm
    air = LABORATORY_AIR if at_bench else STANDARD_AIR
    return air_from_vacuum_nm(wavelength_vacuum_nm=vacuum_nm, air=air)
