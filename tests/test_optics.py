"""Optics: textbook gratings, both ways, derivatives, slit images, line widths by an independent road."""

from __future__ import annotations

import json
import math
from dataclasses import replace

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from numpy.typing import NDArray
from scipy.optimize import brentq
from scipy.special import voigt_profile

from analysis.optics import (
    SINC2_FWHM,
    ConcaveMount,
    LittrowMount,
    Mount,
    PlaneMount,
    TableMount,
    expected_fwhm_nm,
    mount_from_json,
    mount_to_json,
)

PLANE = PlaneMount(
    groove_density_per_mm=1200.0,
    ruled_width_mm=96.0,
    focal_length_mm=870.0,
    included_angle_deg=22.0,
    order=1,
    entrance_slit_um=20.0,
    exit_slit_um=30.0,
    steps_per_radian=1.1e6,
    zero_order_steps=250.0,
)
TABLE = TableMount((575.0, 575.15, 575.31, 575.46, 575.62, 575.77), "vacuum")
LITTROW = LittrowMount(
    groove_density_per_mm=1200.0,
    ruled_width_mm=96.0,
    focal_length_mm=870.0,
    off_plane_angle_deg=4.0,
    order=1,
    entrance_slit_um=20.0,
    exit_slit_um=30.0,
    steps_per_radian=1.1e6,
)
CONCAVE = ConcaveMount(
    groove_density_per_mm=568.43,
    ruled_width_mm=50.0,
    radius_mm=1000.0,
    included_angle_deg=30.0,
    focused_nm=589.0,
    focused_order=1,
    order=1,
    entrance_slit_um=20.0,
    exit_slit_um=20.0,
    drive="sine-bar",
    steps_per_unit_sine=8.0e5,
)
SINE_BAR = replace(PLANE, drive="sine-bar", steps_per_radian=0.0, steps_per_unit_sine=8.0e5)
MOUNTS: list[PlaneMount | LittrowMount | ConcaveMount] = [PLANE, SINE_BAR, LITTROW, CONCAVE]


def test_sodium_d_lines_in_second_order_need_500_grooves() -> None:
    """Undergraduate optics texts: R = m N, 589.0/0.6 nm in order 2 needs N = 500 (987/2, rounded up)."""
    small = replace(PLANE, groove_density_per_mm=100.0, ruled_width_mm=5.0, order=2)
    assert small.grooves == 500.0
    needed = 589.29 / (589.5924 - 588.9951)  # air wavelengths: NIST ASD
    assert needed == pytest.approx(987.0, abs=1.0)
    assert small.theoretical_resolving_power > needed
    too_few = replace(small, ruled_width_mm=4.9)
    assert too_few.theoretical_resolving_power < needed


def test_sodium_at_27_degrees_42_minutes_gives_406_grooves_per_mm() -> None:
    """Undergraduate optics texts: both first orders of 589.3 nm enclose 27 deg 42' at normal incidence.

    Normal incidence here: the arms enclose 13 deg 51', the grating stands half of it on the far side of zero
    order, and the light leaves in order -1.
    """
    angle_deg = 0.5 * (27.0 + 42.0 / 60.0)
    mount = replace(
        PLANE, groove_density_per_mm=406.0, included_angle_deg=angle_deg, order=-1, zero_order_steps=0.0
    )
    steps = mount.steps_per_radian * math.radians(-0.5 * angle_deg)
    assert float(mount.incidence_rad(steps)) == pytest.approx(0.0, abs=1e-12)
    assert math.degrees(float(mount.diffraction_rad(steps))) == pytest.approx(-angle_deg)
    assert float(mount.wavelength_nm(steps)) == pytest.approx(589.3, rel=0.5 / 406.0)


def test_14438_grooves_per_inch() -> None:
    """A common ruling: 568.43 per mm, spacing 1759.25 nm (computed from the inch of 25.4 mm)."""
    mount = replace(PLANE, groove_density_per_mm=14_438.0 / 25.4)
    assert mount.groove_density_per_mm == pytest.approx(568.43, abs=0.005)
    assert mount.groove_spacing_nm == pytest.approx(1759.25, abs=0.005)


def test_the_general_grating_equation_holds_with_its_angles() -> None:
    """m lambda = d (sin alpha + sin beta), the arms enclosing the same angle everywhere."""
    for order in (1, 2, -1):
        mount = replace(PLANE, order=order)
        steps = np.linspace(-400_000.0, 400_000.0, 41)
        alpha, beta = mount.incidence_rad(steps), mount.diffraction_rad(steps)
        by_hand = mount.groove_spacing_nm * (np.sin(alpha) + np.sin(beta)) / order
        np.testing.assert_allclose(mount.wavelength_nm(steps), by_hand, rtol=1e-12, atol=1e-10)
        np.testing.assert_allclose(alpha - beta, math.radians(22.0), rtol=1e-12)


def test_zero_order_is_a_mirror() -> None:
    assert float(PLANE.wavelength_nm(250)) == 0.0
    assert PLANE.steps(0.0) == 250.0


@given(
    wavelength_nm=st.floats(10.0, 1200.0),
    density=st.floats(50.0, 1400.0),
    angle_deg=st.floats(0.0, 40.0),
    order=st.sampled_from([1, -1]),
    steps_per_radian=st.sampled_from([1.1e6, -3.7e5, 2.0e7]),
)
def test_plane_mount_there_and_back_again(
    wavelength_nm: float, density: float, angle_deg: float, order: int, steps_per_radian: float
) -> None:
    mount = replace(
        PLANE,
        groove_density_per_mm=density,
        included_angle_deg=angle_deg,
        order=order,
        steps_per_radian=steps_per_radian,
    )
    steps = mount.steps(wavelength_nm)
    assert float(mount.wavelength_nm(steps)) == pytest.approx(wavelength_nm, rel=1e-9)


@given(row=st.floats(0.0, 5.0))
def test_table_mount_there_and_back_again(row: float) -> None:
    assert TABLE.steps(float(TABLE.wavelength_nm(row))) == pytest.approx(row, abs=1e-9)


@given(steps=st.floats(-1_000.0, 900_000.0))
def test_dispersion_is_the_slope_of_the_wavelength(steps: float) -> None:
    h = 100.0
    below, above = PLANE.wavelength_nm([steps - h, steps + h])
    numeric = (above - below) / (2.0 * h)
    assert PLANE.dispersion_nm_per_step(steps) == pytest.approx(numeric, rel=1e-7)


def test_slit_images_are_as_wide_as_moving_the_slit_by_its_width() -> None:
    """A slit edge w/2 off the axis tilts its ray by w/(2f); put that into d (sin alpha + sin beta)/m."""
    wavelength_nm = 313.155
    steps = PLANE.steps(wavelength_nm)
    alpha, beta = float(PLANE.incidence_rad(steps)), float(PLANE.diffraction_rad(steps))
    d = PLANE.groove_spacing_nm
    entrance, exit_ = PLANE.bandpass_nm(wavelength_nm)
    tilt = 0.020 / 870.0 / 2.0
    assert entrance == pytest.approx(d * (math.sin(alpha + tilt) - math.sin(alpha - tilt)), rel=1e-9)
    tilt = 0.030 / 870.0 / 2.0
    assert exit_ == pytest.approx(d * (math.sin(beta + tilt) - math.sin(beta - tilt)), rel=1e-9)
    assert PLANE.reciprocal_linear_dispersion_nm_per_mm(wavelength_nm) == pytest.approx(exit_ / 0.030)
    assert PLANE.slit_resolving_power(wavelength_nm) == pytest.approx(wavelength_nm / exit_)


def test_bandpass_falls_with_the_order() -> None:
    second = replace(PLANE, order=2)
    # the same angles serve 626.31 nm in order 1 and 313.155 nm in order 2 (order overlap)
    assert second.steps(313.155) == pytest.approx(PLANE.steps(626.31), rel=1e-12)
    for wide, narrow in zip(PLANE.bandpass_nm(626.31), second.bandpass_nm(313.155), strict=True):
        assert narrow == pytest.approx(0.5 * wide)


def test_diffraction_is_the_width_of_sinc_squared() -> None:
    half = brentq(lambda x: np.sinc(x) ** 2 - 0.5, 0.3, 0.6, xtol=1e-15)
    assert pytest.approx(2.0 * half, rel=1e-12) == SINC2_FWHM
    assert PLANE.diffraction_fwhm_nm(313.155) == pytest.approx(SINC2_FWHM * 313.155 / 115_200.0)
    assert PLANE.diffraction_fwhm_nm(313.155) == pytest.approx(2.41e-3, abs=5e-6)


@pytest.mark.parametrize("wavelength_nm", [1700.0, -1700.0, 1e9, math.inf, math.nan])
def test_wavelengths_the_grating_cannot_reach(wavelength_nm: float) -> None:
    with pytest.raises(ValueError, match=r"wavelength_nm = .*allowed: below 1605\.987"):
        PLANE.steps(wavelength_nm)
    with pytest.raises(ValueError, match="beyond this grating"):
        PLANE.bandpass_nm(wavelength_nm)


def test_reach_ends_where_the_light_grazes() -> None:
    """At lambda = d (1 + cos 2K) one ray grazes: its angle is 90 degrees, the other's 90 degrees - 2K."""
    longest = PLANE.groove_spacing_nm * (math.sin(math.radians(90.0 - 22.0)) + 1.0)
    assert math.isfinite(PLANE.steps(longest * (1.0 - 1e-9)))
    with pytest.raises(ValueError, match="beyond this grating"):
        PLANE.steps(longest * (1.0 + 1e-9))


def test_steps_that_turn_the_grating_away() -> None:
    with pytest.raises(ValueError, match=r"steps = 1600000\.0 turns the grating too far.*allowed: less than"):
        PLANE.wavelength_nm([0, 1_600_000])
    with pytest.raises(ValueError, match="too far"):
        PLANE.wavelength_nm(math.nan)


@pytest.mark.parametrize(
    ("field", "value"),
    [
        ("groove_density_per_mm", 0.0),
        ("groove_density_per_mm", math.nan),
        ("ruled_width_mm", -1.0),
        ("focal_length_mm", math.inf),
        ("entrance_slit_um", -1.0),
        ("exit_slit_um", math.nan),
        ("included_angle_deg", 180.0),
        ("order", 0),
        ("steps_per_radian", 0.0),
        ("zero_order_steps", math.nan),
        ("medium", "water"),
    ],
)
def test_plane_mounts_that_make_no_sense(field: str, value: float | str) -> None:
    with pytest.raises(ValueError, match=f"{field} = .*allowed"):
        replace(PLANE, **{field: value})  # type: ignore[arg-type]


def test_without_slits_there_is_no_slit_limit() -> None:
    bare = replace(PLANE, entrance_slit_um=0.0, exit_slit_um=0.0)
    assert bare.bandpass_nm(313.0) == (0.0, 0.0)
    with pytest.raises(ValueError, match="limit nothing"):
        bare.slit_resolving_power(313.0)


def test_a_recorded_spectrum_stands_row_by_row() -> None:
    assert TABLE.medium == "vacuum"
    np.testing.assert_allclose(TABLE.wavelength_nm(np.arange(6)), TABLE.wavelengths, rtol=0.0)
    assert float(TABLE.wavelength_nm(1.5)) == pytest.approx(575.23)
    assert TABLE.bandpass_nm(575.15) == (pytest.approx(0.155), 0.0)
    assert TABLE.diffraction_fwhm_nm(575.15) == 0.0
    assert TABLE.dispersion_nm_per_step(0) == pytest.approx(0.15)


@pytest.mark.parametrize("row", [-0.001, 5.001, math.nan])
def test_no_extrapolation_of_rows(row: float) -> None:
    with pytest.raises(ValueError, match="allowed: 0 to 5"):
        TABLE.wavelength_nm(row)
    with pytest.raises(ValueError, match="allowed: 0 to 5"):
        TABLE.dispersion_nm_per_step(row)


@pytest.mark.parametrize("wavelength_nm", [574.999, 575.771, math.nan])
def test_no_extrapolation_of_wavelengths(wavelength_nm: float) -> None:
    for ask in (TABLE.steps, TABLE.bandpass_nm, TABLE.diffraction_fwhm_nm):
        with pytest.raises(ValueError, match=r"allowed: 575 to 575\.77"):
            ask(wavelength_nm)


@pytest.mark.parametrize(
    ("wavelengths", "message"),
    [
        ((575.0,), "two rows"),
        ((), "two rows"),
        ((575.0, 575.0), "ascending"),
        ((576.0, 575.0), "ascending"),
        ((575.0, math.nan), "finite"),
        ((-1.0, 575.0), "positive"),
    ],
)
def test_tables_that_are_no_scale(wavelengths: tuple[float, ...], message: str) -> None:
    with pytest.raises(ValueError, match=message):
        TableMount(wavelengths, "air")


def test_a_table_needs_a_medium() -> None:
    with pytest.raises(ValueError, match="medium = 'glass'; allowed: 'air', 'vacuum'"):
        TableMount((575.0, 576.0), "glass")


def test_all_mounts_are_mounts() -> None:
    mounts: list[Mount] = [PLANE, LITTROW, CONCAVE, TABLE]
    assert [mount.medium for mount in mounts] == ["air", "air", "air", "vacuum"]
    assert [mount.order for mount in mounts] == [1, 1, 1, 1]
    assert [mount.blur_nm(575.2) > 0.0 for mount in mounts] == [False, False, True, False]


# --- Littrow, sine bar, JSON --------------------------------------------------------------------------------


def test_littrow_sends_the_light_back_the_way_it_came() -> None:
    """Textbook: 2 d sin phi = m lambda; 1200 per mm blazed at 500 nm has its facets at 17 deg 27'
    (catalogues)."""
    flat = replace(LITTROW, off_plane_angle_deg=0.0)
    alpha, beta = flat.angles_rad(500.0)
    assert alpha == beta
    assert math.degrees(alpha) == pytest.approx(17.0 + 27.5 / 60.0, abs=0.01)


def test_off_plane_littrow_by_vectors() -> None:
    """Both directions stand gamma above or below the plane of dispersion: P = d t.(u + v), t across the
    grooves."""
    gamma = math.radians(4.0)
    for wavelength_nm in (250.0, 546.074, 1200.0):
        phi, _ = LITTROW.angles_rad(wavelength_nm)
        u = np.array([math.cos(gamma) * math.sin(phi), math.sin(gamma), math.cos(gamma) * math.cos(phi)])
        v = u * [1.0, -1.0, 1.0]
        assert LITTROW.groove_spacing_nm * (u + v)[0] == pytest.approx(wavelength_nm, rel=1e-12)
        # a slit edge w/2 aside tilts its ray in the plane by w/(2 f)
        aside = np.array([math.cos(phi), 0.0, -math.sin(phi)]) * 0.5 * 0.030 / 870.0
        ends = [(v + side) / np.linalg.norm(v + side) for side in (aside, -aside)]
        wide_nm = LITTROW.groove_spacing_nm * float((ends[0] - ends[1])[0])
        assert LITTROW.bandpass_nm(wavelength_nm)[1] == pytest.approx(wide_nm, rel=1e-8)


@given(wavelength_nm=st.floats(200.0, 1100.0), number=st.integers(0, 3), order=st.sampled_from([1, -1]))
def test_every_mount_there_and_back_again(wavelength_nm: float, number: int, order: int) -> None:
    mount = replace(MOUNTS[number], order=order)
    steps = mount.steps(wavelength_nm)
    assert float(mount.wavelength_nm(steps)) == pytest.approx(wavelength_nm, rel=1e-9)
    below, above = mount.wavelength_nm([steps - 50.0, steps + 50.0])
    assert mount.dispersion_nm_per_step(steps) == pytest.approx((above - below) / 100.0, rel=1e-6)


def test_on_a_sine_bar_the_wavelength_goes_evenly() -> None:
    """What sine bars are built for (common practice): the same number of nm a step everywhere."""
    wavelengths = SINE_BAR.wavelength_nm(250.0 + np.arange(0.0, 500_000.0, 50_000.0))
    np.testing.assert_allclose(np.diff(wavelengths), wavelengths[1], rtol=1e-11)
    assert wavelengths[1] == pytest.approx(SINE_BAR.nm_per_sine / 16.0, rel=1e-12)
    # the same rotation as with the rotary drive, so the same reach
    assert SINE_BAR.steps(546.074) != pytest.approx(PLANE.steps(546.074), rel=1e-3)
    assert SINE_BAR.angles_rad(546.074) == PLANE.angles_rad(546.074)
    with pytest.raises(ValueError, match=r"turns the grating too far.*allowed: less than 785302 steps"):
        SINE_BAR.wavelength_nm(790_000.0)


def test_anamorphism_is_how_the_two_slit_images_compare() -> None:
    """cos alpha/cos beta (textbook): equal slits, equal arms, the entrance slit's box over the exit
    slit's."""
    equal = replace(PLANE, exit_slit_um=20.0)
    entrance, exit_ = equal.bandpass_nm(589.3)
    alpha, beta = equal.angles_rad(589.3)
    assert equal.anamorphism(589.3) == pytest.approx(entrance / exit_, rel=1e-12)
    assert equal.anamorphism(589.3) == pytest.approx(math.cos(alpha) / math.cos(beta), rel=1e-12)
    assert replace(LITTROW, exit_slit_um=20.0).anamorphism(589.3) == 1.0


@pytest.mark.parametrize("mount", [*MOUNTS, TABLE], ids=["plane", "sine bar", "littrow", "concave", "table"])
def test_a_mount_comes_back_from_its_json(mount: Mount) -> None:
    assert mount_from_json(json.loads(json.dumps(mount_to_json(mount)))) == mount


def test_a_plane_mount_written_before_there_were_drives_to_choose_from() -> None:
    old = {
        name: value
        for name, value in mount_to_json(PLANE).items()
        if name not in ("drive", "steps_per_unit_sine")
    }
    assert mount_from_json(old) == PLANE


@pytest.mark.parametrize(
    ("fields", "message"),
    [
        ({"kind": "prism"}, "kind = 'prism'; allowed: 'plane', 'littrow', 'concave', 'table'"),
        ({}, "kind = None; allowed"),
        ({"kind": "table", "medium": "air"}, "a mount of kind 'table' is not made of medium: 'wavelengths'"),
        ({"kind": "plane", "order": 1}, "a mount of kind 'plane' is not made of order"),
        ({"kind": "table", "medium": "air", "wavelengths": [2.0, 1.0]}, "ascending"),
    ],
)
def test_json_that_is_no_mount(fields: dict[str, object], message: str) -> None:
    with pytest.raises(ValueError, match=message):
        mount_from_json(fields)


@pytest.mark.parametrize(
    ("mount", "field", "value"),
    [
        (PLANE, "drive", "belt"),
        (SINE_BAR, "steps_per_unit_sine", 0.0),
        (LITTROW, "off_plane_angle_deg", 90.0),
        (LITTROW, "off_plane_angle_deg", -1.0),
        (LITTROW, "focal_length_mm", 0.0),
    ],
)
def test_other_mounts_that_make_no_sense(mount: PlaneMount, field: str, value: float | str) -> None:
    with pytest.raises(ValueError, match=f"{field} = .*allowed"):
        replace(mount, **{field: value})  # type: ignore[arg-type]


# --- the expected width -------------------------------------------------------------------------------------


def brute_fwhm(boxes: tuple[float, float], gaussian: float, lorentzian: float) -> float:
    """Discrete convolution on a fine grid: another road, good to about 1e-5 of the width."""
    reach = 2.0 * (sum(boxes) + gaussian + lorentzian)
    x: NDArray[np.float64] = np.linspace(-reach, reach, 32_001)
    step = x[1] - x[0]
    curve: NDArray[np.float64] = voigt_profile(x, gaussian / 2.354_820_045_030_949, 0.5 * lorentzian)
    for box in boxes:
        if box > 0.0:
            cumulated = np.concatenate([[0.0], np.cumsum(0.5 * (curve[1:] + curve[:-1])) * step])
            upper = np.interp(x + 0.5 * box, x, cumulated)
            curve = (upper - np.interp(x - 0.5 * box, x, cumulated)) / box
    above = np.flatnonzero(curve >= 0.5 * curve[16_000])
    k = int(above[-1])
    edge = x[k] + step * (curve[k] - 0.5 * curve[16_000]) / (curve[k] - curve[k + 1])
    return float(2.0 * edge)


@pytest.mark.parametrize(
    ("boxes", "gaussian", "lorentzian"),
    [
        ((0.019, 0.018), 0.003, 0.0),
        ((0.019, 0.0), 0.006, 0.0),
        ((0.019, 0.010), 0.019, 0.004),
        ((0.0, 0.02), 0.0, 0.01),
        ((0.02, 0.02), 0.002, 0.03),
        ((0.0, 0.0), 0.01, 0.01),
        ((0.03, 0.001), 0.01, 0.002),
    ],
)
def test_expected_width_against_a_discrete_convolution(
    boxes: tuple[float, float], gaussian: float, lorentzian: float
) -> None:
    ours = expected_fwhm_nm(box_widths_nm=boxes, gaussian_fwhm_nm=gaussian, lorentzian_fwhm_nm=lorentzian)
    assert ours == pytest.approx(brute_fwhm(boxes, gaussian, lorentzian), rel=3e-5)


def test_widths_in_closed_form() -> None:
    def width(a: float, b: float, g: float, w: float = 0.0) -> float:
        return expected_fwhm_nm(box_widths_nm=(a, b), gaussian_fwhm_nm=g, lorentzian_fwhm_nm=w)

    assert width(0.0, 0.0, 0.7) == pytest.approx(0.7, rel=1e-12)
    assert width(0.0, 0.0, 0.0, 0.7) == pytest.approx(0.7, rel=1e-12)
    assert width(0.3, 0.3, 0.0) == 0.3  # triangle
    assert width(0.1, 0.3, 0.0) == 0.3  # trapezoid
    # one box and a Lorentzian: arctan(u + a) - arctan(u - a) is halved at u^2 = 1 + a^2 (a, u in half widths)
    assert width(0.0, 0.5, 0.0, 0.2) == pytest.approx(0.2 * math.sqrt(1.0 + 2.5**2), rel=1e-10)


def test_width_of_extreme_ratios() -> None:
    """A needle through wide slits and a broad line through needles: the wider one's width, to first order."""
    needle = expected_fwhm_nm(box_widths_nm=(1.0, 0.8), gaussian_fwhm_nm=1e-7)
    assert needle == pytest.approx(1.0, rel=1e-7)
    broad = expected_fwhm_nm(box_widths_nm=(1e-7, 1e-9), gaussian_fwhm_nm=1.0)
    assert broad == pytest.approx(1.0, rel=1e-12)
    # equal slits: the top of the triangle is rounded by E|v|/a, and the half height moves by as much
    sigma = 1e-4
    rounded = expected_fwhm_nm(box_widths_nm=(1.0, 1.0), gaussian_fwhm_nm=sigma * 2.354_820_045)
    assert rounded - 1.0 == pytest.approx(sigma * math.sqrt(2.0 / math.pi), rel=1e-3)


def brute_with_diffraction(
    boxes: tuple[float, ...], gaussian: float, lorentzian: float, diffraction: float
) -> float:
    """Boxes and Voigt line folded on a fine grid, then with sinc^2, whose wings the grid holds far out."""
    x: NDArray[np.float64] = np.arange(-(2**17), 2**17) * (min(diffraction, max(gaussian, 1e-3)) / 60.0)
    step = x[1] - x[0]
    parts = [np.sinc(x * SINC2_FWHM / diffraction) ** 2]
    parts += [np.clip(0.5 + (0.5 * box - np.abs(x)) / step, 0.0, 1.0) for box in boxes if box > 0.0]
    if gaussian > 0.0 or lorentzian > 0.0:
        parts.append(voigt_profile(x, gaussian / 2.354_820_045_030_949, 0.5 * lorentzian))
    product = np.prod([np.fft.rfft(np.fft.ifftshift(part)) for part in parts], axis=0)
    curve = np.fft.fftshift(np.fft.irfft(product, x.size))
    middle = 2**17
    k = int(np.flatnonzero(curve >= 0.5 * curve[middle])[-1])
    return float(2.0 * (x[k] + step * (curve[k] - 0.5 * curve[middle]) / (curve[k] - curve[k + 1])))


@pytest.mark.parametrize(
    ("boxes", "gaussian", "lorentzian", "diffraction"),
    [
        ((0.019, 0.018), 0.003, 0.0, 0.0024),
        ((0.019, 0.019), 0.0, 0.0, 0.01),
        ((0.02, 0.01, 0.03), 0.004, 0.0, 0.003),
        ((0.001, 0.001), 0.002, 0.001, 0.02),
        ((), 0.01, 0.0, 0.01),
    ],
)
def test_expected_width_with_diffraction_against_a_discrete_convolution(
    boxes: tuple[float, ...], gaussian: float, lorentzian: float, diffraction: float
) -> None:
    """A Gaussian of the same FWHM in place of sinc^2 is 2 % off in the first case."""
    ours = expected_fwhm_nm(
        box_widths_nm=boxes,
        gaussian_fwhm_nm=gaussian,
        lorentzian_fwhm_nm=lorentzian,
        diffraction_fwhm_nm=diffraction,
    )
    assert ours == pytest.approx(brute_with_diffraction(boxes, gaussian, lorentzian, diffraction), rel=2e-4)


def test_widths_in_closed_form_by_waves() -> None:
    """Diffraction alone; and three equal boxes, a parabola of half height at 3/2 - sqrt(3)/2 (de Boor
    1978)."""
    alone = expected_fwhm_nm(box_widths_nm=(), gaussian_fwhm_nm=0.0, diffraction_fwhm_nm=0.7)
    assert alone == pytest.approx(0.7, rel=1e-12)
    three = expected_fwhm_nm(box_widths_nm=(0.5, 0.5, 0.5), gaussian_fwhm_nm=0.0)
    assert three == pytest.approx(0.5 * (3.0 - math.sqrt(3.0)), rel=1e-8)


def test_both_ways_to_the_width_meet() -> None:
    """Waves (forced by a third box of no account) and panels, each a road of its own."""
    for lorentzian in (0.0, 0.004):
        widths = {"gaussian_fwhm_nm": 0.003, "lorentzian_fwhm_nm": lorentzian}
        by_panels = expected_fwhm_nm(box_widths_nm=(0.019, 0.018), **widths)
        by_waves = expected_fwhm_nm(box_widths_nm=(0.019, 0.018, 1e-9), **widths)
        assert by_waves == pytest.approx(by_panels, rel=1e-9)


def test_fine_diffraction_goes_over_into_a_gaussian() -> None:
    """Where the two ways meet, at 1/1000 of the wider box, the width jumps by less than a thousandth."""
    for boxes in ((1.0, 1.0), (1.0, 0.5), (1.0, 0.0)):
        below, above = (
            expected_fwhm_nm(box_widths_nm=boxes, gaussian_fwhm_nm=0.0, diffraction_fwhm_nm=w)
            for w in (0.999e-3, 1.001e-3)
        )
        assert below == pytest.approx(above, rel=1e-3)


def test_order_of_the_slits_does_not_matter() -> None:
    one = expected_fwhm_nm(box_widths_nm=(0.02, 0.011), gaussian_fwhm_nm=0.004)
    assert one == expected_fwhm_nm(box_widths_nm=(0.011, 0.02), gaussian_fwhm_nm=0.004)


@pytest.mark.parametrize(
    ("boxes", "gaussian", "lorentzian", "message"),
    [
        ((-0.1, 0.1), 0.1, 0.0, "width -0.1 nm"),
        ((0.1, 0.1), math.nan, 0.0, "width nan nm"),
        ((0.1, 0.1), 0.1, math.inf, "width inf nm"),
        ((0.0, 0.0), 0.0, 0.0, "all widths are zero"),
    ],
)
def test_widths_that_are_none(
    boxes: tuple[float, float], gaussian: float, lorentzian: float, message: str
) -> None:
    with pytest.raises(ValueError, match=message):
        expected_fwhm_nm(box_widths_nm=boxes, gaussian_fwhm_nm=gaussian, lorentzian_fwhm_nm=lorentzian)
