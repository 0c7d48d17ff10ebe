"""Resolving power: each part alone, all together, and what a source line leaves of it."""

from __future__ import annotations

import math
from dataclasses import replace

import pytest

from analysis.optics import ConcaveMount, PlaneMount, TableMount
from analysis.resolving import resolving_power

PLANE = PlaneMount(
    groove_density_per_mm=1200.0,
    ruled_width_mm=96.0,
    focal_length_mm=870.0,
    included_angle_deg=22.0,
    order=1,
    entrance_slit_um=20.0,
    exit_slit_um=20.0,
    steps_per_radian=1.1e6,
)


def test_without_slits_and_source_width_diffraction_is_left() -> None:
    """|m| N, Rayleigh's measure (textbook), over 0.886, the FWHM of sinc^2 (published)."""
    bare = replace(PLANE, entrance_slit_um=0.0, exit_slit_um=0.0)
    found = resolving_power(bare, wavelength_nm=313.155, source_gaussian_fwhm_nm=0.0)
    assert found.observed == found.instrument == pytest.approx(115_200.0 / 0.885893, rel=1e-6)
    assert found.diffraction == pytest.approx(found.instrument, rel=1e-12)
    assert found.slits == found.blur == math.inf


def test_wide_slits_rule_alone() -> None:
    """w d cos(beta)/(m f): 500 um slits are a hundred times as wide as diffraction."""
    wide = replace(PLANE, entrance_slit_um=300.0, exit_slit_um=500.0)
    found = resolving_power(wide, wavelength_nm=546.074, source_gaussian_fwhm_nm=0.001)
    beta = wide.angles_rad(546.074)[1]
    by_hand_nm = 0.5 * wide.groove_spacing_nm * math.cos(beta) / 870.0
    assert found.slits == pytest.approx(546.074 / by_hand_nm, rel=1e-12)
    assert found.observed == pytest.approx(found.slits, rel=1e-3)


def test_the_source_width_is_stated_and_counts() -> None:
    """A broad line rules: its own width, and what the 1/x^2 wings of sinc^2 add to a Lorentzian's, D/pi with
    D = lambda/(m N), by the slope of the two transforms at 0."""
    sharp = resolving_power(PLANE, wavelength_nm=313.155, source_gaussian_fwhm_nm=0.001)
    broad = resolving_power(
        PLANE, wavelength_nm=313.155, source_gaussian_fwhm_nm=0.0, source_lorentzian_fwhm_nm=1.0
    )
    assert sharp.instrument == broad.instrument > sharp.observed > broad.observed
    by_hand_nm = 1.0 + 313.155 / 115_200.0 / math.pi
    assert broad.observed == pytest.approx(313.155 / by_hand_nm, rel=5e-4)
    assert (sharp.source_gaussian_fwhm_nm, broad.source_lorentzian_fwhm_nm) == (0.001, 1.0)
    assert sharp.observed * sharp.observed_fwhm_nm == pytest.approx(313.155)


def test_off_its_focus_a_concave_mount_is_ruled_by_the_blur() -> None:
    mount = ConcaveMount(
        groove_density_per_mm=568.43,
        ruled_width_mm=50.0,
        radius_mm=1000.0,
        included_angle_deg=30.0,
        focused_nm=589.0,
        focused_order=1,
        order=2,
        entrance_slit_um=20.0,
        exit_slit_um=20.0,
        steps_per_radian=1.1e6,
    )
    found = resolving_power(mount, wavelength_nm=589.0, source_gaussian_fwhm_nm=0.002)
    assert found.observed == pytest.approx(found.blur, rel=1e-3)
    assert found.observed < 200.0 < 10_000.0 < found.slits
    focused = resolving_power(
        replace(mount, focused_order=2), wavelength_nm=589.0, source_gaussian_fwhm_nm=0.002
    )
    assert focused.observed > 20_000.0


def test_a_table_has_its_pixel() -> None:
    table = TableMount((575.0, 575.1, 575.2, 575.3), "vacuum")
    found = resolving_power(table, wavelength_nm=575.1, source_gaussian_fwhm_nm=0.0)
    assert found.instrument == found.slits == pytest.approx(5751.0)
    assert found.diffraction == math.inf


def test_what_makes_no_sense() -> None:
    with pytest.raises(ValueError, match="beyond this grating"):
        resolving_power(PLANE, wavelength_nm=5000.0, source_gaussian_fwhm_nm=0.0)
    with pytest.raises(ValueError, match=r"width -1\.0 nm; allowed"):
        resolving_power(PLANE, wavelength_nm=500.0, source_gaussian_fwhm_nm=-1.0)
