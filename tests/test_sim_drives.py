"""The simulated drives: a sine bar's triangle, the errors of worm and leadscrew."""

from __future__ import annotations

import math
from typing import Any

import numpy as np
import pytest
from simbench import lamp, line, world

from drivers.errors import SettingsError
from drivers.settings import parse_options
from simulators.draw import Draws
from simulators.mechanics import DriveOptions, Stepper

PERFECT = {"microstep_error_full_steps": 0.0, "ring_steps": 0.0}
WORM = {"name": "worm", "period_steps": 80000.0, "amplitude_steps": 1.5}
SCREW = {"name": "leadscrew", "period_steps": 5000.0, "amplitude_steps": 0.4}


def stepper(seed: int = 1, **changes: Any) -> Stepper:
    options = parse_options(DriveOptions, PERFECT | {"steps_per_radian": 1e6} | changes, "drive")
    return Stepper(options, Draws(seed, "drive"), Draws(seed, "worm"))


def test_a_sine_bar_turns_wavelengths_into_even_steps() -> None:
    """Textbook: a leadscrew at the end of a bar makes the sine, and so the wavelength, linear in steps."""
    drive = PERFECT | {
        "kind": "sine-bar",
        "steps_per_unit_sine": 2e6,
        "zero_order_steps": 10.0,
        "highest_steps": 2_000_000,
    }
    bench = world(drive=drive)
    steps = np.linspace(10_000.0, 900_000.0, 50)
    found = np.array([bench.true_wavelength_nm(float(s)) for s in steps])
    # m lambda = 2 d cos K sin(phi) (textbook)
    expected = 2.0 * 1e6 / 1200.0 * math.cos(math.radians(11.0)) * (steps - 10.0) / 2e6
    assert found == pytest.approx(expected, rel=1e-12)


def test_a_sine_bar_stops_at_the_right_angle() -> None:
    motor = stepper(kind="sine-bar", steps_per_unit_sine=1000.0)
    assert motor.rest_rotation_rad(5000.0) == pytest.approx(math.pi / 2.0)
    assert motor.rest_rotation_rad(-500.0) == pytest.approx(-math.pi / 6.0)


def test_worm_and_leadscrew_swing_with_their_own_turns() -> None:
    motor = stepper(periodic_errors=[WORM, SCREW])
    steps = np.arange(0.0, 160_000.0, 125.0)
    error = np.array([1e6 * motor.rest_rotation_rad(float(s)) - s for s in steps])
    spectrum = 2.0 * np.abs(np.fft.rfft(error)) / steps.size
    # two turns of the worm and 32 of the leadscrew in 160 000 steps
    assert float(spectrum[2]) == pytest.approx(1.5, rel=1e-6)
    assert float(spectrum[32]) == pytest.approx(0.4, rel=1e-6)
    spectrum[[2, 32]] = 0.0
    assert float(spectrum.max()) < 1e-6


def test_a_worms_phase_is_the_seeds_or_as_given_and_outlives_a_restart() -> None:
    """The mechanics are the same metal after a restart, whenever that is."""
    clocks: list[Any] = []

    class Later:
        is_virtual = True

        def __init__(self, utc_ns: int) -> None:
            self._utc_ns = utc_ns

        def utc_ns(self) -> int:
            return self._utc_ns

        def monotonic_ns(self) -> int:
            return 0

    clocks = [Later(10**18), Later(2 * 10**18)]
    benches = [world(drive={"periodic_errors": [WORM]}, clock=clock, seed=4) for clock in clocks]
    phases = [bench.truth()["periodic_errors"][0]["phase_rad"] for bench in benches]
    assert phases[0] == phases[1]
    assert (
        world(drive={"periodic_errors": [WORM]}, seed=5).truth()["periodic_errors"][0]["phase_rad"]
        != phases[0]
    )
    given = stepper(periodic_errors=[WORM | {"phase_rad": math.pi / 2.0}])
    assert 1e6 * given.rest_rotation_rad(0.0) == pytest.approx(1.5)


def test_periodic_errors_move_what_the_detector_sees() -> None:
    """A worm 20 steps off moves the line by 20 steps: its top is found there."""
    per_rad = 2291831.1805
    drive = PERFECT | {"steps_per_radian": per_rad}
    worm = {"name": "worm", "period_steps": 1e9, "amplitude_steps": 20.0, "phase_rad": math.pi / 2.0}
    tops = []
    for errors in ([], [worm]):
        bench = world(drive=drive | {"periodic_errors": errors}, lamp=lamp(line(313.155)))
        bench.shutter.set(True, 0)
        guess = round(bench.lines[0].profile.rotation_rad * per_rad)
        places = range(guess - 60, guess + 60)
        now, rates = 0, []
        for place in places:
            now = bench.stepper.begin(float(place), now) + 10**9
            rates.append(bench.mean_rate_per_s(now, now + 10**8) - 10.0)
        weights = np.array(rates)
        tops.append(float((weights * np.array(places)).sum() / weights.sum()))
    assert tops[0] - tops[1] == pytest.approx(20.0, abs=0.5)


@pytest.mark.parametrize(
    ("keys", "fragment"),
    [
        ({"kind": "sine-bar"}, "steps_per_unit_sine.*missing"),
        ({"kind": "rotary", "steps_per_unit_sine": 1e6}, "only for kind = 'sine-bar'"),
        (
            {"periodic_errors": [{"name": "worm", "period_steps": 0.0, "amplitude_steps": 1.0}]},
            "period_steps",
        ),
    ],
    ids=str,
)
def test_drives_that_make_no_sense_are_refused(keys: dict[str, Any], fragment: str) -> None:
    with pytest.raises(SettingsError, match=fragment):
        parse_options(DriveOptions, keys, "drive")
