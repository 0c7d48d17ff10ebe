"""The simulated grating and the analysed one are derived apart: path differences here, the grating equation
there. They must agree, and a planted mistake in either must show."""

from __future__ import annotations

import dataclasses
import math
import tomllib
from typing import Any

import numpy as np
import pytest

from analysis.air import LABORATORY_AIR, air_from_vacuum_nm, vacuum_from_air_nm
from analysis.optics import PlaneMount, expected_fwhm_nm
from daq.files import shipped
from drivers.bench import PlaneOptics, load_bench
from drivers.clock import Clock, RealClock
from drivers.protocols import DriverContext
from simulators.world import World, build

BENCH = shipped("benches/emberlight-3.toml")
CLOCK: Clock = RealClock()
AGREED = 1e-12  # of a wavelength: rounding of a few sines


def believed(**changes: Any) -> PlaneMount:
    """What the bench file tells the daemon, with changes."""
    bench = load_bench(BENCH).bench
    optics = bench.optics
    assert isinstance(optics, PlaneOptics)
    assert bench.drive.steps_per_radian is not None
    mount = PlaneMount(
        groove_density_per_mm=optics.groove_density_per_mm,
        ruled_width_mm=optics.ruled_width_mm,
        focal_length_mm=optics.focal_length_mm,
        included_angle_deg=optics.included_angle_deg,
        order=optics.order,
        entrance_slit_um=optics.entrance_slit_um,
        exit_slit_um=optics.exit_slit_um,
        steps_per_radian=bench.drive.steps_per_radian,
        zero_order_steps=bench.zero_order_steps,
    )
    return dataclasses.replace(mount, **changes)


def true(drive: dict[str, Any] | None = None, **optics: Any) -> World:
    """The world of the same file without its drive's faults, with changes."""
    options = tomllib.loads(BENCH.read_text(encoding="utf-8"))["world"]["options"]
    options["optics"] |= optics
    options["drive"] |= {"zero_order_steps": 0.0, "microstep_error_full_steps": 0.0} | (drive or {})
    return build(options, DriverContext(clock=CLOCK, role="world", seed=1, folder=str(BENCH.parent)))


def worst_relative(world: World, mount: PlaneMount) -> float:
    """Largest relative difference of wavelengths over the drive's whole range, zero order left out."""
    drive = load_bench(BENCH).bench.drive
    steps = np.linspace(drive.lowest_steps, drive.highest_steps, 400).round()
    steps = steps[np.abs(steps) > 1000]
    theirs = np.array([world.true_wavelength_nm(float(s)) for s in steps])
    return float(np.max(np.abs(mount.wavelength_nm(steps) / theirs - 1.0)))


def width_ratios(world: World, mount: PlaneMount) -> list[float]:
    """Believed over true widths of both slits' images at every line of the lamp."""
    ratios = []
    for line in world.options.lamp.lines:
        ours = mount.bandpass_nm(line.wavelength_air_nm)
        theirs = world.spectrometer.bandpass_nm(line.wavelength_air_nm)
        ratios += [a / b for a, b in zip(ours, theirs, strict=True)]
    return ratios


def fwhm_ratio(world: World, mount: PlaneMount, number: int) -> float:
    """Expected over recorded FWHM of one line of the lamp; its Doppler width is known to both."""
    line = world.options.lamp.lines[number]
    _, _, profile = world.lines[number]
    where = line.wavelength_air_nm
    ours = expected_fwhm_nm(
        box_widths_nm=mount.bandpass_nm(where),
        gaussian_fwhm_nm=line.fwhm_nm,
        diffraction_fwhm_nm=mount.diffraction_fwhm_nm(where),
    )
    return ours / profile.fwhm_nm


def test_wavelengths_agree_over_the_whole_range() -> None:
    assert worst_relative(true(), believed()) < AGREED


@pytest.mark.parametrize(
    "setup",
    [
        {"groove_density_per_mm": 600.0},
        {"groove_density_per_mm": 1800.0, "included_angle_deg": 8.0},
        {"order": 2, "groove_density_per_mm": 300.0},
        {"included_angle_deg": 47.5, "focal_length_mm": 500.0},
    ],
    ids=str,
)
def test_other_mounts_agree_too(setup: dict[str, Any]) -> None:
    world, mount = true(**setup), believed(**setup)
    assert worst_relative(world, mount) < AGREED
    reachable = [r for r in width_ratios(world, mount) if math.isfinite(r)]
    assert reachable == pytest.approx([1.0] * len(reachable), rel=1e-6)


@pytest.mark.parametrize(
    ("mistake", "at_least"),
    [
        ({"groove_density_per_mm": 1200.0 * 1.001}, 0.99e-3),  # d is 1/density
        # m lambda = 2 d cos K sin phi (textbook): half a degree of 2K changes cos K by tan(11 deg) 0.25 deg
        ({"included_angle_deg": 22.5}, 0.8e-3),
        ({"order": 2}, 0.49),
    ],
    ids=str,
)
def test_a_planted_mistake_on_either_side_shows(mistake: dict[str, Any], at_least: float) -> None:
    assert worst_relative(true(), believed(**mistake)) > at_least
    assert worst_relative(true(**mistake), believed()) > at_least


def test_the_worlds_drive_faults_are_as_large_as_its_file_says() -> None:
    """A step and a half of zero offset, and 5 % of a full step of microstep error (0.2 steps)."""
    mount = believed()
    steps = np.arange(300_000.0, 300_064.0)
    per_step = np.abs(np.diff(mount.wavelength_nm(steps)).mean())
    faulty = true(drive={"zero_order_steps": 1.4, "microstep_error_full_steps": 0.05})
    off = np.array([faulty.true_wavelength_nm(float(s)) for s in steps]) - mount.wavelength_nm(steps)
    off_steps = off / per_step
    assert np.mean(off_steps) == pytest.approx(-1.4, abs=0.02)
    assert np.ptp(off_steps) / 2.0 == pytest.approx(0.2, abs=0.01)
    assert np.allclose(off_steps[:16], off_steps[16:32], atol=1e-3), "period: four full steps of four"


def test_slit_images_agree() -> None:
    ratios = width_ratios(true(), believed())
    assert ratios == pytest.approx([1.0] * len(ratios), rel=1e-6)


@pytest.mark.parametrize(
    ("mistake", "at_least"),
    [
        ({"focal_length_mm": 870.0 * 1.01}, 0.009),
        ({"entrance_slit_um": 21.0}, 0.04),
        ({"included_angle_deg": 27.0}, 0.005),
    ],
    ids=str,
)
def test_a_planted_mistake_in_the_slits_shows(mistake: dict[str, Any], at_least: float) -> None:
    for ratios in (width_ratios(true(), believed(**mistake)), width_ratios(true(**mistake), believed())):
        assert max(abs(ratio - 1.0) for ratio in ratios) > at_least


def convolved_fwhm_nm(boxes_nm: tuple[float, float], line_fwhm_nm: float, diffraction: Any) -> float:
    """Two boxes, a Gaussian line and a diffraction pattern folded together on a fine grid: a third way."""
    step = line_fwhm_nm / 40.0
    x = np.arange(-(2**15), 2**15) * step
    parts = [np.clip(0.5 + (box / 2.0 - np.abs(x)) / step, 0.0, 1.0) for box in boxes_nm]
    parts += [np.exp(-4.0 * math.log(2.0) * (x / line_fwhm_nm) ** 2), diffraction(x)]
    product = np.prod([np.fft.rfft(np.fft.ifftshift(part)) for part in parts], axis=0)
    profile = np.fft.fftshift(np.fft.irfft(product, x.size))
    above = np.flatnonzero(profile >= profile.max() / 2.0)
    low, high = above[0], above[-1]
    half = profile.max() / 2.0
    left = (half - profile[low - 1]) / (profile[low] - profile[low - 1]) - 1.0
    right = (profile[high] - half) / (profile[high] - profile[high + 1])
    return float((high + right - low - left) * step)


WIDTHS_AGREE = 2e-5  # the world reads its width off a table of 16 cells to the line, on straight lines


def test_expected_width_is_the_recorded_one() -> None:
    """And what brute force makes of both slits, the line and the sinc^2 of the ruled width (scale
    lambda/(m N), textbook)."""
    world, mount = true(), believed()
    for number, line in enumerate(world.options.lamp.lines):
        where = line.wavelength_air_nm
        assert fwhm_ratio(world, mount, number) == pytest.approx(1.0, abs=WIDTHS_AGREE)
        boxes, scale_nm = mount.bandpass_nm(where), where / mount.grooves
        recorded = convolved_fwhm_nm(boxes, line.fwhm_nm, lambda x, s=scale_nm: np.sinc(x / s) ** 2)
        assert recorded == pytest.approx(world.lines[number].profile.fwhm_nm, rel=2e-3)


@pytest.mark.parametrize(
    "mistake",
    [
        {"entrance_slit_um": 22.0},
        {"exit_slit_um": 22.0},
        {"focal_length_mm": 861.0},
        {"ruled_width_mm": 80.0},
    ],
    ids=str,
)
def test_a_planted_mistake_in_the_width_shows(mistake: dict[str, float]) -> None:
    for number in range(len(true().lines)):
        for world, mount in ((true(), believed(**mistake)), (true(**mistake), believed())):
            assert abs(fwhm_ratio(world, mount, number) - 1.0) > 50.0 * WIDTHS_AGREE


def test_the_mercury_pair_is_29_pm_apart_for_both() -> None:
    """313.155 and 313.184 nm in standard air (memory): where the world puts them, the daemon finds them."""
    world, mount = true(), believed()
    given = [line.wavelength_air_nm for line in world.options.lamp.lines[:2]]
    assert given == [313.155, 313.184]
    steps = [mount.steps_per_radian * world.lines[k].profile.rotation_rad for k in range(2)]
    found = mount.wavelength_nm(steps)
    ours = [
        air_from_vacuum_nm(wavelength_vacuum_nm=vacuum_from_air_nm(wavelength_air_nm=w), air=LABORATORY_AIR)
        for w in given
    ]
    # the world's mean air may differ a little from standard laboratory air: the place by 1e-6
    assert found == pytest.approx(ours, rel=1e-6)
    assert found[1] - found[0] == pytest.approx(0.029, rel=1e-5)
    wrong = believed(groove_density_per_mm=1200.0 * 1.001).wavelength_nm(steps)
    assert abs((wrong[1] - wrong[0]) / 0.029 - 1.0) > 0.9e-3
