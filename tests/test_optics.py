"""Optics: textbook gratings, both ways, derivatives, slit images, line widths by an independent road."""

from __future__ import annotations

import math
from dataclasses import replace

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from numpy.typing import NDArray
from scipy.optimize import brentq
from scipy.special import voigt_profile

from analysis.optics import SINC2_FWHM, Mount, PlaneMount, TableMount, expected_fwhm_nm

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


def test_both_mounts_are_mounts() -> None:
    mounts: list[Mount] = [PLANE, TABLE]
    assert [mount.medium for mount in mounts] == ["air", "vacuum"]


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
