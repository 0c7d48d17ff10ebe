"""Plane, Littrow and concave mounts, both drives, overlaps and ghosts: rays and path differences on one
side, grating equation and light path on the other. They agree to the stated accuracy, and a mistake in
either shows."""

from __future__ import annotations

import dataclasses
import math
from typing import Any

import numpy as np
import pytest
from numpy.typing import NDArray

from analysis.drives import PeriodicError, RotaryDrive, SineBarDrive
from analysis.ghosts import ghosts_of
from analysis.optics import ConcaveMount, LittrowMount, PlaneMount, expected_fwhm_nm
from analysis.orders import overlaps
from simulators.draw import Draws
from simulators.ghosts import ghosts
from simulators.mechanics import DriveOptions, Stepper
from simulators.mounts import ConcaveOptions, GhostOptions, LittrowOptions, PlaneOptions
from simulators.optics import Spectrometer
from simulators.profile import LineProfile
from simulators.shapes import gaussian

AnyMount = PlaneMount | LittrowMount | ConcaveMount

STEPS_PER_RADIAN = 1.0e6
SETTINGS: dict[str, dict[str, Any]] = {
    "plane": {
        "groove_density_per_mm": 1200.0,
        "ruled_width_mm": 96.0,
        "focal_length_mm": 870.0,
        "included_angle_deg": 22.0,
        "order": 1,
        "entrance_slit_um": 20.0,
        "exit_slit_um": 30.0,
    },
    "littrow": {
        "groove_density_per_mm": 1200.0,
        "ruled_width_mm": 96.0,
        "focal_length_mm": 1000.0,
        "off_plane_angle_deg": 5.0,
        "order": 1,
        "entrance_slit_um": 20.0,
        "exit_slit_um": 30.0,
    },
    "concave": {
        "groove_density_per_mm": 568.43,
        "ruled_width_mm": 50.0,
        "radius_mm": 1000.0,
        "included_angle_deg": 30.0,
        "focused_nm": 589.0,
        "focused_order": 1,
        "order": 1,
        "entrance_slit_um": 20.0,
        "exit_slit_um": 30.0,
    },
}
KINDS = tuple(SETTINGS)


def believed(kind: str, **changes: Any) -> AnyMount:
    settings = SETTINGS[kind] | changes
    if kind == "plane":
        return PlaneMount(**settings, steps_per_radian=STEPS_PER_RADIAN)
    if kind == "littrow":
        return LittrowMount(**settings, steps_per_radian=STEPS_PER_RADIAN)
    return ConcaveMount(**settings, steps_per_radian=STEPS_PER_RADIAN)


def true(kind: str, **changes: Any) -> Spectrometer:
    settings = SETTINGS[kind] | changes
    if kind == "plane":
        return Spectrometer(PlaneOptions(**settings))
    if kind == "littrow":
        return Spectrometer(LittrowOptions(mount="littrow", **settings))
    return Spectrometer(ConcaveOptions(mount="concave", **settings))


# --- wavelengths --------------------------------------------------------------------------------------------


def worst_wavelength(spectrometer: Spectrometer, mount: AnyMount) -> float:
    """Largest relative difference over rotations from 3 to 50 degrees."""
    rotations = np.radians(np.linspace(3.0, 50.0, 200))
    ours = mount.wavelength_nm(rotations * STEPS_PER_RADIAN)
    return float(np.max(np.abs(ours / spectrometer.wavelength_nm(rotations) - 1.0)))


@pytest.mark.parametrize("order", [1, 2, 3])
@pytest.mark.parametrize("kind", KINDS)
def test_wavelengths_agree(kind: str, order: int) -> None:
    assert worst_wavelength(true(kind, order=order), believed(kind, order=order)) < 1e-12


@pytest.mark.parametrize(
    ("kind", "mistake", "at_least"),
    [
        ("plane", {"groove_density_per_mm": 1200.0 * 1.001}, 0.99e-3),
        ("littrow", {"groove_density_per_mm": 1200.0 * 1.001}, 0.99e-3),
        ("concave", {"groove_density_per_mm": 568.43 * 1.001}, 0.99e-3),
        *((kind, {"order": 2}, 0.49) for kind in KINDS),
        ("plane", {"included_angle_deg": 22.5}, 0.8e-3),
        ("concave", {"included_angle_deg": 30.5}, 1.1e-3),
        ("littrow", {"off_plane_angle_deg": 5.5}, 0.8e-3),
    ],
    ids=str,
)
def test_a_planted_mistake_in_the_wavelengths_shows(
    kind: str, mistake: dict[str, Any], at_least: float
) -> None:
    """A cosine of half the included, or of the off-plane angle: half a degree moves it by its tangent."""
    assert worst_wavelength(true(kind), believed(kind, **mistake)) > at_least
    assert worst_wavelength(true(kind, **mistake), believed(kind)) > at_least


# --- slit images --------------------------------------------------------------------------------------------


def worst_image(spectrometer: Spectrometer, mount: AnyMount) -> float:
    """Largest relative difference of both slits' images over the spectrum."""
    found = []
    for where in (260.0, 400.0, 589.0, 900.0):
        pairs = zip(mount.bandpass_nm(where), spectrometer.bandpass_nm(where), strict=True)
        found += [abs(ours / theirs - 1.0) for ours, theirs in pairs]
    return max(found)


@pytest.mark.parametrize("kind", KINDS)
def test_slit_images_agree(kind: str) -> None:
    """To 1e-6: slits so narrow that the tangent of their angle is the angle."""
    assert worst_image(true(kind), believed(kind)) < 1e-6


@pytest.mark.parametrize(
    ("kind", "mistake"),
    [
        ("plane", {"focal_length_mm": 870.0 * 1.01}),
        ("littrow", {"focal_length_mm": 1010.0}),
        ("concave", {"radius_mm": 1010.0}),
        ("concave", {"focused_order": 2}),
        *((kind, {"entrance_slit_um": 20.2}) for kind in KINDS),
        *((kind, {"exit_slit_um": 30.3}) for kind in KINDS),
    ],
    ids=str,
)
def test_a_planted_mistake_in_the_slit_images_shows(kind: str, mistake: dict[str, Any]) -> None:
    assert worst_image(true(kind), believed(kind, **mistake)) > 0.009
    assert worst_image(true(kind, **mistake), believed(kind)) > 0.009


# --- the concave mount's blur -------------------------------------------------------------------------------

# order and wavelength: a little and far off the focus of 589 nm in order 1, to either side
OFF_FOCUS = [(1, 620.0), (1, 400.0), (2, 589.0), (2, 300.0)]


def traced_blur_nm(spectrometer: Spectrometer, where: float) -> float:
    """The box as wide as the scatter of traced rays on the exit slit's plane, by the plane's own
    dispersion."""
    order, width_mm = spectrometer.options.order, spectrometer.options.ruled_width_mm
    rotation = spectrometer.rotation_rad(where)
    zones_mm: NDArray[np.float64] = ((np.arange(4000) + 0.5) / 4000.0 - 0.5) * width_mm

    def hits_mm(wavelength_nm: float, zones: NDArray[np.float64]) -> NDArray[np.float64]:
        return spectrometer.rays_hit_mm(rotation, order * wavelength_nm, zones)

    low_mm, high_mm = (float(hits_mm(where * stretch, np.zeros(1))[0]) for stretch in (0.999, 1.001))
    nm_per_mm = 0.002 * where / abs(high_mm - low_mm)
    return math.sqrt(12.0) * float(np.std(hits_mm(where, zones_mm))) * nm_per_mm


def worst_blur(spectrometer: Spectrometer, mount: ConcaveMount) -> float:
    ratios = []
    for order, where in OFF_FOCUS:
        theirs = Spectrometer(spectrometer.options.model_copy(update={"order": order}))
        ours = dataclasses.replace(mount, order=order)
        ratios.append(abs(ours.blur_nm(where) / traced_blur_nm(theirs, where) - 1.0))
    return max(ratios)


def concave(**changes: Any) -> ConcaveMount:
    mount = believed("concave", **changes)
    assert isinstance(mount, ConcaveMount)
    return mount


def test_blur_agrees_with_traced_rays() -> None:
    """To 2e-4: the light path says which wavelength a groove sends to the slit, the trace where one
    wavelength lands; their ratio, the dispersion, changes a little over a blur of millimetres."""
    assert worst_blur(true("concave"), concave()) < 2e-4


def test_in_focus_the_blur_agrees_too() -> None:
    """What the aperture leaves on Rowland's circle, a few pm, in either order of focus."""
    for order in (1, 2):
        traced_nm = traced_blur_nm(true("concave", order=order, focused_order=order), 589.0)
        assert concave(order=order, focused_order=order).blur_nm(589.0) == pytest.approx(traced_nm, rel=2e-4)
        assert traced_nm < 0.02


def test_an_order_away_from_the_focus_the_lines_are_over_three_nm_wide_for_both() -> None:
    """Ray tracing gave over 3 nm for this metre of radius; so do both sides, and the full spread as well."""
    theirs = true("concave", order=2)
    for blur_nm in (concave(order=2).blur_nm(589.0), traced_blur_nm(theirs, 589.0), theirs.blur_nm(589.0)):
        assert 3.0 < blur_nm < 4.0


@pytest.mark.parametrize(
    ("mistake", "at_least"),
    [
        ({"ruled_width_mm": 52.0}, 0.03),
        ({"radius_mm": 1050.0}, 0.03),
        ({"focused_nm": 592.0}, 0.05),
        ({"focused_order": 2}, 0.9),
        ({"included_angle_deg": 40.0}, 0.015),
    ],
    ids=str,
)
def test_a_planted_mistake_in_the_blur_shows(mistake: dict[str, Any], at_least: float) -> None:
    assert worst_blur(true("concave"), concave(**mistake)) > at_least
    assert worst_blur(true("concave", **mistake), concave()) > at_least


# --- the recorded width -------------------------------------------------------------------------------------

LINE_FWHM_NM = 0.004


def width_ratio(kind: str, where: float, mistake: dict[str, Any], **setup: Any) -> float:
    """Expected over recorded FWHM of a line; the mistake is the analysis's."""
    profile = LineProfile(true(kind, **setup), wavelength_nm=where, shape=gaussian(LINE_FWHM_NM))
    mount = believed(kind, **(setup | mistake))
    ours = expected_fwhm_nm(
        box_widths_nm=(*mount.bandpass_nm(where), mount.blur_nm(where)),
        gaussian_fwhm_nm=LINE_FWHM_NM,
        diffraction_fwhm_nm=mount.diffraction_fwhm_nm(where),
    )
    return ours / profile.fwhm_nm


@pytest.mark.parametrize("where", [300.0, 546.074])
@pytest.mark.parametrize("kind", ["plane", "littrow"])
def test_recorded_widths_agree(kind: str, where: float) -> None:
    """To 2e-5, diffraction's wings included: the world reads its width off a table, on straight lines."""
    assert width_ratio(kind, where, {}) == pytest.approx(1.0, abs=2e-5)


@pytest.mark.parametrize(("where", "accuracy"), [(589.0, 1e-4), (592.0, 1e-4), (600.0, 0.01), (640.0, 0.01)])
def test_recorded_widths_of_the_concave_mount_agree(where: float, accuracy: float) -> None:
    """In focus as well as the others; out of it, where the image of the ruling is as wide as the slits and,
    of defocus and aperture together, no box, a box of its scatter is up to 1 % off what is recorded."""
    assert width_ratio("concave", where, {}) == pytest.approx(1.0, abs=accuracy)


@pytest.mark.parametrize(
    ("kind", "where", "mistake"),
    [
        ("plane", 300.0, {"ruled_width_mm": 80.0}),
        ("littrow", 300.0, {"ruled_width_mm": 80.0}),
        ("plane", 546.074, {"exit_slit_um": 29.0}),
        ("littrow", 546.074, {"exit_slit_um": 29.0}),
    ],
)
def test_a_planted_mistake_in_the_width_shows(kind: str, where: float, mistake: dict[str, Any]) -> None:
    """By fifty times more than the two agree to, even where diffraction is a small part of the width."""
    assert abs(width_ratio(kind, where, mistake) - 1.0) > 1e-3


# --- orders and ghosts --------------------------------------------------------------------------------------


@pytest.mark.parametrize("kind", KINDS)
def test_overlapping_orders_stand_at_one_rotation(kind: str) -> None:
    """What analysis calls an overlap, the rays bring through the exit slit at the same rotation."""
    spectrometer, found = true(kind), overlaps(wavelength_nm=800.0, order=1)
    assert [overlap.order for overlap in found] == [2, 3, 4]
    for overlap in found:
        there = spectrometer.rotation_rad(overlap.wavelength_nm, overlap.order)
        assert there == pytest.approx(spectrometer.rotation_rad(800.0, 1), rel=1e-13)
        assert there != pytest.approx(spectrometer.rotation_rad(overlap.wavelength_nm * 1.001, overlap.order))


@pytest.mark.parametrize("order", [1, 2, 3])
def test_ghosts_stand_where_the_waves_put_them_and_are_as_bright(order: int) -> None:
    """Fourier coefficients of a phase swing there, small-argument powers here: alike to twice f m^2."""
    spacing_nm, amplitude_nm = 1e6 / 1200.0, 2.5
    options = PlaneOptions(
        **SETTINGS["plane"], ghosts=GhostOptions(grooves_per_period=720.0, amplitude_nm=amplitude_nm)
    )
    waves = {ghost.k: ghost for ghost in ghosts(options, order)}
    fraction = (math.pi * amplitude_nm / spacing_nm) ** 2
    for ghost in ghosts_of(
        parent_nm=500.0, order=order, grooves_per_period=720.0, first_order_fraction=fraction
    ):
        there = waves[ghost.number]
        assert ghost.wavelength_nm * order == pytest.approx(500.0 * there.order, rel=1e-14)
        assert ghost.share == pytest.approx(there.fraction / waves[0].fraction, rel=2.0 * fraction * order**2)
    mistaken = ghosts_of(
        parent_nm=500.0, order=order, grooves_per_period=720.0, first_order_fraction=1.05 * fraction
    )
    assert mistaken[2].share > 1.04 * waves[1].fraction / waves[0].fraction


# --- drives -------------------------------------------------------------------------------------------------


def stepper(**changes: Any) -> Stepper:
    return Stepper(DriveOptions(microstep_error_full_steps=0.0, **changes), Draws(1, "drive"))


def worst_rotation(theirs: Stepper, ours: RotaryDrive | SineBarDrive) -> float:
    steps = np.arange(10_000, 700_000, 10_000)
    true_rad = np.array([theirs.rest_rotation_rad(float(s)) for s in steps])
    return float(np.max(np.abs(ours.rotation_rad(steps) / true_rad - 1.0)))


def test_both_drives_turn_alike() -> None:
    rotary = stepper(steps_per_radian=8.0e5, zero_order_steps=120.0)
    assert worst_rotation(rotary, RotaryDrive(steps_per_radian=8.0e5, zero_order_steps=120.0)) < 1e-13
    bar = stepper(kind="sine-bar", steps_per_unit_sine=8.0e5, zero_order_steps=120.0)
    assert worst_rotation(bar, SineBarDrive(steps_per_unit_sine=8.0e5, zero_order_steps=120.0)) < 1e-13


def test_a_planted_mistake_in_a_drive_shows() -> None:
    bar = stepper(kind="sine-bar", steps_per_unit_sine=8.0e5)
    assert worst_rotation(bar, SineBarDrive(steps_per_unit_sine=8.01e5)) > 1e-3
    assert worst_rotation(bar, RotaryDrive(steps_per_radian=8.0e5)) > 0.1
    assert worst_rotation(bar, SineBarDrive(steps_per_unit_sine=8.0e5, zero_order_steps=20.0)) > 1e-3


def test_a_worm_is_as_large_as_both_say() -> None:
    """Amplitude and steepest slope, read off the true positions of the drive over a period."""
    error = PeriodicError(name="worm", period_steps=800.0, amplitude_steps=1.5)
    worm = stepper(
        steps_per_radian=STEPS_PER_RADIAN,
        periodic_errors=[{"name": "worm", "period_steps": 800.0, "amplitude_steps": 1.5}],
    )
    steps = np.arange(300_000.0, 300_801.0)
    off = np.array([worm.rest_rotation_rad(float(s)) for s in steps]) * STEPS_PER_RADIAN - steps
    assert np.ptp(off) / 2.0 == pytest.approx(error.amplitude_steps, rel=1e-4)
    assert np.max(np.abs(np.diff(off))) == pytest.approx(error.slope, rel=1e-4)
    assert off[0] == pytest.approx(off[800], abs=1e-6)
