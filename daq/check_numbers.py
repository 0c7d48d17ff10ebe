"""The numbers of a target on a bench, as `gratingd check` tells them; units stand in the keys."""

from __future__ import annotations

import math
from collections.abc import Sequence
from typing import Any

from analysis.drives import PeriodicError
from analysis.optics import Mount, TableMount
from analysis.orders import free_spectral_range_nm
from analysis.resolving import resolving_power
from analysis.turned import TurnedGrating
from daq.check_optics import drive_floor_nm, floor_nm, moved_nm, smallest_separation_nm
from daq.check_orders import band_of, overlaps_seen
from daq.check_sweep import forecast, sweep_points, sweep_s
from daq.instrument import Stretch, View, filter_in_beam, lamp_lit, periodic_errors
from daq.target import Target
from drivers.bench import Bench


def target_numbers(bench: Bench, view: View, target: Target, stretches: Sequence[Stretch]) -> dict[str, Any]:
    """JSON types; keys that do not apply are left out."""
    mount = view.mount
    numbers: dict[str, Any] = {
        "wavelength_nm": view.wavelength_nm,
        "medium": mount.medium,
        "lamp": lamp_lit(bench, target.setup),
    }
    numbers |= optics_numbers(mount, view.wavelength_nm, view.source_nm)
    if not isinstance(mount, TableMount):
        numbers |= _orders(bench, view, target)
        numbers |= _drive(bench, view, target)
    numbers |= {
        "step_pm": 1e3 * view.step_nm,
        "points_per_fwhm": view.fwhm_nm / view.step_nm,
        "points_per_fwhm_dithered": view.groups * view.fwhm_nm / view.step_nm,
        "smallest_separation_pm": 1e3 * smallest_separation_nm(target, view),
        "separation_floor_pm": 1e3 * floor_nm(bench, view, smallest_separation_nm(target, view)),
    }
    if stretches:
        numbers |= _sweep(bench, view, target, stretches)
    return numbers


def optics_numbers(mount: Mount, wavelength_nm: float, source_nm: float) -> dict[str, Any]:
    """What the optics make of a line of `source_nm` own width at a wavelength."""
    powers = resolving_power(mount, wavelength_nm=wavelength_nm, source_gaussian_fwhm_nm=source_nm)
    first_nm, second_nm = mount.bandpass_nm(wavelength_nm)
    numbers: dict[str, Any] = {
        "drive_step_pm": 1e3 * abs(mount.dispersion_nm_per_step(mount.steps(wavelength_nm))),
        "source_fwhm_pm": 1e3 * source_nm,
        "fwhm_pm": 1e3 * powers.observed_fwhm_nm,
        "resolving_power": powers.observed,
    }
    if not isinstance(mount, TurnedGrating):
        return numbers | {"pixel_pm": 1e3 * first_nm}
    return numbers | {
        "order": mount.order,
        "rotation_deg": math.degrees(float(mount.rotation_rad(mount.steps(wavelength_nm)))),
        "dispersion_nm_per_mm": mount.reciprocal_linear_dispersion_nm_per_mm(wavelength_nm),
        "anamorphism": mount.anamorphism(wavelength_nm),
        "entrance_slit_um": mount.entrance_slit_um,
        "exit_slit_um": mount.exit_slit_um,
        "entrance_bandpass_pm": 1e3 * first_nm,
        "exit_bandpass_pm": 1e3 * second_nm,
        "diffraction_pm": 1e3 * mount.diffraction_fwhm_nm(wavelength_nm),
        "blur_pm": 1e3 * mount.blur_nm(wavelength_nm),
        "slit_resolving_power": powers.slits,
        "theoretical_resolving_power": mount.theoretical_resolving_power,
        "instrument_resolving_power": powers.instrument,
    }


def _orders(bench: Bench, view: View, target: Target) -> dict[str, Any]:
    name = filter_in_beam(bench, target.setup)
    seen = overlaps_seen(bench, view, None)
    through = overlaps_seen(bench, view, band_of(bench.band(name)))
    return {
        "filter": name,
        "free_spectral_range_nm": free_spectral_range_nm(
            wavelength_nm=view.wavelength_nm, order=view.mount.order
        ),
        "overlaps": [
            {"order": other.order, "wavelength_nm": other.wavelength_nm, "is_stopped": other not in through}
            for other in seen
        ],
    }


def _drive(bench: Bench, view: View, target: Target) -> dict[str, Any]:
    separation_nm = smallest_separation_nm(target, view)
    errors = [
        {
            "name": error.name,
            "amplitude_pm": 1e3 * error.amplitude_nm(view.nm_per_step),
            "period_pm": 1e3 * error.period_nm(view.nm_per_step),
            "slope": error.slope,
            "share_left": _share_left(error, view),
            "separation_error_pm": 1e3 * moved_nm(error, view, separation_nm),
        }
        for error in periodic_errors(bench)
    ]
    return {
        "periodic_errors": errors,
        "separation_floor_drive_pm": 1e3 * drive_floor_nm(bench, view, separation_nm),
        "separation_floor_scale_pm": 1e3 * bench.scale.relative_uncertainty * separation_nm,
    }


def _share_left(error: PeriodicError, view: View) -> float:
    """What all sweeps together leave of a periodic error in the place of one line."""
    fwhm_steps, spacing_steps = view.fwhm_nm / view.nm_per_step, view.step_steps / view.groups
    if spacing_steps >= 0.5 * fwhm_steps:  # told as a problem
        return 1.0
    return error.share_left(fwhm_steps=fwhm_steps, spacing_steps=spacing_steps)


def _sweep(bench: Bench, view: View, target: Target, stretches: Sequence[Stretch]) -> dict[str, Any]:
    numbers: dict[str, Any] = {
        "windows_nm": [[part.lowest_nm, part.highest_nm] for part in stretches],
        "points_per_sweep": sweep_points(view, stretches),
        "sweep_s": sweep_s(bench, view, target, stretches),
    }
    rate, dwell_s = target.model.expected_peak_rate_per_s, target.sweep.dwell_s
    if rate is None:
        return numbers
    # a line's area is its height times 1.06 of its width, for a Gaussian
    area = math.sqrt(math.pi / (4.0 * math.log(2.0))) * view.fwhm_nm / view.step_nm
    numbers |= {
        "counts_at_peak_per_point": rate * dwell_s,
        "counts_of_line_per_sweep": rate * dwell_s * area,
        "peak_share_of_allowed_light": rate / bench.detector.most_counts_per_s,
    }
    if bench.detector.dead_time_ns is not None:
        numbers["dead_time_load"] = rate * bench.detector.dead_time_ns * 1e-9
    separation_nm = smallest_separation_nm(target, view)
    expected = forecast(bench, view, target, stretches, floor_nm(bench, view, separation_nm))
    if expected is not None:
        one_pm, seconds = expected
        numbers["separation_u_one_sweep_pm"] = one_pm
        numbers["time_to_goal_s"] = seconds if seconds is not None and math.isfinite(seconds) else None
    return numbers
