"""The simulated current, the reference counter and the flicker they share with the photon counter."""

from __future__ import annotations

import math
from typing import Any

import numpy as np
import pytest
from simbench import START_NS, lamp, line, world

from drivers.errors import SettingsError
from drivers.settings import parse_options
from simulators.analogue import OVERLOAD_A, Ammeter, AnalogueOptions
from simulators.draw import Draws
from simulators.lamp import Lamp, LampOptions
from simulators.reference import ReferenceCounter, ReferenceOptions

S = 1_000_000_000
START_S = START_NS * 1e-9


def ammeter(seed: int = 1, **changes: Any) -> Ammeter:
    return Ammeter(parse_options(AnalogueOptions, changes, "analogue"), Draws(seed, "ammeter"))


@pytest.mark.parametrize(
    ("rate_per_s", "gate_s", "excess", "read_noise_a"),
    [(1e6, 0.1, 1.0, 0.0), (1e6, 0.1, 1.5, 0.0), (2e3, 0.5, 1.2, 5e-12), (0.0, 0.2, 1.2, 2e-12)],
)
def test_the_currents_variance_is_shot_noise_and_read_noise(
    rate_per_s: float, gate_s: float, excess: float, read_noise_a: float
) -> None:
    """Schottky's formula for a multiplier (textbook): variance = F q I/T, and white read noise as 1/T.

    Seed 2; five standard deviations of a mean and of a variance."""
    meter = ammeter(2, charge_c=1.6e-13, excess_factor=excess, read_noise_a=read_noise_a, offset_a=3e-12)
    readings = np.array([meter.read(rate_per_s=rate_per_s, gate_s=gate_s)[0] for _ in range(6000)])
    current_a = 1.6e-13 * rate_per_s
    variance = excess * 1.6e-13 * current_a / gate_s + read_noise_a**2 / gate_s
    assert float(readings.mean()) == pytest.approx(
        current_a + 3e-12, abs=5.0 * math.sqrt(variance / readings.size)
    )
    # as a ratio: pytest.approx knows no difference below 1e-12
    assert float(readings.var()) / variance == pytest.approx(1.0, abs=5.0 * math.sqrt(2.0 / readings.size))


def test_a_current_beyond_the_range_is_clipped_and_then_means_nothing() -> None:
    """9.9e37 stands for an overload in SCPI (open standard): finite, and no current."""
    meter = ammeter(range_a=1e-7, overload_a=2e-7)
    assert meter.read(rate_per_s=1e5, gate_s=0.1)[1] == ()
    assert meter.read(rate_per_s=1e6, gate_s=0.1) == (1e-7, ("clipped",))
    assert meter.read(rate_per_s=2e6, gate_s=0.1) == (OVERLOAD_A, ("overload",))


def test_an_overload_below_the_range_is_refused() -> None:
    with pytest.raises(SettingsError, match=r"overload_a.*must not be below range_a"):
        ammeter(range_a=1e-7, overload_a=1e-8)


def test_the_reference_counts_the_lamp_with_its_own_dark_and_dead_time() -> None:
    """Textbook: n/(1 + n tau) of a non-paralysable counter. Seed 3."""
    options = ReferenceOptions(rate_per_s=2e5, dark_rate_per_s=50.0, dead_time_ns=500.0)
    counter = ReferenceCounter(options, Draws(3, "reference"))
    for gain in (0.0, 0.5, 1.0):
        counts = [counter.count(gain=gain, gate_s=0.5) for _ in range(50)]
        true = gain * 2e5 + 50.0
        expected = 0.5 * true / (1.0 + true * 500e-9)
        assert float(np.mean(counts)) == pytest.approx(expected, abs=5.0 * math.sqrt(expected / 50.0))


def test_the_references_own_noise_adds_to_that_of_counting() -> None:
    """Seed 6: relative variance 1/N + noise^2 (textbook), five standard deviations."""
    options = ReferenceOptions(rate_per_s=1e5, dark_rate_per_s=0.0, dead_time_ns=0.0, noise_fraction=0.01)
    counter = ReferenceCounter(options, Draws(6, "reference"))
    counts = np.array([counter.count(gain=1.0, gate_s=1.0) for _ in range(3000)], dtype=np.float64)
    relative = float(counts.var() / counts.mean() ** 2)
    assert relative == pytest.approx(1e-5 + 1e-4, rel=5.0 * math.sqrt(2.0 / 3000.0))


def flickering(rms: float, cell_s: float, seed: int = 1) -> Lamp:
    options = lamp(line(313.155), flicker_fraction=rms, flicker_time_s=cell_s)
    return Lamp.build(parse_options(LampOptions, options, "lamp"), seed, START_S)


def test_flicker_is_as_large_as_stated_and_averages_out_in_long_gates() -> None:
    """White noise in cells: the variance over n cells is a hundredth for n = 100. Seed 8."""
    source = flickering(0.02, 0.05, seed=8)
    short = np.array(
        [source.flicker(START_S + k * 0.05 + 0.01, START_S + k * 0.05 + 0.03) for k in range(3000)]
    )
    long = np.array([source.flicker(START_S + 5.0 * k, START_S + 5.0 * k + 5.0) for k in range(400)])
    assert float(short.std()) == pytest.approx(0.02, rel=5.0 / math.sqrt(6000.0))
    assert float(short.mean()) == pytest.approx(1.0, abs=5.0 * 0.02 / math.sqrt(3000.0))
    assert float(long.std()) == pytest.approx(0.002, rel=5.0 / math.sqrt(800.0))


def test_who_looks_at_the_same_moment_sees_the_same_flicker() -> None:
    source = flickering(0.05, 0.1)
    first = source.flicker(START_S + 1.23, START_S + 1.83)
    source.flicker(START_S + 7.0, START_S + 9.0)
    assert source.flicker(START_S + 1.23, START_S + 1.83) == first
    halves = source.flicker(START_S + 1.23, START_S + 1.53), source.flicker(START_S + 1.53, START_S + 1.83)
    assert sum(halves) / 2.0 == pytest.approx(first, rel=1e-6)


def test_lamp_noise_divides_out_against_the_reference() -> None:
    """Detector and reference over the same gates: the ratio of true rates is steady, each alone is not."""
    bench = world(
        lamp=lamp(line(313.155), flicker_fraction=0.05, drift_fraction=0.02, warm_up_s=40.0)
        | {"burning_s": 0.0},
        detector={"dark_rate_per_s": 0.0},
        drive={"steps_per_radian": 2291831.1805},
    )
    bench.shutter.set(True, 0)
    now = bench.stepper.begin(bench.lines[0].profile.rotation_rad * 2291831.1805, 0) + S
    gates = [(now + k * S, now + k * S + S // 5) for k in range(200)]
    light = np.array([bench.mean_rate_per_s(*gate) for gate in gates])
    seen = np.array([bench.mean_lamp_gain(*gate) for gate in gates])
    assert float(light.std() / light.mean()) > 0.03
    assert float((light / seen).std() / (light / seen).mean()) < 1e-6
    assert float(seen[:5].mean()) < 0.88 < float(seen[-50:].mean()), "it warmed up"


def test_the_reference_sees_the_lamp_behind_a_closed_shutter_and_not_when_it_is_off() -> None:
    bench = world()
    assert bench.mean_lamp_gain(0, S) == pytest.approx(1.0)
    bench.lamp.switch(False, START_S)
    assert bench.mean_lamp_gain(0, S) == 0.0
