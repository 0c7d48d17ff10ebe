"""The in-memory drivers that change the beam, and the detectors beside the photon counter."""

from __future__ import annotations

import asyncio
import statistics
from collections.abc import Awaitable
from typing import Any

import pytest
from simrig import START_NS, Rig, S, bright, play

from drivers.errors import LimitError, LinkError, OverLight
from drivers.protocols import Current, DriverContext
from simulators import memory
from simulators.recorded import RecordedOptions, RecordedWorld

FILTERS = [
    {"name": "uv", "shortest_nm": 220.0, "longest_nm": 400.0, "transmission": 0.5},
    {"name": "long-pass 450", "shortest_nm": 450.0},
]


async def seconds(rig: Rig, call: Awaitable[Any]) -> float:
    before = rig.clock.monotonic_ns()
    await call
    return (rig.clock.monotonic_ns() - before) * 1e-9


def test_a_wheel_takes_its_time_and_changes_the_light() -> None:
    async def story(rig: Rig) -> list[float]:
        top = rig.world.lines[0].profile.rotation_rad
        utc_s = START_NS * 1e-9
        rates = [rig.world.light_rate_per_s(top, utc_s=utc_s)]
        times = []
        for name in ("uv", "uv", "long-pass 450", "none"):
            times.append(await seconds(rig, rig.filter.select(name, deadline_s=1.0)))
            rates.append(rig.world.light_rate_per_s(top, utc_s=utc_s))
        assert times == pytest.approx([0.3, 0.0, 0.3, 0.3])
        return rates

    clear, uv, same, longpass, again = play(story, filters=FILTERS)
    assert uv == same == pytest.approx(0.5 * clear, rel=0.01)
    assert longpass < 0.01 * clear
    assert again == clear


def test_a_place_that_a_wheel_has_not_is_refused() -> None:
    async def story(rig: Rig) -> None:
        with pytest.raises(
            LimitError, match=r"filter: no place is called 'UV'; there are 'none', 'uv', 'long-pass 450'"
        ):
            await rig.filter.select("UV", deadline_s=1.0)
        with pytest.raises(LimitError, match="there are 'lamp'"):
            await rig.lamp.select("hg", deadline_s=1.0)
        context = DriverContext(rig.clock, "carousel", 1, ".", rig.world)
        with pytest.raises(LimitError, match="selects = one of filter, lamp, attenuator"):
            memory.selector({}, context)
        await memory.selector({"selects": "attenuator"}, context).select("none", deadline_s=1.0)

    play(story, filters=FILTERS)


def test_a_lamp_mirror_turns_to_another_lamp() -> None:
    async def story(rig: Rig) -> list[float]:
        seen = []
        for name in ("cd", "hg"):
            await rig.lamp.select(name, deadline_s=1.0)
            seen.append(rig.world.lines[0].strength_per_s)
        return seen

    lamps = [
        {"name": name, "lines": [{"wavelength_air_nm": w, "strength_per_s": s, "doppler_fwhm_pm": 1.0}]}
        for name, w, s in (("hg", 313.155, 10.0), ("cd", 361.051, 20.0))
    ]
    assert play(story, lamps=lamps, without=("lamp",)) == [20.0, 10.0]


def test_a_wheel_arrives_though_nobody_waits() -> None:
    async def story(rig: Rig) -> None:
        with pytest.raises(LinkError, match=r"not in place within 0\.1 s"):
            await rig.filter.select("uv", deadline_s=0.1)
        assert rig.world.in_beam["filter"] == "none"
        turn = asyncio.create_task(rig.filter.select("long-pass 450", deadline_s=1.0))
        await asyncio.sleep(0.25)
        assert rig.world.in_beam["filter"] == "uv"
        turn.cancel()
        with pytest.raises(asyncio.CancelledError):
            await turn
        await asyncio.sleep(0.3)
        assert rig.world.in_beam["filter"] == "long-pass 450"

    play(story, filters=FILTERS)


def test_motorised_slits_change_the_optics_and_know_their_limits() -> None:
    async def story(rig: Rig) -> None:
        narrow = rig.world.truth()["lines"][0]["recorded_fwhm_pm"]
        wider = rig.slits.set_widths(entrance_um=50.0, exit_um=50.0, deadline_s=2.0)
        assert await seconds(rig, wider) == pytest.approx(0.5)
        same = rig.slits.set_widths(entrance_um=50.0, exit_um=50.0, deadline_s=2.0)
        assert await seconds(rig, same) == 0.0
        assert rig.world.truth()["lines"][0]["recorded_fwhm_pm"] > 2.2 * narrow
        with pytest.raises(LimitError, match="exit slit of 700 um; allowed are 5 to 500 um"):
            await rig.slits.set_widths(entrance_um=50.0, exit_um=700.0, deadline_s=2.0)
        assert rig.world.slits_um == (50.0, 50.0)

    play(story)


def test_the_current_follows_the_light_and_the_dark() -> None:
    """1.6e-13 C a photoelectron: dark and light as the counter's own test has them, five sigma and drift."""

    async def total(rig: Rig) -> float:
        readings = [await rig.analogue.measure(S, deadline_s=2.0) for _ in range(40)]
        assert all(reading.gate_ns == S and reading.flags == () for reading in readings)
        return sum(reading.mean_a for reading in readings) / 1.6e-13

    async def story(rig: Rig) -> tuple[float, float]:
        await rig.drive.home(deadline_s=10.0)
        await rig.drive.move_to(rig.top_steps, deadline_s=60.0)
        dark = await total(rig)
        await rig.shutter.set_open(True, deadline_s=1.0)
        return dark, await total(rig)

    dark, light = play(story, analogue={"read_noise_a": 1e-14})
    assert dark == pytest.approx(320, abs=5 * (1.2 * 320) ** 0.5 + 16)
    assert light == pytest.approx(40 * 405, abs=5 * (1.2 * 16200) ** 0.5 + 0.02 * 16200)


def test_too_much_light_trips_the_tube_whoever_reads_it() -> None:
    async def story(rig: Rig) -> int:
        await rig.drive.home(deadline_s=10.0)
        await rig.drive.move_to(rig.top_steps, deadline_s=60.0)
        await rig.shutter.set_open(True, deadline_s=1.0)
        with pytest.raises(OverLight, match="the supply has tripped"):
            await rig.analogue.measure(S, deadline_s=2.0)
        await rig.shutter.set_open(False, deadline_s=1.0)
        return sum([(await rig.detector.gate(S, deadline_s=2.0)).counts for _ in range(20)])

    assert play(story, lamp=bright(1e7)) > 3 * 20 * 8


def test_an_amplifier_at_the_end_of_its_range_says_so() -> None:
    async def story(rig: Rig) -> Current:
        await rig.drive.home(deadline_s=10.0)
        await rig.drive.move_to(rig.top_steps, deadline_s=60.0)
        await rig.shutter.set_open(True, deadline_s=1.0)
        return await rig.analogue.measure(S // 10, deadline_s=2.0)

    clipped = play(story, analogue={"range_a": 1e-11, "overload_a": 1e-9})
    assert clipped.flags == ("clipped",)
    overloaded = play(story, analogue={"range_a": 1e-12, "overload_a": 1e-11})
    assert overloaded.flags == ("overload",)
    assert overloaded.mean_a >= 9.9e36


def test_a_reference_counted_beside_the_detector_sees_the_same_moments() -> None:
    """Two gates at once under a flickering lamp: counts follow each other as counting noise lets them."""

    async def story(rig: Rig) -> list[tuple[int, int]]:
        await rig.drive.home(deadline_s=10.0)
        await rig.drive.move_to(rig.top_steps, deadline_s=60.0)
        await rig.shutter.set_open(True, deadline_s=1.0)
        pairs = []
        for _ in range(150):
            one, two = await asyncio.gather(
                rig.detector.gate(S // 10, deadline_s=2.0), rig.reference.gate(S // 10, deadline_s=2.0)
            )
            pairs.append((one.counts, two.counts))
        return pairs

    changes = {"lamp": bright(1e5) | {"flicker_fraction": 0.05}, "reference": {"rate_per_s": 1e5}}
    light, reference = zip(*play(story, **changes), strict=True)
    # counting alone scatters by 1 % each, the lamp by 5 %: a correlation of 25/26 (textbook)
    assert statistics.correlation(light, reference) > 0.9


def test_a_recorded_spectrum_has_no_wheels() -> None:
    async def story(rig: Rig) -> None:
        recorded = RecordedWorld(
            RecordedOptions(spectrum="x.csv", rate_scale_per_s=1.0),
            wavelength_nm=(500.0, 501.0),
            recorded_counts=(1.0, 2.0),
            clock=rig.clock,
            seed=1,
        )
        for factory in (memory.selector, memory.slits, memory.reference, memory.analogue):
            with pytest.raises(LimitError, match=r"needs \[world\] factory = 'simulators.world:build'"):
                factory({}, DriverContext(rig.clock, "filter", 1, ".", recorded))

    play(story)
