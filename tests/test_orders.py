"""Orders: who stands where somebody else does, and which filter keeps them apart."""

from __future__ import annotations

import math
from dataclasses import replace

import pytest

from analysis.optics import ConcaveMount, LittrowMount, PlaneMount
from analysis.orders import (
    FilterBand,
    filter_is_demanded,
    free_spectral_range_nm,
    overlaps,
    overlaps_near,
    passes,
)

GRATING = {
    "groove_density_per_mm": 600.0,
    "ruled_width_mm": 60.0,
    "entrance_slit_um": 20.0,
    "exit_slit_um": 20.0,
    "steps_per_radian": 1e6,
}
MOUNTS = [
    PlaneMount(**GRATING, order=2, focal_length_mm=500.0, included_angle_deg=24.0),
    LittrowMount(**GRATING, order=2, focal_length_mm=500.0, off_plane_angle_deg=3.0),
    ConcaveMount(
        **GRATING, order=2, radius_mm=1000.0, included_angle_deg=24.0, focused_nm=400.0, focused_order=2
    ),
]


def test_textbook_overlap() -> None:
    """700 nm in order 1, 350 nm in order 2 and 233.3 nm in order 3 leave a grating together (common
    practice)."""
    found = overlaps(wavelength_nm=700.0, order=1)
    assert [(o.order, o.wavelength_nm) for o in found] == [
        (2, 350.0),
        (3, pytest.approx(233.333, abs=1e-3)),
    ]
    assert {o.apparent_nm for o in found} == {700.0}
    assert [o.order for o in overlaps(wavelength_nm=350.0, order=-2)] == [-1, -3]


@pytest.mark.parametrize("mount", MOUNTS, ids=["plane", "littrow", "concave"])
def test_the_overlap_stands_at_the_same_steps(mount: PlaneMount | LittrowMount | ConcaveMount) -> None:
    """Whatever the mount: its own grating equation in the other order gives the same position."""
    for other in overlaps(wavelength_nm=400.0, order=2):
        elsewhere = replace(mount, order=other.order)
        assert elsewhere.steps(other.wavelength_nm) == pytest.approx(mount.steps(400.0), rel=1e-12)


def test_free_spectral_range_is_where_the_next_order_begins() -> None:
    """lambda + lambda/m in order m meets lambda in order m + 1 (Born and Wolf, section 8.6)."""
    for order in (1, 2, 5, -3):
        end_nm = 500.0 + free_spectral_range_nm(wavelength_nm=500.0, order=order)
        assert abs(order) * end_nm == pytest.approx((abs(order) + 1) * 500.0, rel=1e-12)


def test_a_long_pass_filter_clears_the_first_order() -> None:
    """Common practice: a long-pass at 450 nm serves order 1 up to 900 nm; beyond, order 2 comes through
    again."""
    long_pass = FilterBand(name="long-pass 450", shortest_nm=450.0, longest_nm=1100.0)
    assert overlaps(wavelength_nm=589.0, order=1, band=long_pass) == ()
    assert overlaps(wavelength_nm=899.0, order=1, band=long_pass) == ()
    (second,) = overlaps(wavelength_nm=901.0, order=1, band=long_pass)
    assert (second.order, second.wavelength_nm) == (2, 450.5)
    assert passes(long_pass, 450.0)
    assert passes(long_pass, 1100.0)
    assert passes(FilterBand(name="short-pass", shortest_nm=0.0, longest_nm=400.0), 1.0)
    assert not passes(long_pass, 449.999)
    assert passes(None, 1.0)


def test_a_filter_is_demanded_where_the_detector_sees_another_order() -> None:
    """In order 1 from twice the shortest wavelength seen: 370 nm with a detector that begins at 185 nm."""
    assert not filter_is_demanded(wavelength_nm=369.9, order=1)
    assert filter_is_demanded(wavelength_nm=370.1, order=1)
    # and silicon sees the first order of a line in the second up to 1100 nm
    assert [o.order for o in overlaps(wavelength_nm=550.0, order=2, shortest_nm=500.0)] == [1]
    assert not filter_is_demanded(wavelength_nm=551.0, order=2, shortest_nm=500.0)
    # 313 nm in order 2 stands on 626 nm in order 1, and on 209 nm in order 3
    assert filter_is_demanded(wavelength_nm=313.0, order=2)
    assert filter_is_demanded(wavelength_nm=313.0, order=2, longest_nm=600.0)
    assert not filter_is_demanded(wavelength_nm=313.0, order=2, shortest_nm=220.0, longest_nm=600.0)


def test_lamp_lines_of_other_orders_near_a_target() -> None:
    """Mercury 253.652 nm in order 2 stands at 507.304 nm, next to cadmium 508.582 nm (wavelengths:
    memory)."""
    lines_nm = (253.652, 313.155, 169.5, 546.074)
    found = overlaps_near(wavelength_nm=508.582, reach_nm=1.5, order=1, lines_nm=lines_nm)
    assert [(o.order, o.wavelength_nm) for o in found] == [(3, 169.5), (2, 253.652)]
    assert found[1].apparent_nm == pytest.approx(507.304)
    assert overlaps_near(wavelength_nm=508.582, reach_nm=1.2, order=1, lines_nm=lines_nm[:2]) == ()
    uv = FilterBand(name="uv", shortest_nm=200.0, longest_nm=400.0)
    (only,) = overlaps_near(wavelength_nm=508.582, reach_nm=1.5, order=1, lines_nm=lines_nm, band=uv)
    assert only.order == 2
    # a line in its own order is no overlap
    assert overlaps_near(wavelength_nm=546.0, reach_nm=1.0, order=1, lines_nm=(546.074,)) == ()


def test_lamp_lines_of_other_orders_on_the_other_side_of_zero_order() -> None:
    """In order -2 mercury 546.074 nm of order -1 stands at half its wavelength, and the orders keep their
    sign; nothing comes from zero order, however wide the reach."""
    (only,) = overlaps_near(wavelength_nm=273.0, reach_nm=0.5, order=-2, lines_nm=(546.074,))
    assert (only.order, only.wavelength_nm, only.apparent_nm) == (-1, 546.074, 273.037)
    wide = overlaps_near(wavelength_nm=500.0, reach_nm=600.0, order=1, lines_nm=(400.0,))
    assert [(o.order, o.apparent_nm) for o in wide] == [(2, 800.0)]


@pytest.mark.parametrize(
    ("call", "message"),
    [
        (lambda: overlaps(wavelength_nm=-1.0, order=1), r"wavelength_nm = -1\.0; allowed: positive"),
        (lambda: overlaps(wavelength_nm=0.0, order=1), r"wavelength_nm = 0\.0; allowed: positive"),
        (lambda: overlaps(wavelength_nm=1.0, order=0), "order = 0; allowed"),
        (
            lambda: overlaps(wavelength_nm=1.0, order=1, longest_nm=math.inf),
            "longest_nm = inf; allowed: positive, finite",
        ),
        (
            lambda: overlaps(wavelength_nm=1.0, order=1, shortest_nm=9.0, longest_nm=8.0),
            "the shorter one first",
        ),
        (lambda: free_spectral_range_nm(wavelength_nm=math.nan, order=1), "wavelength_nm = nan"),
        (
            lambda: overlaps_near(wavelength_nm=1.0, reach_nm=-1.0, order=1, lines_nm=()),
            r"reach_nm = -1\.0; allowed",
        ),
        (
            lambda: overlaps_near(wavelength_nm=1.0, reach_nm=math.inf, order=1, lines_nm=()),
            "reach_nm = inf; allowed",
        ),
        (
            lambda: overlaps_near(wavelength_nm=1.0, reach_nm=0.1, order=1, lines_nm=(-5.0,)),
            r"wavelength_nm = -5\.0; allowed",
        ),
        (lambda: FilterBand(name="uv", shortest_nm=400.0, longest_nm=300.0), "'uv': shortest_nm = 400"),
    ],
)
def test_what_makes_no_sense(call: object, message: str) -> None:
    with pytest.raises(ValueError, match=message):
        call()  # type: ignore[operator]
