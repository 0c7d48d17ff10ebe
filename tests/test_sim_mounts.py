"""The simulated mounts against textbook dispersion, path lengths and rays traced one by one."""

from __future__ import annotations

import math
from typing import Any

import numpy as np
import pytest
from scipy.signal import fftconvolve

from drivers.errors import SettingsError
from drivers.settings import parse_options
from simulators.mounts import ConcaveOptions, LittrowOptions, PlaneOptions
from simulators.optics import Spectrometer
from simulators.profile import LineProfile
from simulators.rays import ConcaveRays
from simulators.shapes import gaussian

SODIUM_NM = 589.0


def littrow(**changes: Any) -> Spectrometer:
    options = {
        "mount": "littrow",
        "groove_density_per_mm": 1200.0,
        "ruled_width_mm": 96.0,
        "focal_length_mm": 870.0,
        "off_plane_angle_deg": 3.0,
        "entrance_slit_um": 20.0,
        "exit_slit_um": 20.0,
    }
    return Spectrometer(LittrowOptions(**(options | changes)))


def concave(**changes: Any) -> Spectrometer:
    """14 438 grooves to the inch, a radius of 1 m."""
    options = {
        "mount": "concave",
        "groove_density_per_mm": 568.43,
        "ruled_width_mm": 50.0,
        "radius_mm": 1000.0,
        "included_angle_deg": 30.0,
        "focused_nm": SODIUM_NM,
        "entrance_slit_um": 20.0,
        "exit_slit_um": 20.0,
    }
    return Spectrometer(ConcaveOptions(**(options | changes)))


# ---- Littrow --------------------------------------------------------------------------------------------


@pytest.mark.parametrize("off_plane_deg", [0.0, 3.0, 12.0])
@pytest.mark.parametrize("order", [1, 2, 3])
def test_littrow_wavelengths_follow_the_textbook(off_plane_deg: float, order: int) -> None:
    """Textbook: m lambda = 2 d cos(gamma) sin(phi) when both beams leave the normal plane by gamma."""
    spectrometer = littrow(off_plane_angle_deg=off_plane_deg, order=order)
    for rotation in (0.1, 0.3, 0.7):
        expected = 2.0 * 1e6 / 1200.0 * math.cos(math.radians(off_plane_deg)) * math.sin(rotation) / order
        assert float(spectrometer.wavelength_nm(rotation)) == pytest.approx(expected, rel=1e-14)
        assert spectrometer.rotation_rad(expected) == pytest.approx(rotation, rel=1e-14)


def test_littrow_slit_images_follow_the_textbook_dispersion() -> None:
    """Textbook: both slits are imaged with d cos(phi)/(m f); off the plane nothing changes across it."""
    spectrometer = littrow()
    phi = spectrometer.rotation_rad(500.0)
    expected = 1e6 / 1200.0 * math.cos(phi) * 0.020 / 870.0
    assert spectrometer.bandpass_nm(500.0) == pytest.approx((expected, expected), rel=1e-6)
    assert spectrometer.blur_nm(500.0) == 0.0


def test_littrow_in_the_plane_is_a_plane_mount_whose_arms_coincide() -> None:
    plane = Spectrometer(
        PlaneOptions(
            groove_density_per_mm=1200.0,
            ruled_width_mm=96.0,
            focal_length_mm=870.0,
            included_angle_deg=0.0,
            entrance_slit_um=20.0,
            exit_slit_um=20.0,
        )
    )
    other = littrow(off_plane_angle_deg=0.0)
    profiles = [LineProfile(s, wavelength_nm=435.8, shape=gaussian(1e-3)) for s in (plane, other)]
    for offset in (-1e-5, 0.0, 4e-6):
        one, two = (profile.share(offset) for profile in profiles)
        assert one == pytest.approx(two, abs=1e-9)


# ---- the sphere -----------------------------------------------------------------------------------------


def arm_points(spectrometer: Spectrometer, x1_mm: float, x2_mm: float) -> tuple[np.ndarray, np.ndarray]:
    """Slit points of the fixed arms in the plane of dispersion, laid out anew."""
    rays, options = spectrometer.rays, spectrometer.options
    assert isinstance(rays, ConcaveRays)
    assert isinstance(options, ConcaveOptions)
    half = math.radians(options.included_angle_deg) / 2.0
    points = []
    for arm, angle, x in ((rays.entrance_arm_mm, half, x1_mm), (rays.exit_arm_mm, -half, x2_mm)):
        towards = np.array([math.sin(angle), math.cos(angle)])
        across = np.array([math.cos(angle), -math.sin(angle)])
        points.append(arm * towards + x * across)
    return points[0], points[1]


def test_path_difference_is_how_the_length_of_the_ray_changes_from_groove_to_groove() -> None:
    """Fermat: the grooves are equidistant on the chord, so P/d is minus the slope of the whole ray's length
    along the chord; by central differences of plain distances."""
    spectrometer = concave(focused_nm=500.0)
    rotation = 0.31
    t = np.array([math.cos(rotation), math.sin(rotation)])
    n = np.array([-t[1], t[0]])

    def length(w: float, x1: float, x2: float) -> float:
        zone = w * t + (1000.0 - math.sqrt(1000.0**2 - w * w)) * n
        return sum(float(np.hypot(*(point - zone))) for point in arm_points(spectrometer, x1, x2))

    for w, x1, x2 in ((0.0, 0.0, 0.0), (20.0, 0.3, -0.2), (-25.0, 0.0, 1.0)):
        slope = (length(w + 0.01, x1, x2) - length(w - 0.01, x1, x2)) / 0.02
        ours = float(spectrometer.rays.path_per_spacing(rotation, x1, x2, w))
        assert ours == pytest.approx(-slope, abs=1e-9)


def test_rays_sent_out_arrive_where_the_path_difference_says() -> None:
    """Forwards by the local grating law and backwards from the slit: the same rays."""
    spectrometer = concave()
    rays = spectrometer.rays
    assert isinstance(rays, ConcaveRays)
    for zone, x1, x2 in ((0.0, 0.0, 0.0), (24.0, 0.01, 0.5), (-17.0, -0.4, -0.03)):
        path = float(rays.path_per_spacing(0.2, x1, x2, zone))
        assert float(rays.hit_mm(0.2, path_per_spacing=path, entrance_mm=x1, zone_mm=zone)) == pytest.approx(
            x2, abs=1e-9
        )


def test_both_slits_and_the_pole_stand_on_the_rowland_circle() -> None:
    """Textbook: the circle touches the pole and has the sphere's radius for its diameter."""
    spectrometer = concave()
    phi = spectrometer.rotation_rad(SODIUM_NM)
    middle = 500.0 * np.array([-math.sin(phi), math.cos(phi)])
    for point in arm_points(spectrometer, 0.0, 0.0):
        assert float(np.hypot(*(point - middle))) == pytest.approx(500.0, rel=1e-12)


def test_in_focus_its_slit_images_are_those_of_a_plane_mount_with_the_arms_as_focal_lengths() -> None:
    """Textbook: d cos(angle)/(m r), and r = R cos(angle): the widths in nm do not depend on the angle."""
    spectrometer = concave()
    images = spectrometer.bandpass_nm(SODIUM_NM)
    assert images == pytest.approx((1e6 / 568.43 * 0.020 / 1000.0,) * 2, rel=1e-6)
    rays = spectrometer.rays
    assert isinstance(rays, ConcaveRays)
    phi, half = spectrometer.rotation_rad(SODIUM_NM), math.radians(15.0)
    plane = Spectrometer(
        PlaneOptions(
            groove_density_per_mm=568.43,
            ruled_width_mm=50.0,
            focal_length_mm=rays.entrance_arm_mm,
            included_angle_deg=30.0,
            entrance_slit_um=20.0,
            exit_slit_um=20.0 * math.cos(phi + half) / math.cos(phi - half),
        )
    )
    assert images == pytest.approx(plane.bandpass_nm(SODIUM_NM), rel=1e-6)
    recorded, expected = (
        LineProfile(s, wavelength_nm=SODIUM_NM, shape=gaussian(2e-3)) for s in (spectrometer, plane)
    )
    # what the sphere's higher aberrations leave, 6 pm of 42, keeps the foot wider by a little
    assert recorded.fwhm_nm == pytest.approx(expected.fwhm_nm, rel=0.01)
    for offset in np.linspace(-3e-5, 3e-5, 13).tolist():
        assert recorded.share(offset) == pytest.approx(expected.share(offset), abs=0.02)


@pytest.mark.parametrize("included_deg", [10.0, 30.0, 60.0])
def test_turned_to_another_order_a_concave_grating_is_out_of_focus(included_deg: float) -> None:
    """Ray tracing of such a mount gave over 3 nm in order 2 (common practice: one focus, one order)."""
    spectrometer = concave(included_angle_deg=included_deg)
    assert spectrometer.blur_nm(SODIUM_NM, 1) < 0.02
    assert 3.0 < spectrometer.blur_nm(SODIUM_NM, 2) < 4.0
    refocused = concave(included_angle_deg=included_deg, focused_order=2, order=2)
    assert refocused.blur_nm(SODIUM_NM) < 0.05


def test_a_bench_focused_for_each_order_resolves_twice_as_well_in_the_second() -> None:
    """Textbook: slit-limited, the image of a slit on the Rowland circle is w d/(m R) wide: a ratio of 2.00.

    Wide slits, a ruling of 10 mm: diffraction and aberrations are below one part in a thousand."""
    widths = []
    for order in (1, 2):
        spectrometer = concave(
            focused_order=order, order=order, ruled_width_mm=10.0, entrance_slit_um=900.0, exit_slit_um=900.0
        )
        widths.append(LineProfile(spectrometer, wavelength_nm=SODIUM_NM, shape=gaussian(2e-3)).fwhm_nm)
    assert widths[0] / widths[1] == pytest.approx(2.0, rel=2e-3)


def integrated_share(spectrometer: Spectrometer, order: int, fwhm_nm: float, offset_rad: float) -> float:
    """Entrance slit, zones, line and diffraction summed one by one in path difference, no transform."""
    options = spectrometer.options
    turn = spectrometer.rotation_rad(SODIUM_NM, order) + offset_rad
    scale = SODIUM_NM / spectrometer.grooves
    step = scale / 24.0
    grid = np.arange(-40000, 40001) * step
    spread = fftconvolve(
        np.sinc(grid / scale) ** 2,
        np.exp(-4.0 * math.log(2.0) * (grid[20000:-20000] / (order * fwhm_nm)) ** 2),
        mode="same",
    )
    below = np.concatenate(([0.0], np.cumsum((spread[1:] + spread[:-1]) / 2.0)))
    below /= below[-1]
    centre = order * SODIUM_NM
    x1 = ((np.arange(40) + 0.5) / 40.0 - 0.5) * options.entrance_slit_um * 1e-3
    zones = ((np.arange(800) + 0.5) / 800.0 - 0.5) * options.ruled_width_mm
    low, high = (
        np.interp(
            spectrometer.path_difference_nm(turn, x1[:, None], x2, zones[None, :]) - centre, grid, below
        )
        for x2 in (-options.exit_slit_um * 5e-4, options.exit_slit_um * 5e-4)
    )
    return float(np.mean(high - low))


@pytest.mark.parametrize(
    ("order", "included_deg", "tolerance"),
    [
        # as the profile's description promises: over a line in focus the aberrations change by 0.4 pm
        (1, 30.0, 2e-3),
        (1, 60.0, 2e-3),
        # 3.6 nm of blur, over which the defocus itself changes by a per cent
        (2, 30.0, 1.5e-2),
    ],
)
def test_the_recorded_line_of_a_concave_mount_is_the_sum_over_its_rays(
    order: int, included_deg: float, tolerance: float
) -> None:
    spectrometer = concave(included_angle_deg=included_deg)
    profile = LineProfile(spectrometer, wavelength_nm=SODIUM_NM, shape=gaussian(2e-3), order=order)
    half = profile.fwhm_nm * order / 1759.0 / 2.0
    for place in (-2.0, -0.9, -0.4, 0.1, 0.7, 0.95, 1.6):
        exact = integrated_share(spectrometer, order, 2e-3, place * half)
        assert profile.share(place * half) == pytest.approx(exact, abs=tolerance * profile.peak), place


@pytest.mark.parametrize("slit_um", [100.0, 300.0])
def test_wide_slits_make_a_triangle_without_ripples(slit_um: float) -> None:
    """Two equal boxes fold to a triangle whose FWHM is one box; a ruling of 300 mm leaves little diffraction.

    Beside a box of b the tails of sinc^2, of scale s, take about s/(pi^2 b) ln(b/s)."""
    spectrometer = littrow(entrance_slit_um=slit_um, exit_slit_um=slit_um, ruled_width_mm=300.0)
    profile = LineProfile(spectrometer, wavelength_nm=500.0, shape=gaussian(0.5e-3))
    box_nm, scale_nm = spectrometer.bandpass_nm(500.0)[1], 500.0 / 360000.0
    assert box_nm == pytest.approx(slit_um * 0.91e-3, rel=0.01)
    tails = scale_nm / math.pi**2 / box_nm * math.log(box_nm / scale_nm)
    assert profile.fwhm_nm == pytest.approx(box_nm, rel=2.0 * tails)
    places = np.linspace(-0.95, 0.95, 153)
    shares = [profile.share(float(place) * profile.exit_width_rad) for place in places]
    assert shares == pytest.approx((1.0 - np.abs(places)).tolist(), abs=2.0 * tails)
    bends = np.abs(np.diff(shares[:70], 2))
    assert float(bends.max()) < 0.1 * tails, "the flank is straight"


# ---- settings -------------------------------------------------------------------------------------------


def test_a_focus_beyond_the_grating_is_refused() -> None:
    with pytest.raises(ValueError, match="4000 nm in order 1 is beyond what this grating can reach"):
        concave(focused_nm=4000.0)


def test_light_that_would_have_to_come_from_behind_the_grating_is_refused() -> None:
    """Textbook: at a rotation phi light falls in at phi + K; at 90 degrees it grazes the ruling."""
    spectrometer = concave(included_angle_deg=60.0)
    grazing_nm = 2.0 * 1e6 / 568.43 * math.cos(math.radians(30.0)) * math.sin(math.radians(60.0))
    assert spectrometer.rotation_rad(0.999 * grazing_nm) < math.radians(60.0)
    with pytest.raises(ValueError, match="beyond what this grating can reach"):
        spectrometer.rotation_rad(1.001 * grazing_nm)


def test_a_ruling_wider_than_the_sphere_is_refused() -> None:
    table = {
        "mount": "concave",
        "groove_density_per_mm": 568.43,
        "ruled_width_mm": 1000.0,
        "radius_mm": 500.0,
        "included_angle_deg": 30.0,
        "focused_nm": 589.0,
        "entrance_slit_um": 20.0,
        "exit_slit_um": 20.0,
    }
    with pytest.raises(SettingsError, match=r"ruled_width_mm.*below radius_mm = 500"):
        parse_options(ConcaveOptions, table, "world.options.optics")
