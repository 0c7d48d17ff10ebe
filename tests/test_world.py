"""The simulated world against outside values: rays, air, heat, counting, mechanics, chance."""

from __future__ import annotations

import math
import tomllib
from pathlib import Path
from typing import Any

import numpy as np
import pytest
from scipy.special import gammainc, ndtri
from simbench import START_NS, StoppedClock

from drivers.clock import Clock, run_virtual
from drivers.errors import SettingsError
from drivers.protocols import DriverContext
from simulators.air import Air, AirOptions, bench_wavelength_nm, standard_refractivity
from simulators.detector import Counter, DetectorOptions, registered
from simulators.draw import Draws, smooth_drift
from simulators.lamp import Lamp, LampOptions, LineOptions, doppler_fwhm_nm
from simulators.mechanics import DriveOptions, Motion, Stepper
from simulators.mounts import PlaneOptions
from simulators.optics import Spectrometer
from simulators.profile import LineProfile
from simulators.shapes import gaussian
from simulators.shutter import ShutterBlade, ShutterOptions
from simulators.world import World, build

BENCH = Path(__file__).parent.parent / "configs" / "benches" / "emberlight-3.toml"
S = 1_000_000_000


def optics(**changes: Any) -> Spectrometer:
    options = {
        "groove_density_per_mm": 1200.0,
        "ruled_width_mm": 96.0,
        "focal_length_mm": 870.0,
        "included_angle_deg": 22.0,
        "entrance_slit_um": 20.0,
        "exit_slit_um": 20.0,
    }
    return Spectrometer(PlaneOptions(**(options | changes)))


def world_options() -> dict[str, Any]:
    with BENCH.open("rb") as stream:
        options: dict[str, Any] = tomllib.load(stream)["world"]["options"]
    return options


def shipped_world(clock: Clock, seed: int = 1, **changes: Any) -> World:
    return build(world_options() | changes, DriverContext(clock, "world", seed, str(BENCH.parent)))


# ---- rays -----------------------------------------------------------------------------------------------


def test_every_wavelength_meets_in_zero_order() -> None:
    """At rotation 0 the two arms mirror each other: no path difference, whatever the slits' width."""
    spectrometer = optics()
    assert float(spectrometer.path_difference_nm(0.0, 0.0, 0.0)) == pytest.approx(0.0, abs=1e-12)
    # the same offset on both planes towards the same side is a mirror image no more
    assert float(spectrometer.path_difference_nm(0.0, 0.01, -0.01)) == pytest.approx(0.0, abs=1e-12)


def test_textbook_grating_of_406_grooves_per_mm() -> None:
    """Undergraduate optics texts: 2 theta = 27 deg 42' for 589.3 nm in first order gives 406 grooves/mm.

    Light falls along the normal and leaves at theta: arms at theta, the grating turned by half of it."""
    theta_rad = math.radians(27.7) / 2.0
    spectrometer = optics(groove_density_per_mm=406.0, included_angle_deg=math.degrees(theta_rad))
    assert float(spectrometer.wavelength_nm(theta_rad / 2.0)) == pytest.approx(589.3, rel=1e-3)


@pytest.mark.parametrize("wavelength_nm", [253.65, 313.155, 589.592, 696.543])
def test_slit_images_follow_the_textbook_dispersion(wavelength_nm: float) -> None:
    """Textbook: d(lambda)/dx = d cos(angle) / (m f) on either side."""
    spectrometer = optics()
    rotation = spectrometer.rotation_rad(wavelength_nm)
    entrance_nm, exit_nm = spectrometer.bandpass_nm(wavelength_nm)
    d_nm, half_rad = 1e6 / 1200.0, math.radians(11.0)
    assert entrance_nm == pytest.approx(d_nm * math.cos(rotation + half_rad) * 0.020 / 870.0, rel=1e-6)
    assert exit_nm == pytest.approx(d_nm * math.cos(rotation - half_rad) * 0.020 / 870.0, rel=1e-6)


def test_a_wavelength_beyond_the_grating_is_refused() -> None:
    with pytest.raises(ValueError, match="beyond what this grating can reach"):
        optics().rotation_rad(1700.0)


@pytest.mark.parametrize(("order", "wavelength_nm"), [(1, 313.155), (2, 313.155), (1, 696.543)])
def test_narrow_slits_leave_the_diffraction_of_the_ruled_width(order: int, wavelength_nm: float) -> None:
    """Published: sinc^2 has its half maximum at a full width of 0.886 lambda/(m N)."""
    spectrometer = optics(order=order, ruled_width_mm=20.0, entrance_slit_um=0.3, exit_slit_um=0.3)
    profile = LineProfile(spectrometer, wavelength_nm=wavelength_nm, shape=gaussian(2e-5))
    assert profile.fwhm_nm == pytest.approx(0.8859 * wavelength_nm / (order * 24000.0), rel=1e-3)


def traced_share(spectrometer: Spectrometer, rotation_rad: float, wavelengths_nm: np.ndarray) -> float:
    """Rays by the grating equation sin(beta) = m L/d - sin(alpha), counted behind the exit slit."""
    o = spectrometer.options
    half_rad, d_nm = math.radians(o.included_angle_deg) / 2.0, 1e6 / o.groove_density_per_mm
    points = 500
    x1 = ((np.arange(points) + 0.5) / points - 0.5) * o.entrance_slit_um * 1e-3
    alpha = half_rad + rotation_rad + np.arctan(x1 / o.focal_length_mm)
    beta = np.arcsin(o.order * wavelengths_nm[None, :] / d_nm - np.sin(alpha)[:, None])
    x2 = o.focal_length_mm * np.tan(beta - (rotation_rad - half_rad))
    return float(np.mean(np.abs(x2) < o.exit_slit_um * 1e-3 / 2.0))


def test_transmission_through_the_slits_matches_a_ray_trace() -> None:
    """Wide ruling, so that diffraction is small; unequal slits, so that the top is flat."""
    spectrometer = optics(ruled_width_mm=1000.0, entrance_slit_um=15.0, exit_slit_um=40.0)
    fwhm_nm = 2e-3
    profile = LineProfile(spectrometer, wavelength_nm=313.155, shape=gaussian(fwhm_nm))
    quantiles = ndtri((np.arange(400) + 0.5) / 400.0)
    wavelengths = 313.155 + fwhm_nm / 2.354820045 * quantiles
    for offset_rad in np.linspace(-2.2e-5, 2.2e-5, 23):
        traced = traced_share(spectrometer, profile.rotation_rad + offset_rad, wavelengths)
        assert profile.share(float(offset_rad)) == pytest.approx(traced, abs=0.006), offset_rad


def integrated_share(
    spectrometer: Spectrometer, wavelength_nm: float, fwhm_nm: float, turn_rad: float
) -> float:
    """The whole integral over entrance slit, exit slit and line, by brute force, diffraction included."""
    o = spectrometer.options
    nodes, weights_x1 = np.polynomial.legendre.leggauss(96)
    x1 = nodes / 2.0 * o.entrance_slit_um * 1e-3
    x2 = np.linspace(-0.5, 0.5, 801) * o.exit_slit_um * 1e-3
    path = spectrometer.path_difference_nm(turn_rad, x1[:, None], x2[None, :])
    u = np.linspace(-5.0, 5.0, 41)
    weights = np.exp(-u * u / 2.0)
    total = np.zeros_like(path)
    for shift, weight in zip(u * fwhm_nm / 2.354820045, weights / weights.sum(), strict=True):
        line_nm = wavelength_nm + shift
        grooves = spectrometer.grooves
        total += weight * grooves / line_nm * np.sinc(grooves * (path / line_nm - o.order)) ** 2
    along_x2 = np.trapezoid(total, path, axis=1)
    return float((weights_x1 * along_x2).sum() / 2.0)


@pytest.mark.parametrize("wavelength_nm", [313.155, 696.543])
def test_the_table_holds_its_stated_accuracy(wavelength_nm: float) -> None:
    """2e-6 of the peak, as the profile's description promises."""
    spectrometer = optics()
    fwhm_nm = 0.8e-3
    profile = LineProfile(spectrometer, wavelength_nm=wavelength_nm, shape=gaussian(fwhm_nm))
    for offset_rad in (-4.1e-5, -1.137e-5, -3.33e-6, 1.01e-7, 5.77e-6, 1.243e-5, 2.5e-5):
        exact = integrated_share(spectrometer, wavelength_nm, fwhm_nm, profile.rotation_rad + offset_rad)
        assert profile.share(offset_rad) == pytest.approx(exact, abs=2e-6), offset_rad


def test_far_wings_go_on_smoothly_as_the_inverse_square() -> None:
    spectrometer = optics()
    profile = LineProfile(spectrometer, wavelength_nm=313.155, shape=gaussian(0.8e-3))
    edge = profile.reach_rad
    inside, outside = profile.share(edge * 0.9999), profile.share(edge * 1.0001)
    assert outside == pytest.approx(inside, rel=0.1)
    assert profile.share(4.0 * edge) == pytest.approx(profile.share(2.0 * edge) / 4.0, rel=1e-12)
    assert 0.0 < outside < 2e-3


def test_coma_leaves_the_light_and_skews_the_line() -> None:
    plain = LineProfile(optics(), wavelength_nm=313.155, shape=gaussian(0.8e-3))
    skewed = LineProfile(optics(coma_um=2.0), wavelength_nm=313.155, shape=gaussian(0.8e-3))
    offsets = np.linspace(-6e-5, 6e-5, 4001)
    one, two = (np.array([p.share(float(x)) for x in offsets]) for p in (plain, skewed))
    assert two.sum() == pytest.approx(one.sum(), rel=1e-3)

    def skewness(y: np.ndarray) -> float:
        inner = np.abs(offsets) < 3e-5
        x, w = offsets[inner], y[inner] / y[inner].sum()
        mean = float((w * x).sum())
        return float((w * (x - mean) ** 3).sum() / (w * (x - mean) ** 2).sum() ** 1.5)

    assert abs(skewness(one)) < 0.005
    assert abs(skewness(two)) > 0.02


# ---- lamp and air ---------------------------------------------------------------------------------------


def test_doppler_width_of_mercury() -> None:
    """Textbook: FWHM = 7.16e-7 lambda sqrt(T/M)."""
    width_nm = doppler_fwhm_nm(wavelength_nm=546.074, temperature_k=300.0, mass_u=200.59)
    assert width_nm == pytest.approx(7.16e-7 * 546.074 * math.sqrt(300.0 / 200.59), rel=1e-3)


def test_a_line_needs_one_kind_of_width() -> None:
    line = {"wavelength_air_nm": 500.0, "strength_per_s": 1.0, "temperature_k": 300.0}
    with pytest.raises(SettingsError, match=r"either doppler_fwhm_pm, or both temperature_k and mass_u"):
        shipped_world(StoppedClock(), lamp={"lines": [line]})


def test_lamp_warms_up_and_stays_dark_when_off() -> None:
    line = LineOptions(wavelength_air_nm=500.0, strength_per_s=1.0, doppler_fwhm_pm=1.0)
    options = LampOptions(
        lines=(line,), burning_s=0.0, warm_up_s=100.0, warm_up_depth=0.4, drift_fraction=0.0
    )
    lamp = Lamp.build(options, seed=1, start_utc_s=1000.0)
    assert lamp.gain(1000.0) == pytest.approx(0.6)
    assert lamp.gain(1100.0) == pytest.approx(1.0 - 0.4 / math.e)
    assert lamp.gain(3000.0) == pytest.approx(1.0, abs=1e-8)
    lamp.switch(False, 3000.0)
    assert lamp.gain(3001.0) == 0.0
    lamp.switch(True, 4000.0)
    assert lamp.gain(4000.0) == pytest.approx(0.6)


@pytest.mark.parametrize("rms", [0.003, 2.0])
def test_drift_is_slow_and_as_large_as_asked(rms: float) -> None:
    periods = 200.0
    drifts = [smooth_drift(Draws(seed, "x"), rms=rms, period_s=100.0) for seed in range(20)]
    t = np.linspace(0.0, 100.0 * periods, 4000)
    values = np.array([[drift(x) for x in t] for drift in drifts])
    assert float(np.sqrt(np.mean(values**2))) == pytest.approx(rms, rel=0.02)
    assert abs(float(values.mean())) < 0.05 * rms
    assert abs(drifts[0](50.0) - drifts[0](50.1)) < 0.02 * rms


def test_edlen_against_published_indices_of_air() -> None:
    """Ciddor 1996, 633 nm, dry, 450 ppm: 27653.0e-8 at 15 C, 27180.0e-8 at 20 C. Edlén's air holds less
    CO2 and an ideal gas is no real one: 5e-8 is what the world promises. NIST: 20 C, 50 % RH:
    n = 1.000271373."""
    dry = Air.build(AirOptions(humidity_percent=0.0), seed=1)
    moist = Air.build(AirOptions(humidity_percent=50.0), seed=1)
    standard = standard_refractivity(633.0)
    assert standard == pytest.approx(27653.0e-8, abs=5e-8)
    assert standard * dry.mean_density_ratio() == pytest.approx(27180.0e-8, abs=5e-8)
    assert standard * moist.mean_density_ratio() == pytest.approx(271.373e-6, abs=5e-8)


def test_thinner_air_lengthens_a_wavelength() -> None:
    """At 20 C instead of 15 C, n - 1 falls by 4.73e-6 (Ciddor's two values above): 1.48 pm at 313 nm."""
    ratio = Air.build(AirOptions(humidity_percent=0.0), seed=1).mean_density_ratio()
    longer_nm = bench_wavelength_nm(wavelength_air_nm=313.155, density_ratio=ratio) - 313.155
    refractivity_fall = 4.73e-6 * standard_refractivity(313.155) / standard_refractivity(633.0)
    assert longer_nm == pytest.approx(313.155 * refractivity_fall, rel=0.01)


# ---- counting -------------------------------------------------------------------------------------------


def test_dead_time_published_value() -> None:
    """Textbook: 1e5/s through a non-paralysable 1 us is observed as 90 909.09/s; var/mean = 1/(1+r tau)^2."""
    draws = Draws(7, "detector")
    counts = np.array(
        [registered(draws.event(k), rate_per_s=1e5, gate_s=0.1, dead_time_s=1e-6) for k in range(6000)]
    )
    mean, variance = float(counts.mean()), float(counts.var())
    assert mean == pytest.approx(9090.909, abs=5.0 * math.sqrt(variance / counts.size) + 0.1)
    assert variance / mean == pytest.approx(1.0 / 1.1**2, rel=5.0 * math.sqrt(2.0 / counts.size))


@pytest.mark.parametrize(
    ("rate_per_s", "dead_time_s"), [(12.0, 0.02), (150.0, 0.001), (60.0, 0.01), (90.0, 0.05)]
)
def test_registered_counts_have_the_exact_distribution(rate_per_s: float, dead_time_s: float) -> None:
    """P(N >= n) = P(the nth pulse of the ready time comes before T - (n-1) tau): Gamma(n) (renewal theory).
    Seed 11."""
    draws, size = Draws(11, "detector"), 20000
    counts = np.array(
        [
            registered(draws.event(k), rate_per_s=rate_per_s, gate_s=1.0, dead_time_s=dead_time_s)
            for k in range(size)
        ]
    )
    top = int(counts.max()) + 2
    n = np.arange(1, top + 1)
    at_least = np.concatenate(([1.0], gammainc(n, rate_per_s * np.maximum(1.0 - (n - 1) * dead_time_s, 0.0))))
    expected = size * (at_least[:-1] - at_least[1:])
    seen = np.bincount(counts, minlength=top)[:top]
    frequent = expected > 10.0
    chi2 = float(((seen - expected)[frequent] ** 2 / expected[frequent]).sum())
    dof = int(frequent.sum())
    assert chi2 < dof + 5.0 * math.sqrt(2.0 * dof)
    assert float(seen[frequent].sum()) == pytest.approx(float(expected[frequent].sum()), rel=0.01)


def test_registered_counts_against_event_by_event_simulation() -> None:
    """Pulse after pulse, each pulse within tau of the last registered one lost. Seed 3."""
    rate_per_s, dead_s, gate_s, size = 400.0, 0.0005, 1.0, 3000
    chance = np.random.Generator(np.random.Philox(3))
    one_by_one = []
    for _ in range(size):
        last, count = -1.0, 0
        for t in np.cumsum(chance.exponential(1.0 / rate_per_s, 600)):
            if t > gate_s:
                break
            if t - last >= dead_s or count == 0:
                last, count = t, count + 1
        one_by_one.append(count)
    draws = Draws(3, "detector")
    ours = [
        registered(draws.event(k), rate_per_s=rate_per_s, gate_s=gate_s, dead_time_s=dead_s)
        for k in range(size)
    ]
    a, b = np.array(one_by_one), np.array(ours)
    assert float(a.mean()) == pytest.approx(float(b.mean()), abs=5.0 * math.sqrt((a.var() + b.var()) / size))
    assert float(a.var()) == pytest.approx(float(b.var()), rel=5.0 * math.sqrt(4.0 / size))


def test_hopeless_saturation_still_counts_rightly() -> None:
    """At r tau = 50 the counter is always dead: T/tau * r tau/(1 + r tau) pulses (textbook), within one."""
    counts = registered(Draws(1, "d").event(0), rate_per_s=5e7, gate_s=0.01, dead_time_s=1e-6)
    assert counts == pytest.approx(1e4 * 50.0 / 51.0, abs=30)


def test_dark_rate_doubles_with_heat_and_glows_after_over_light() -> None:
    counter = Counter(DetectorOptions(dark_rate_per_s=8.0, dark_doubling_k=6.0), Draws(1, "detector"))
    assert counter.dark_rate_per_s(0, 0.0) == 8.0
    assert counter.dark_rate_per_s(0, 6.0) == pytest.approx(16.0)
    counter.trip(0)
    assert counter.dark_rate_per_s(0, 0.0) == pytest.approx(48.0)
    assert counter.dark_rate_per_s(600 * S, 0.0) == pytest.approx(8.0 * (1.0 + 5.0 / math.e))


# ---- mechanics ------------------------------------------------------------------------------------------


def stepper(**changes: Any) -> Stepper:
    options = {"microstep_error_full_steps": 0.0, "ring_steps": 0.0, "steps_per_radian": 1000.0}
    return Stepper(DriveOptions(**(options | changes)), Draws(1, "drive"))


def test_ramps_take_the_time_of_a_trapezoid() -> None:
    """Textbook: 2 sqrt(s/a) when short; s/v + v/a when the full speed is reached."""
    assert Motion(0, 0.0, 400.0, 1000.0, 100.0).duration_s == pytest.approx(4.0)
    long = Motion(0, 5000.0, -45000.0, 1000.0, 100.0)
    assert long.duration_s == pytest.approx(60.0)
    assert long.position(5 * S) == pytest.approx(5000.0 - 100.0 * 25.0 / 2.0)
    assert long.position(30 * S) == pytest.approx(-20000.0)
    assert long.position(55 * S) == pytest.approx(-45000.0 + 100.0 * 25.0 / 2.0)
    assert long.position(60 * S) == -45000.0


def arrive(motor: Stepper, steps: float, now_ns: int) -> int:
    return motor.begin(steps, now_ns) + 60 * S


def test_backlash_remembers_where_it_came_from() -> None:
    motor = stepper(play_steps=300.0)
    now = arrive(motor, 10000.0, 0)
    from_below = motor.rotation_rad(now, 0.0)
    assert from_below == pytest.approx(10.0)
    now = arrive(motor, 9900.0, now)  # within the play: the grating does not move at all
    assert motor.rotation_rad(now, 0.0) == pytest.approx(10.0)
    now = arrive(motor, 5000.0, now)  # from above it stands too high by the play
    assert motor.rotation_rad(now, 0.0) == pytest.approx(5.3)
    now = arrive(motor, 5200.0, now)  # not yet through the play
    assert motor.rotation_rad(now, 0.0) == pytest.approx(5.3)
    now = arrive(motor, 10000.0, now)
    assert motor.rotation_rad(now, 0.0) == from_below


def test_an_overshoot_larger_than_the_play_always_arrives_from_below() -> None:
    motor = stepper(play_steps=330.0)
    now = arrive(motor, 50000.0, 0)
    now = arrive(motor, 20000.0 - 500.0, now)
    now = arrive(motor, 20000.0, now)
    assert motor.rotation_rad(now, 0.0) == pytest.approx(20.0)


def test_counting_before_the_drive_has_settled_sees_another_place() -> None:
    motor = stepper(ring_steps=4.0, ring_decay_s=0.008, ring_frequency_hz=40.0)
    end = motor.begin(1000.0, 0)
    assert motor.rotation_rad(end, 0.0) == pytest.approx(1.004)
    half_turn = end + 12_500_000
    assert motor.rotation_rad(half_turn, 0.0) == pytest.approx(1.0 - 0.004 * math.exp(-12.5 / 8.0))
    assert not motor.is_still(half_turn)
    assert motor.is_still(end + 50_000_000)
    assert motor.rotation_rad(end + 50_000_000, 0.0) == 1.0


def test_microstep_error_is_a_wave_in_four_full_steps() -> None:
    """Common practice: 5 % of a full step. 16 microsteps to the full step: 0.8 steps in a period of 64."""
    motor = stepper(microstep_error_full_steps=0.05, steps_per_full_step=16)
    error = [1000.0 * motor.rest_rotation_rad(float(k)) - k for k in range(129)]
    assert max(error) == pytest.approx(0.8)
    assert min(error) == pytest.approx(-0.8)
    assert error[:64] == pytest.approx(error[64:128], abs=1e-9)
    assert error[16] == pytest.approx(0.8)


def test_heat_and_the_reference_mark_move_the_grating() -> None:
    motor = stepper(thermal_steps_per_k=2.0, zero_order_steps=3.0, index_noise_steps=1.5)
    now = arrive(motor, 1003.0, 0)
    assert motor.rotation_rad(now, 0.0) == pytest.approx(1.0)
    assert motor.rotation_rad(now, 5.0) == pytest.approx(1.010)
    marks = []
    for _ in range(400):
        motor.found_mark()
        marks.append(1000.0 * (motor.rotation_rad(now, 0.0) - 1.0))
    assert float(np.std(marks)) == pytest.approx(1.5, rel=5.0 / math.sqrt(800.0))


def test_a_halted_motor_stands_on_a_whole_step_ahead() -> None:
    motor = stepper(speed_steps_per_s=100.0, acceleration_steps_per_s2=1000.0)
    motor.begin(1000.0, 0)
    motor.stop(3_333_333_333)
    at = motor.commanded_steps(10 * S)
    assert at == 329.0  # 100 * (3.3333 - 0.05) = 328.33: the next whole step
    motor.stop(11 * S)
    assert motor.commanded_steps(12 * S) == at


# ---- shutter --------------------------------------------------------------------------------------------


def test_shutter_passes_the_time_it_was_open() -> None:
    blade = ShutterBlade(ShutterOptions(leak_fraction=0.01))
    assert blade.passed_share(0, 100) == 0.01
    blade.set(True, 100)
    assert blade.passed_share(100, 200) == 1.0
    assert blade.passed_share(50, 150) == pytest.approx(0.505)
    blade.set(False, 220)
    assert blade.passed_share(200, 300) == pytest.approx(0.2 + 0.8 * 0.01)
    assert blade.passed_share(110, 200) == 1.0
    assert blade.passed_share(60, 260) == pytest.approx(0.6 + 0.4 * 0.01)
    assert blade.passed_share(220, 300) == 0.01


# ---- chance ---------------------------------------------------------------------------------------------


def test_draws_depend_on_seed_device_epoch_and_event_alone() -> None:
    def draw(seed: int, device: str, epoch: int, event: int) -> float:
        return float(Draws(seed, device, epoch).event(event).random())

    first = draw(1, "detector", 0, 5)
    assert draw(1, "detector", 0, 5) == first
    others = {
        draw(2, "detector", 0, 5),
        draw(1, "drive", 0, 5),
        draw(1, "detector", 1, 5),
        draw(1, "detector", 0, 6),
    }
    assert len(others | {first}) == 5
    stream = Draws(1, "detector")
    stream.event(9).random(1000)
    assert float(stream.event(5).random()) == first


def test_events_share_no_numbers_however_many_they_draw() -> None:
    stream = Draws(1, "detector")
    one = set(stream.event(7).integers(0, 1 << 62, 4096).tolist())
    two = set(stream.event(8).integers(0, 1 << 62, 4096).tolist())
    assert len(one) == len(two) == 4096
    assert not one & two


def test_half_used_words_of_one_event_do_not_leak_into_the_next() -> None:
    stream = Draws(1, "detector")
    stream.event(3).integers(0, 1 << 20, dtype="uint32")
    after_odd = int(stream.event(4).integers(0, 1 << 20, dtype="uint32"))
    stream.event(3).random(3)
    assert int(stream.event(4).integers(0, 1 << 20, dtype="uint32")) == after_odd


def test_events_of_a_stream_are_unrelated() -> None:
    stream = Draws(5, "detector")
    values = np.array([stream.next_event().random() for _ in range(20000)])
    assert float(values.mean()) == pytest.approx(0.5, abs=5.0 * math.sqrt(1.0 / 12.0 / values.size))
    assert abs(float(np.corrcoef(values[:-1], values[1:])[0, 1])) < 5.0 / math.sqrt(values.size)


# ---- the shipped bench ----------------------------------------------------------------------------------


def test_steps_of_the_shipped_bench_are_a_fraction_of_a_picometre() -> None:
    world = shipped_world(
        StoppedClock(), drive=world_options()["drive"] | {"microstep_error_full_steps": 0.0}
    )
    steps = 1.4 + 2291831.1805 * world.lines[0].profile.rotation_rad
    assert world.true_wavelength_nm(steps) == pytest.approx(
        world.truth()["lines"][0]["wavelength_bench_air_nm"], abs=1e-9
    )
    step_pm = 1e3 * (world.true_wavelength_nm(steps + 1.0) - world.true_wavelength_nm(steps))
    assert 0.5 < step_pm < 1.0


def test_truth_tells_what_the_lamp_is() -> None:
    lines = shipped_world(StoppedClock()).truth()["lines"]
    pair = lines[1]["wavelength_bench_air_nm"] - lines[0]["wavelength_bench_air_nm"]
    assert pair == pytest.approx(0.029, abs=1e-6)
    for line in lines:
        assert 18.0 < line["recorded_fwhm_pm"] < 21.0
        assert 30.0 < line["peak_rate_per_s"] < 500.0


def test_light_follows_shutter_lamp_and_ringing() -> None:
    clock = StoppedClock()
    world = shipped_world(clock)
    assert world.mean_rate_per_s(0, S) == pytest.approx(8.0, rel=0.05)
    world.shutter.set(True, 0)
    line = world.lines[0].profile
    top_steps = round(1.4 + 2291831.1805 * line.rotation_rad)
    end = world.stepper.begin(float(top_steps), 0)
    settled = world.mean_rate_per_s(end + S, end + 2 * S)
    assert settled == pytest.approx(8.0 + 398.0, rel=0.03)
    flank = world.stepper.begin(float(top_steps + 14), end + 3 * S)
    too_early = world.mean_rate_per_s(flank, flank + 5_000_000)
    later = world.mean_rate_per_s(flank + S, flank + S + 5_000_000)
    assert too_early < 0.9 * later
    world.lamp.switch(False, clock.utc_ns() * 1e-9)
    assert world.mean_rate_per_s(end + S, end + 2 * S) < 9.0


def test_denser_air_pulls_a_line_to_smaller_rotations() -> None:
    """1 kPa more raises n - 1 by 2.68e-6 at 633 nm (Ciddor 1996, table 1, 20 C:
    26824.4e-8 - 21458.0e-8 in 20 kPa)."""
    clock = StoppedClock()
    still = {"temperature_drift_k": 0.0, "pressure_drift_pa": 0.0}
    dense = shipped_world(clock, air={"pressure_pa": 102325.0} | still)
    usual = shipped_world(clock, air={"pressure_pa": 101325.0} | still)
    shift_nm = (
        dense.truth()["lines"][6]["wavelength_bench_air_nm"]
        - usual.truth()["lines"][6]["wavelength_bench_air_nm"]
    )
    assert shift_nm == pytest.approx(-546.074 * 2.68e-6, rel=0.02)


def test_air_drifting_within_a_world_moves_the_line_as_a_new_world_would() -> None:
    """The short cut for slow drift (a shift of the table) against lines computed anew."""
    clock = StoppedClock()
    drifting = shipped_world(clock, air={"pressure_drift_pa": 2000.0, "temperature_drift_k": 0.0})
    pressure = drifting.air.pressure_pa(START_NS * 1e-9)
    assert abs(pressure - 101325.0) > 100.0
    fixed = shipped_world(
        clock, air={"pressure_pa": pressure, "pressure_drift_pa": 0.0, "temperature_drift_k": 0.0}
    )
    for offset in (-1.0e-5, 3.0e-6, 8.0e-6):
        rotation = fixed.lines[0].profile.rotation_rad + offset
        one, two = (w.light_rate_per_s(rotation, utc_s=START_NS * 1e-9) for w in (drifting, fixed))
        assert one == pytest.approx(two, rel=3e-3)


def test_unknown_world_options_are_named() -> None:
    with pytest.raises(SettingsError, match=r"world\.options.*grooves_per_mm"):
        shipped_world(StoppedClock(), optics=world_options()["optics"] | {"grooves_per_mm": 1.0})


def test_the_shipped_world_builds_under_virtual_time() -> None:
    async def main(clock: Clock) -> float:
        return shipped_world(clock).mean_rate_per_s(0, S)

    assert run_virtual(main, START_NS) == pytest.approx(8.0, rel=0.05)
