"""All light of the simulated instrument: orders, filters, ghosts, stray light, continuum, cells."""

from __future__ import annotations

import json
import math
from typing import Any

import numpy as np
import pytest
from scipy.signal import fftconvolve
from scipy.special import jv
from simbench import START_NS, StoppedClock, lamp, line, rate, world

from drivers.errors import SettingsError
from simulators.world import World

ORDERS = {"order_efficiency": [1.0, 0.4, 0.2]}
LITTROW = {"mount": "littrow", "included_angle_deg": None}
CONCAVE = {"mount": "concave", "focal_length_mm": None, "radius_mm": 900.0}


def light_over_rotation(bench: World, low_rad: float, high_rad: float, points: int = 6001) -> float:
    """The light summed over a stretch of rotations."""
    places = np.linspace(low_rad, high_rad, points)
    return float(np.trapezoid([rate(bench, float(x)) for x in places], places))


@pytest.mark.parametrize(
    ("optics", "keys"),
    [
        ({}, {}),
        ({"order": 2, "order_efficiency": [0.0, 1.0]}, {"lorentz_fwhm_pm": 0.5}),
        (LITTROW, {"components": [{"offset_pm": k, "strength": 1.0} for k in (-9.0, 9.0)]}),
        (CONCAVE | {"focused_nm": 313.155}, {}),
        (CONCAVE | {"focused_nm": 305.0}, {}),
        ({"entrance_slit_um": 80.0, "exit_slit_um": 60.0, "coma_um": 3.0}, {}),
    ],
    ids=["plane", "order 2", "littrow", "in focus", "out of focus", "wide"],
)
def test_no_light_is_lost_or_made(optics: dict[str, Any], keys: dict[str, Any]) -> None:
    """Turned through a line, the exit slit passes strength times its own width: shape, aberrations and
    diffraction only move light about. Wings beyond the table go on as 1/x^2."""
    bench = world(optics=optics, lamp=lamp(line(313.155, 100.0, **keys)))
    profile = bench.lines[0].profile
    edge = profile.reach_rad
    inside = light_over_rotation(bench, profile.rotation_rad - edge, profile.rotation_rad + edge)
    total = inside + 2.0 * 100.0 * profile.wing_rad2 / edge
    half = bench.options.optics.exit_slit_um * 5e-4
    low, high = (
        float(bench.spectrometer.path_difference_nm(profile.rotation_rad, 0.0, x)) for x in (-half, half)
    )
    turned = 1e-7
    steep = (
        float(bench.spectrometer.path_difference_nm(profile.rotation_rad + turned, 0.0, 0.0))
        - float(bench.spectrometer.path_difference_nm(profile.rotation_rad - turned, 0.0, 0.0))
    ) / (2.0 * turned)
    assert total == pytest.approx(100.0 * (high - low) / steep, rel=5e-4)


def test_far_wings_summed_by_region_are_the_sum_of_all_lines() -> None:
    """Seed 5: 60 lines in three orders with ghosts, against every line's own profile one by one."""
    draw = np.random.Generator(np.random.Philox(5))
    lines = [line(float(draw.uniform(250, 700)), float(draw.uniform(1, 1e4))) for _ in range(60)]
    ghosts = {"grooves_per_period": 720.0, "amplitude_nm": 3.0}
    bench = world(optics=ORDERS | {"ghosts": ghosts}, lamp=lamp(*lines))
    entries = bench.spectrum.entries
    assert len(entries) > 500
    for place in (*draw.uniform(0.1, 0.5, 60), *(e.profile.rotation_rad + 3e-5 for e in entries[:40])):
        whole = sum(
            e.strength_per_s * e.profile.share(float(place) - e.profile.rotation_rad) for e in entries
        )
        assert rate(bench, float(place)) == pytest.approx(whole, rel=1e-6, abs=1e-5)


# ---- orders and filters ---------------------------------------------------------------------------------


def test_a_line_in_a_higher_order_stands_where_its_multiple_stands() -> None:
    """Textbook: m1 lambda1 = m2 lambda2. 253.652 nm in order 3 and 760.956 nm in order 1, in air as it is."""
    bench = world(optics=ORDERS, lamp=lamp(line(253.652, 1000.0)))
    bench_nm = bench.truth()["lines"][0]["wavelength_bench_air_nm"]
    for order, efficiency in ((1, 1.0), (2, 0.4), (3, 0.2)):
        phi = math.asin(order * bench_nm / (2.0 * 1e6 / 1200.0 * math.cos(math.radians(11.0))))
        top = max(rate(bench, phi + k * 1e-7) for k in range(-30, 31))
        assert rate(bench, phi) == pytest.approx(top, rel=1e-3)
        assert top == pytest.approx(1000.0 * efficiency, rel=0.25)
        assert top < 1000.0 * efficiency


def test_without_efficiencies_there_is_one_order() -> None:
    bench = world(lamp=lamp(line(253.652, 1000.0)))
    assert len(bench.spectrum.entries) == 1
    second = bench.spectrometer.rotation_rad(253.652, 2)
    assert rate(bench, second) < 1e-3


def test_zero_order_shows_all_lines_at_once() -> None:
    bench = world(optics=ORDERS | {"zero_order_efficiency": 2.0}, lamp=lamp(line(300.0), line(600.0, 50.0)))
    assert rate(bench, 0.0) == pytest.approx(2.0 * 150.0, rel=0.3)
    assert rate(bench, 2e-3) < 0.1


def test_an_order_sorting_filter_takes_the_overlap_away() -> None:
    """253.652 nm in order 3 lies on 760.956 nm in order 1 (m1 lambda1 = m2 lambda2)."""
    filters = [
        {"name": "uv", "shortest_nm": 220.0, "longest_nm": 400.0, "transmission": 0.7},
        {"name": "long-pass", "shortest_nm": 450.0, "transmission": 0.9},
    ]
    bench = world(optics=ORDERS, filters=filters, lamp=lamp(line(253.652, 1000.0), line(760.956, 30.0)))
    both = bench.spectrometer.rotation_rad(760.956, 1)
    seen = {}
    for name in ("none", "uv", "long-pass"):
        bench.select("filter", name)
        seen[name] = rate(bench, both)
    assert seen["uv"] + seen["long-pass"] * 0.7 / 0.9 == pytest.approx(0.7 * seen["none"], rel=0.01)
    assert seen["uv"] > 5.0 * seen["long-pass"] > 50.0
    assert bench.truth()["lines"][0]["strength_per_s"] < 1e-6 < bench.truth()["lines"][1]["strength_per_s"]


def test_a_filters_edge_is_half_down_at_its_stated_wavelength() -> None:
    filters = [{"name": "edge", "shortest_nm": 450.0, "edge_nm": 10.0, "transmission": 0.8, "leak": 0.01}]
    band = world(filters=filters)._filters["edge"]
    assert band.at(450.0) == pytest.approx(0.01 + 0.79 / 2.0)
    ten, ninety = ((band.at(w) - 0.01) / 0.79 for w in (445.0, 455.0))
    assert (ten, ninety) == pytest.approx((0.1, 0.9), abs=1e-6)
    assert band.at(300.0) == pytest.approx(0.01)


def test_an_attenuator_takes_the_same_share_of_everything() -> None:
    bench = world(attenuators=[{"name": "tenth", "transmission": 0.1}])
    places = [bench.lines[0].profile.rotation_rad + x for x in (0.0, 1e-5, 1e-3)]
    clear = [rate(bench, x) for x in places]
    bench.select("attenuator", "tenth")
    assert [rate(bench, x) for x in places] == pytest.approx([0.1 * y for y in clear], rel=1e-12)


# ---- ghosts and stray light -----------------------------------------------------------------------------


@pytest.mark.parametrize("order", [1, 2, 3])
def test_ghosts_stand_and_shine_as_a_periodic_ruling_error_makes_them(order: int) -> None:
    """Published (Rowland 1893): at lambda (1 +- k/(m p)); phase modulation of a swing x splits a wave into
    squared Bessel functions J_k(x)^2 (textbook), x = 2 pi m a/d."""
    amplitude_nm, period = 25.0, 720.0
    optics = {"ghosts": {"grooves_per_period": period, "amplitude_nm": amplitude_nm}} | {
        "order": order,
        "order_efficiency": [1.0, 1.0, 1.0],
    }
    bench = world(optics=optics, lamp=lamp(line(313.155, 1e6)))
    clean = world(optics={"order": order}, lamp=lamp(line(313.155, 1e6)))
    parent = clean.lines[0].profile
    swing = 2.0 * math.pi * order * amplitude_nm * 1200e-6
    top = rate(clean, parent.rotation_rad)
    assert rate(bench, parent.rotation_rad) == pytest.approx(float(jv(0, swing)) ** 2 * top, rel=1e-3)
    for k in (-2, -1, 1, 2):
        wavelength_nm = bench.truth()["lines"][0]["wavelength_bench_air_nm"] * (1.0 + k / (order * period))
        there = bench.spectrometer.rotation_rad(wavelength_nm, order)
        seen = max(rate(bench, there + j * 1e-7) for j in range(-20, 21))
        # the parents' own wings lie below
        below = rate(clean, there)
        assert seen - below == pytest.approx(float(jv(k, swing)) ** 2 * top, rel=0.02)
        assert rate(bench, there) == pytest.approx(seen, rel=2e-3)


def test_ghosts_take_their_light_from_the_line() -> None:
    """The squares of all Bessel functions sum to 1 (textbook): nothing is made."""
    optics = {"ghosts": {"grooves_per_period": 500.0, "amplitude_nm": 40.0, "highest": 8}}
    bench = world(optics=optics, lamp=lamp(line(313.155, 1.0)))
    assert sum(e.strength_per_s for e in bench.spectrum.entries) == pytest.approx(1.0, abs=1e-9)


def test_stray_light_is_a_share_of_all_light_everywhere() -> None:
    lines = (line(313.155, 4e5), line(546.074, 6e5))
    bench = world(optics={"stray_fraction": 1e-4}, lamp=lamp(*lines, continuum_per_s_per_nm=10.0))
    clean = world(lamp=lamp(*lines, continuum_per_s_per_nm=10.0))
    # 915 nm of continuum, from 185 to 1100 nm
    expected = 1e-4 * (1e6 + 9150.0)
    for place in (0.05, bench.lines[0].profile.rotation_rad, 0.3):
        assert rate(bench, place) - rate(clean, place) == pytest.approx(expected, rel=1e-6)


# ---- continuum and cell ---------------------------------------------------------------------------------


def test_the_continuum_follows_its_slope_through_the_exit_slit_in_every_order() -> None:
    keys = {"continuum_per_s_per_nm": 1000.0, "continuum_at_nm": 400.0, "continuum_slope_per_nm": -0.001}
    bench = world(optics=ORDERS, lamp=lamp(**keys))
    for wavelength_nm in (400.0, 700.0):
        rotation = bench.spectrometer.rotation_rad(wavelength_nm, 1)
        exit_nm = bench.spectrometer.bandpass_nm(wavelength_nm)[1]
        expected = sum(
            efficiency * 1000.0 * (1.0 - 0.001 * (wavelength_nm / m - 400.0)) * exit_nm / m
            for m, efficiency in ((1, 1.0), (2, 0.4), (3, 0.2))
            if wavelength_nm / m > 185.0
        )
        assert rate(bench, rotation) == pytest.approx(expected, rel=1e-5)


def test_a_cell_takes_its_equivalent_width_out_of_the_continuum() -> None:
    """Beer and Lambert, seen through the slits: exp(-depth) folded with both boxes and sinc^2 by direct sums;
    the missing light is continuum times equivalent width times the exit slit's width as a rotation."""
    cell = [{"wavelength_air_nm": 589.0, "optical_depth": 3.0, "doppler_fwhm_pm": 40.0}]
    keys = {"continuum_per_s_per_nm": 1000.0}
    optics = {"entrance_slit_um": 8.0, "exit_slit_um": 8.0}
    bench, empty = (world(optics=optics, lamp=lamp(cell=c, **keys)) for c in (cell, []))
    profile = bench.spectrum.entries[0].profile
    middle, reach = profile.rotation_rad, profile.reach_rad
    x, step = np.linspace(-1.0, 1.0, 20001, retstep=True)
    passed = np.exp(-3.0 * 0.5 ** ((x / 0.020) ** 2))
    seen = passed - 1.0
    scale_nm = 589.0 / bench.spectrometer.grooves
    for kernel in (
        *(
            np.clip(0.5 + (w / 2.0 - np.abs(x)) / step, 0.0, 1.0)
            for w in bench.spectrometer.bandpass_nm(589.0)
        ),
        np.sinc(x / scale_nm) ** 2,
    ):
        seen = fftconvolve(seen, kernel / kernel.sum(), mode="same")
    # turned by an angle, the wavelength at the slit's middle follows m lambda = 2 d cos K sin(phi) (textbook)
    for offset_nm in (-0.05, -0.02, -0.008, 0.0, 0.015, 0.06):
        place = middle + offset_nm / (2.0 * 1e6 / 1200.0 * math.cos(math.radians(11.0)) * math.cos(middle))
        share = rate(bench, place) / rate(empty, place)
        assert share == pytest.approx(1.0 + float(np.interp(offset_nm, x, seen)), abs=1e-3), offset_nm
    missing = light_over_rotation(empty, middle - reach, middle + reach)
    missing -= light_over_rotation(bench, middle - reach, middle + reach)
    width_nm = float((1.0 - passed).sum() * step)
    assert missing == pytest.approx(1000.0 * width_nm * profile.exit_width_rad, rel=5e-3)


# ---- slits and lamps ------------------------------------------------------------------------------------


def test_wider_slits_pass_more_and_resolve_less() -> None:
    """An evenly lit entrance slit passes as it is wide; the exit slit then passes a triangle of its image."""
    bench = world()
    peak, fwhm = (bench.truth()["lines"][0][key] for key in ("peak_rate_per_s", "recorded_fwhm_pm"))
    bench.set_slits(entrance_um=50.0, exit_um=50.0)
    line_now = bench.truth()["lines"][0]
    assert line_now["strength_per_s"] == pytest.approx(250.0)
    assert line_now["peak_rate_per_s"] == pytest.approx(2.5 * peak, rel=0.1)
    entrance_pm, exit_pm = line_now["bandpass_pm"]
    assert line_now["recorded_fwhm_pm"] == pytest.approx(max(entrance_pm, exit_pm), rel=0.05)
    bench.set_slits(entrance_um=20.0, exit_um=20.0)
    assert bench.truth()["lines"][0]["recorded_fwhm_pm"] == fwhm
    with pytest.raises(ValueError, match="a slit of 4 um"):
        bench.set_slits(entrance_um=4.0, exit_um=20.0)


def test_lamps_are_told_apart_and_drift_apart() -> None:
    lamps = [
        lamp(line(313.155)) | {"name": "hg", "drift_fraction": 0.01},
        lamp(line(361.051)) | {"name": "cd", "drift_fraction": 0.01},
    ]
    bench = world(lamps=lamps)
    first, gain = bench.lines[0].profile.rotation_rad, bench.lamp.gain(1e9)
    assert rate(bench, first) > 50.0
    bench.select("lamp", "cd")
    assert rate(bench, first) < 0.1
    assert bench.lamp.gain(1e9) != gain
    truth = bench.truth()
    assert [truth["lamps"][name][0]["wavelength_air_nm"] for name in ("hg", "cd")] == [313.155, 361.051]
    assert truth["lines"] == truth["lamps"]["cd"]
    with pytest.raises(KeyError, match="ne"):
        bench.select("lamp", "ne")


@pytest.mark.parametrize(
    ("tables", "fragment"),
    [
        ({"lamp": lamp(line(300.0)), "lamps": [lamp(line(300.0)) | {"name": "x"}]}, r"either one \[world"),
        ({"lamps": [lamp(line(300.0)) | {"name": "x"}] * 2}, "every name must be given once"),
        ({"filters": [{"name": "none"}]}, "the empty place"),
        ({"filter_at_start": "uv"}, "filter_at_start.*must be one of 'none'"),
        ({"optics": {"order": 2, "order_efficiency": [1.0]}}, "order_efficiency"),
        ({"lamp": lamp(line(1700.0))}, "1700.* nm is beyond what this grating can reach"),
        ({"optics": {"mount": "cube"}}, "'plane'.*'littrow'.*'concave'"),
    ],
    ids=str,
)
def test_a_world_that_contradicts_itself_is_refused(tables: dict[str, Any], fragment: str) -> None:
    with pytest.raises(SettingsError, match=fragment):
        world(**tables)


# ---- air, and what is told afterwards -------------------------------------------------------------------


def test_drifting_air_moves_a_line_in_every_order_as_a_new_world_would() -> None:
    """The short cut for slow drift (a shift of the table) against lines computed anew in that air."""
    clock = StoppedClock()
    tables = {"optics": ORDERS, "lamp": lamp(line(253.652, 1000.0)), "clock": clock}
    still = {"temperature_drift_k": 0.0}
    drifting = world(**tables, air=still | {"pressure_drift_pa": 2000.0})
    pressure = drifting.air.pressure_pa(START_NS * 1e-9)
    assert abs(pressure - 101325.0) > 100.0
    fixed = world(**tables, air=still | {"pressure_pa": pressure, "pressure_drift_pa": 0.0})
    for order, entry in zip((1, 2, 3), fixed.spectrum.entries, strict=True):
        assert entry.profile.order == order
        for offset in (-1.0e-5, 3.0e-6, 8.0e-6):
            place = entry.profile.rotation_rad + offset
            assert rate(drifting, place) == pytest.approx(rate(fixed, place), rel=3e-3)


def test_the_truth_about_everything_can_be_written_down() -> None:
    """JSON, complete: what a test or a person needs after a night."""
    reversal = {"optical_depth": 3.0, "doppler_fwhm_pm": 0.7}
    components = [{"offset_pm": 1.0, "strength": 2.0}]
    bench = world(
        optics=ORDERS
        | {"ghosts": {"grooves_per_period": 720.0, "amplitude_nm": 2.0}, "stray_fraction": 1e-5},
        lamps=[lamp(line(253.652, reversal=reversal, components=components)) | {"name": "hg"}],
        filters=[{"name": "uv", "longest_nm": 400.0, "transmission": 0.5}],
        filter_at_start="uv",
        drive={"periodic_errors": [{"name": "worm", "period_steps": 1e4, "amplitude_steps": 1.0}]},
    )
    truth = json.loads(json.dumps(bench.truth()))
    told = truth["lamps"]["hg"][0]
    assert told["self_reversal"]["optical_depth"] == 3.0
    assert told["components"][0]["offset_pm"] == 1.0
    assert 0.0 < told["escaped_fraction"] < 1.0
    kept = float(jv(0, 2.0 * math.pi * 2.0 * 1200e-6)) ** 2
    assert told["strength_per_s"] == pytest.approx(100.0 * 0.5 * told["escaped_fraction"] * kept, rel=1e-3)
    assert truth["in_beam"] == {"lamp": "hg", "filter": "uv", "attenuator": "none"}
    assert truth["order_efficiency"] == {"1": 1.0, "2": 0.4, "3": 0.2}
    assert truth["ghosts"]["grooves_per_period"] == 720.0
    assert truth["stray_per_s"] == pytest.approx(1e-5 * 100.0 * 0.5 * told["escaped_fraction"], rel=1e-3)
    assert truth["periodic_errors"][0]["amplitude_steps"] == 1.0
