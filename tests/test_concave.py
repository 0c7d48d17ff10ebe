"""The concave mount: Rowland's circle, the published light path function, and the blur off its focus."""

from __future__ import annotations

import math
from dataclasses import replace

import numpy as np
import pytest

from analysis.concave import ConcaveMount

# A metre of radius and 14 438 grooves to the inch: a common ruling (568.43 per mm). Focused for sodium in
# order 1.
FOCUSED = ConcaveMount(
    groove_density_per_mm=568.43,
    ruled_width_mm=50.0,
    radius_mm=1000.0,
    included_angle_deg=30.0,
    focused_nm=589.0,
    focused_order=1,
    order=1,
    entrance_slit_um=20.0,
    exit_slit_um=20.0,
    steps_per_radian=1.1e6,
)


def light_path_terms(mount: ConcaveMount, wavelength_nm: float) -> tuple[float, float]:
    """F20 (1/mm) and F30 (1/mm^2) of the meridional ray (Namioka 1959, J. Opt. Soc. Am. 49, 446):

    F20 = (cos^2 a/r - cos a/R + cos^2 b/r' - cos b/R)/2,
    F30 = (sin a/r (cos^2 a/r - cos a/R) + sin b/r' (cos^2 b/r' - cos b/R))/2.
    """
    a, b = mount.angles_rad(wavelength_nm)
    (r, s), big = mount.arms_mm, mount.radius_mm
    t_a = math.cos(a) ** 2 / r - math.cos(a) / big
    t_b = math.cos(b) ** 2 / s - math.cos(b) / big
    return 0.5 * (t_a + t_b), 0.5 * (math.sin(a) / r * t_a + math.sin(b) / s * t_b)


def test_the_arms_are_chords_of_the_rowland_circle() -> None:
    """Rowland 1883: slits and pole lie on a circle whose diameter is the radius of curvature."""
    alpha, beta = FOCUSED.angles_rad(589.0)
    entrance, exit_, pole = (
        np.array([FOCUSED.arms_mm[0] * math.cos(alpha), FOCUSED.arms_mm[0] * math.sin(alpha)]),
        np.array([FOCUSED.arms_mm[1] * math.cos(beta), FOCUSED.arms_mm[1] * math.sin(beta)]),
        np.zeros(2),
    )
    middle = np.array([0.5 * FOCUSED.radius_mm, 0.0])
    for place in (entrance, exit_, pole):
        assert float(np.linalg.norm(place - middle)) == pytest.approx(500.0, rel=1e-12)


def test_the_grating_equation_holds_at_the_pole() -> None:
    """m lambda = d (sin alpha + sin beta), by which the ray at the pole goes."""
    second = replace(FOCUSED, order=2)
    for mount, where in ((FOCUSED, 589.0), (FOCUSED, 310.0), (second, 420.0)):
        alpha, beta = mount.angles_rad(where)
        by_hand = mount.groove_spacing_nm * (math.sin(alpha) + math.sin(beta)) / mount.order
        assert by_hand == pytest.approx(where, rel=1e-12)
        assert math.degrees(alpha - beta) == pytest.approx(30.0)
        assert float(mount.sent_nm(where, np.zeros(1))[0]) == pytest.approx(where, rel=1e-12)


@pytest.mark.parametrize(("order", "where"), [(1, 600.0), (1, 450.0), (2, 589.0), (2, 300.0), (-1, 400.0)])
def test_slope_and_curvature_are_those_of_the_published_light_path(order: int, where: float) -> None:
    """A groove at w is (d/m)(2 F20 w + 3 F30 w^2 + ...) off the pole's wavelength, downwards: where the way
    grows, the next groove's light has less of it to make up. Half a millimetre from the pole both show."""
    mount = replace(FOCUSED, order=order)
    if order < 0:
        mount = replace(mount, focused_order=-1)
    f20, f30 = light_path_terms(mount, where)
    per_mm = mount.groove_spacing_nm / order
    h = 0.5
    below, above = mount.sent_nm(where, np.array([-h, h]))
    assert (above - below) / (2.0 * h) == pytest.approx(-2.0 * f20 * per_mm, rel=1e-4, abs=1e-9)
    assert (above + below - 2.0 * where) / (2.0 * h * h) == pytest.approx(
        -3.0 * f30 * per_mm, rel=1e-4, abs=1e-9
    )


def test_on_the_circle_only_aperture_aberration_is_left() -> None:
    """F20 = F30 = 0 there; the next term of the path grows as w^4, the wavelength's as w^3: half the width,
    an eighth.

    By hand (Welford 1965): d/m * w^3/(2 R^3) (sin a tan a + sin b tan b) at the edge; the mean square of w^3
    over the ruling is 1/7 of the edge's.
    """
    f20, f30 = light_path_terms(FOCUSED, 589.0)
    assert abs(f20) < 1e-18
    assert abs(f30) < 1e-18
    alpha, beta = FOCUSED.angles_rad(589.0)
    bent = math.sin(alpha) * math.tan(alpha) + math.sin(beta) * math.tan(beta)
    edge_nm = FOCUSED.groove_spacing_nm * 25.0**3 / (2.0 * 1000.0**3) * bent
    assert FOCUSED.blur_nm(589.0) == pytest.approx(edge_nm * math.sqrt(12.0 / 7.0), rel=2e-3)
    half = replace(FOCUSED, ruled_width_mm=25.0)
    assert half.blur_nm(589.0) == pytest.approx(FOCUSED.blur_nm(589.0) / 8.0, rel=2e-3)
    assert max(FOCUSED.bandpass_nm(589.0)) > 5.0 * FOCUSED.blur_nm(589.0)


@pytest.mark.parametrize("included_angle_deg", [5.0, 30.0, 60.0])
def test_turned_to_the_second_order_the_lines_blur_by_over_three_nm(included_angle_deg: float) -> None:
    """Ray tracing gave over 3 nm for a metre, 50 mm wide, focused for 589 nm in order 1 and turned to order
    2; the defocus term 2 F20 W d/m (Namioka 1959) alone gives it within 2 %."""
    turned = replace(FOCUSED, order=2, included_angle_deg=included_angle_deg)
    blur_nm = turned.blur_nm(589.0)
    assert 3.0 < blur_nm < 4.0
    defocus_nm = abs(2.0 * light_path_terms(turned, 589.0)[0]) * 50.0 * turned.groove_spacing_nm / 2.0
    assert blur_nm == pytest.approx(defocus_nm, rel=0.02)
    assert replace(turned, focused_order=2).blur_nm(589.0) < 0.1


def test_a_few_nm_from_the_focus_the_blur_outgrows_the_slits() -> None:
    """Once defocus rules it grows as the published 2 F20 W d/m, here 9 pm for each nm, the aperture's w^3
    apart."""
    one, two = (FOCUSED.blur_nm(where) for where in (599.0, 609.0))
    by_hand = [
        2.0 * abs(light_path_terms(FOCUSED, w)[0]) * 50.0 * FOCUSED.groove_spacing_nm for w in (599.0, 609.0)
    ]
    assert two - one == pytest.approx(by_hand[1] - by_hand[0], rel=1e-3)
    assert (two - one) / 10.0 == pytest.approx(0.0090, abs=5e-5)
    assert max(FOCUSED.bandpass_nm(599.0)) < one


def test_off_focus_a_line_moves_little() -> None:
    """What coma moves a line by is the mean of 3 F30 w^2 d/m over the ruling, W^2/12 of the w^2 (Namioka
    1959)."""
    turned = replace(FOCUSED, order=2)
    f30 = light_path_terms(turned, 589.0)[1]
    by_hand_nm = -3.0 * f30 * turned.groove_spacing_nm / 2.0 * 50.0**2 / 12.0
    assert turned.aberration_shift_nm(589.0) == pytest.approx(by_hand_nm, rel=0.02)
    assert abs(FOCUSED.aberration_shift_nm(589.0)) < 1e-5


def test_each_order_on_its_own_circle_the_second_resolves_twice_the_first() -> None:
    """Slit-limited on Rowland's circle: w d cos(beta)/(m R cos(beta)) = w d/(m R), whatever the angle
    (Rowland 1883)."""
    second = replace(FOCUSED, order=2, focused_order=2)
    ratio = second.slit_resolving_power(589.0) / FOCUSED.slit_resolving_power(589.0)
    assert ratio == pytest.approx(2.00, abs=1e-9)
    for width in (*FOCUSED.bandpass_nm(589.0), *(2.0 * w for w in second.bandpass_nm(589.0))):
        assert width == pytest.approx(0.020 * FOCUSED.groove_spacing_nm / 1000.0, rel=1e-12)


def test_steps_there_and_back() -> None:
    for where in (250.0, 589.0, 900.0):
        assert float(FOCUSED.wavelength_nm(FOCUSED.steps(where))) == pytest.approx(where, rel=1e-12)


@pytest.mark.parametrize(
    ("field", "value", "message"),
    [
        ("radius_mm", 0.0, r"radius_mm = 0\.0; allowed: positive"),
        ("focused_nm", math.nan, "focused_nm = nan; allowed: positive"),
        (
            "focused_nm",
            3400.0,
            r"focused_nm = 3400\.0 is beyond this grating in order 1; allowed: below 3282\.",
        ),
        ("focused_order", 0, "focused_order = 0; allowed"),
        ("focused_order", 6, "beyond this grating in order 6; allowed: below 547"),
        ("included_angle_deg", 180.0, "included_angle_deg = .*allowed: 0 to below 180"),
        ("ruled_width_mm", 2000.0, r"ruled_width_mm = 2000\.0; allowed: below the sphere's diameter, 2000"),
    ],
)
def test_concave_mounts_that_make_no_sense(field: str, value: float, message: str) -> None:
    with pytest.raises(ValueError, match=message):
        replace(FOCUSED, **{field: value})  # type: ignore[arg-type]


def test_no_blur_where_no_light_gets() -> None:
    with pytest.raises(ValueError, match="beyond this grating"):
        FOCUSED.blur_nm(3400.0)
