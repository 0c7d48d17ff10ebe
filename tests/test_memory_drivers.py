"""The in-memory drivers: every call of every protocol, halts, deadlines, limits, and scripted faults."""

from __future__ import annotations

import asyncio
import itertools
from collections.abc import Awaitable, Callable
from typing import Any

import pytest
from simrig import Rig, S, bright, play

from drivers.errors import (
    GratingdError,
    Halted,
    HardwareFault,
    LimitError,
    LinkError,
    OverLight,
    ReplyError,
    SettingsError,
)
from drivers.protocols import DriverContext, Gate
from simulators import memory

# ---- what each call does --------------------------------------------------------------------------------


def test_devices_say_who_they_are_and_close_twice() -> None:
    async def story(rig: Rig) -> list[str]:
        devices = (rig.drive, rig.detector, rig.shutter, rig.ambient)
        makers = [(await device.identify(deadline_s=1.0)).maker for device in devices]
        for device in devices * 2:
            await device.close()
        return makers

    makers = play(story)
    assert makers == ["Tallow & Reed", "Nightjar Counting", "Wick & Daughters", "Fenwick Glass"]


def test_a_serial_can_be_given_and_other_options_are_refused() -> None:
    async def story(rig: Rig) -> str:
        context = DriverContext(rig.clock, "detector", 1, ".", rig.world)
        with pytest.raises(SettingsError, match=r"detector\.options.*serail.*did you mean 'serial'"):
            memory.counter({"serail": "X1"}, context)
        return (await memory.counter({"serial": "X1"}, context).identify(deadline_s=1.0)).serial

    assert play(story) == "X1"


def test_without_a_world_a_driver_says_what_is_missing() -> None:
    async def story(rig: Rig) -> None:
        with pytest.raises(LimitError, match=r"give a \[world\] table"):
            memory.shutter({}, DriverContext(rig.clock, "shutter", 1, "."))

    play(story)


def test_moves_need_a_home_and_take_their_time() -> None:
    """400 steps at 80 000 steps/s^2: 2 sqrt(400/80000) s (textbook), as the full speed is not reached."""

    async def story(rig: Rig) -> None:
        with pytest.raises(LimitError, match="not homed"):
            await rig.drive.move_to(10, deadline_s=10.0)
        home = await rig.drive.home(deadline_s=10.0)
        assert (home.steps, home.duration_ns) == (0, 4 * S)
        moved = await rig.drive.move_to(400, deadline_s=10.0)
        assert moved.steps == 400
        assert moved.duration_ns == pytest.approx(2e9 * (400.0 / 80000.0) ** 0.5, abs=5)
        assert (await rig.drive.move_to(400, deadline_s=10.0)).duration_ns == 0

    play(story)


@pytest.mark.parametrize("steps", [-2001, 1_100_001])
def test_moves_stay_within_the_limits(steps: int) -> None:
    async def story(rig: Rig) -> None:
        await rig.drive.home(deadline_s=10.0)
        with pytest.raises(LimitError, match=r"beyond the limits -2000\.\.1100000"):
            await rig.drive.move_to(steps, deadline_s=100.0)
        assert rig.world.stepper.commanded_steps(rig.clock.monotonic_ns()) == 0.0

    play(story)


def test_a_second_move_is_refused_while_one_is_under_way() -> None:
    async def story(rig: Rig) -> int:
        await rig.drive.home(deadline_s=10.0)
        first = asyncio.create_task(rig.drive.move_to(100_000, deadline_s=60.0))
        await asyncio.sleep(1.0)
        for second in (rig.drive.move_to(5, deadline_s=60.0), rig.drive.home(deadline_s=60.0)):
            with pytest.raises(LimitError, match="a move is under way"):
                await second
        return (await first).steps

    assert play(story) == 100_000


def test_halt_ends_the_move_and_leaves_the_drive_where_it_stopped() -> None:
    async def story(rig: Rig) -> None:
        await rig.drive.home(deadline_s=10.0)
        move = asyncio.create_task(rig.drive.move_to(100_000, deadline_s=60.0))
        await asyncio.sleep(2.0)
        await asyncio.gather(rig.drive.halt(), rig.drive.halt())
        with pytest.raises(Halted, match="on the way to 100000"):
            await move
        at = rig.world.stepper.commanded_steps(rig.clock.monotonic_ns() + S)
        # 20 000 steps/s for 2 s, less half the ramp of 0.25 s
        assert at == pytest.approx(20000.0 * (2.0 - 0.125), abs=1.0)
        assert at == round(at)
        await asyncio.sleep(5.0)
        assert rig.world.stepper.commanded_steps(rig.clock.monotonic_ns()) == at
        assert (await rig.drive.move_to(100_000, deadline_s=60.0)).steps == 100_000

    play(story)


def test_halt_at_rest_does_nothing_and_stops_no_later_move() -> None:
    async def story(rig: Rig) -> int:
        await rig.drive.halt()
        await rig.drive.home(deadline_s=10.0)
        await rig.drive.halt()
        return (await rig.drive.move_to(300, deadline_s=10.0)).steps

    assert play(story) == 300


def test_a_halted_homing_leaves_the_drive_without_a_home() -> None:
    async def story(rig: Rig) -> None:
        home = asyncio.create_task(rig.drive.home(deadline_s=10.0))
        await asyncio.sleep(1.0)
        await rig.drive.halt()
        with pytest.raises(Halted):
            await home
        with pytest.raises(LimitError, match="not homed"):
            await rig.drive.move_to(1, deadline_s=10.0)

    play(story)


def test_a_drive_that_loses_its_way_home_must_home_again() -> None:
    async def story(rig: Rig) -> None:
        await rig.drive.home(deadline_s=10.0)
        await rig.drive.move_to(1000, deadline_s=10.0)
        with pytest.raises(LinkError, match="within 1 s"):
            await rig.drive.home(deadline_s=1.0)
        with pytest.raises(LimitError, match="not homed"):
            await rig.drive.move_to(1, deadline_s=10.0)

    play(story)


def test_a_passed_deadline_is_a_link_error_and_the_motor_goes_on() -> None:
    async def story(rig: Rig) -> None:
        await rig.drive.home(deadline_s=10.0)
        before = rig.clock.monotonic_ns()
        with pytest.raises(LinkError, match="within 1 s"):
            await rig.drive.move_to(100_000, deadline_s=1.0)
        assert rig.clock.monotonic_ns() - before == pytest.approx(S, abs=10)
        await asyncio.sleep(10.0)
        assert rig.world.stepper.commanded_steps(rig.clock.monotonic_ns()) == 100_000.0
        with pytest.raises(LinkError, match=r"within 0\.1 s"):
            await rig.detector.gate(S, deadline_s=0.1)

    play(story)


def test_cancelling_a_move_only_abandons_it() -> None:
    async def story(rig: Rig) -> int:
        await rig.drive.home(deadline_s=10.0)
        move = asyncio.create_task(rig.drive.move_to(50_000, deadline_s=60.0))
        await asyncio.sleep(1.0)
        move.cancel()
        with pytest.raises(asyncio.CancelledError):
            await move
        await asyncio.sleep(10.0)
        assert rig.world.stepper.commanded_steps(rig.clock.monotonic_ns()) == 50_000.0
        return (await rig.drive.move_to(50_100, deadline_s=10.0)).steps

    assert play(story) == 50_100


def test_gates_count_dark_when_closed_and_the_line_when_open() -> None:
    """8 dark counts a second, some 398 more on the line's top: Poisson, five sigma."""

    async def total(rig: Rig) -> int:
        gates = [await rig.detector.gate(S, deadline_s=2.0) for _ in range(40)]
        assert all(gate.gate_ns == S and gate.flags == () for gate in gates)
        return sum(gate.counts for gate in gates)

    async def story(rig: Rig) -> tuple[int, int, int]:
        await rig.drive.home(deadline_s=10.0)
        await rig.drive.move_to(rig.top_steps, deadline_s=60.0)
        dark = await total(rig)
        await rig.shutter.set_open(True, deadline_s=1.0)
        light = await total(rig)
        await rig.shutter.set_open(False, deadline_s=1.0)
        return dark, light, await total(rig)

    dark, light, dark_again = play(story)
    assert dark == pytest.approx(320, abs=5 * 320**0.5 + 16)
    assert light == pytest.approx(40 * 405, abs=5 * 16200**0.5 + 0.02 * 16200)
    assert dark_again == pytest.approx(320, abs=5 * 320**0.5 + 16)


def test_closing_the_shutter_within_a_gate_ends_the_light() -> None:
    async def story(rig: Rig) -> tuple[int, int]:
        await rig.drive.home(deadline_s=10.0)
        await rig.drive.move_to(rig.top_steps, deadline_s=60.0)
        await rig.shutter.set_open(True, deadline_s=1.0)
        whole = (await rig.detector.gate(S, deadline_s=2.0)).counts
        gate = asyncio.create_task(rig.detector.gate(S, deadline_s=2.0))
        await asyncio.sleep(0.25)
        await rig.shutter.set_open(False, deadline_s=1.0)
        return whole, (await gate).counts

    whole, cut = play(story)
    assert cut == pytest.approx(0.25 * whole + 6, abs=70)


def test_the_shutter_takes_its_time_only_when_it_moves() -> None:
    async def story(rig: Rig) -> list[int]:
        stamps = [rig.clock.monotonic_ns()]
        for is_open in (False, True, True, False):
            await rig.shutter.set_open(is_open, deadline_s=1.0)
            stamps.append(rig.clock.monotonic_ns())
        return [round((b - a) / 1e6) for a, b in itertools.pairwise(stamps)]

    assert play(story) == [0, 15, 0, 15]


@pytest.mark.parametrize("gate_ns", [0, -1, S + 1])
def test_gates_are_at_most_a_second(gate_ns: int) -> None:
    async def story(rig: Rig) -> None:
        with pytest.raises(LimitError, match="allowed are 1 ns to 1 s"):
            await rig.detector.gate(gate_ns, deadline_s=5.0)

    play(story)


def test_over_light_is_noticed_within_a_millisecond_and_leaves_a_glow() -> None:
    async def story(rig: Rig) -> int:
        await rig.drive.home(deadline_s=10.0)
        await rig.drive.move_to(rig.top_steps, deadline_s=60.0)
        await rig.shutter.set_open(True, deadline_s=1.0)
        before = rig.clock.monotonic_ns()
        with pytest.raises(OverLight, match="8e\\+06 counts per s"):
            await rig.detector.gate(S, deadline_s=2.0)
        assert rig.clock.monotonic_ns() - before == 1_000_000
        await rig.shutter.set_open(False, deadline_s=1.0)
        return sum([(await rig.detector.gate(S, deadline_s=2.0)).counts for _ in range(20)])

    assert play(story, lamp=bright(1e7)) > 3 * 20 * 8


def test_a_saturated_gate_is_flagged() -> None:
    async def story(rig: Rig) -> Gate:
        await rig.drive.home(deadline_s=10.0)
        await rig.drive.move_to(rig.top_steps, deadline_s=60.0)
        await rig.shutter.set_open(True, deadline_s=1.0)
        return await rig.detector.gate(S // 100, deadline_s=2.0)

    gate = play(story, lamp=bright(5e6))
    assert gate.flags == ("saturated",)
    # textbook: r/(1 + r tau), with 31 ns
    assert 0.03e6 < gate.counts < 0.05e6 / (1.0 + 4.5e6 * 31e-9) * 1.1


def test_ambient_reads_the_air_with_its_own_noise() -> None:
    async def story(rig: Rig) -> list[Any]:
        return [await rig.ambient.read(deadline_s=1.0) for _ in range(2)]

    one, two = play(story)
    assert one.temperature_c == pytest.approx(20.0, abs=1.0)
    assert one.pressure_pa == pytest.approx(101325.0, abs=300.0)
    assert one.humidity_percent == 50.0
    assert one != two


# ---- determinism ----------------------------------------------------------------------------------------


async def short_night(rig: Rig) -> list[int]:
    await rig.drive.home(deadline_s=10.0)
    await rig.shutter.set_open(True, deadline_s=1.0)
    counts = []
    for k in range(-30, 31, 3):
        await rig.drive.move_to(rig.top_steps + k, deadline_s=60.0)
        await asyncio.sleep(0.05)
        counts.append((await rig.detector.gate(S // 5, deadline_s=1.0)).counts)
    return counts


def test_the_same_seed_gives_the_same_counts_and_another_seed_others() -> None:
    assert play(short_night, seed=1) == play(short_night, seed=1)
    assert play(short_night, seed=1) != play(short_night, seed=2)


def test_what_other_devices_draw_changes_no_count() -> None:
    async def nosy_night(rig: Rig) -> list[int]:
        for _ in range(17):
            await rig.ambient.read(deadline_s=1.0)
        return await short_night(rig)

    assert play(nosy_night) == play(short_night)


# ---- scripted faults ------------------------------------------------------------------------------------

CALLS: dict[tuple[str, str], Callable[[Rig], Awaitable[Any]]] = {
    ("drive", "identify"): lambda rig: rig.drive.identify(deadline_s=1.0),
    ("drive", "home"): lambda rig: rig.drive.home(deadline_s=60.0),
    ("drive", "move_to"): lambda rig: rig.drive.move_to(100, deadline_s=60.0),
    ("drive", "halt"): lambda rig: rig.drive.halt(),
    ("drive", "close"): lambda rig: rig.drive.close(),
    ("detector", "identify"): lambda rig: rig.detector.identify(deadline_s=1.0),
    ("detector", "gate"): lambda rig: rig.detector.gate(S, deadline_s=2.0),
    ("detector", "close"): lambda rig: rig.detector.close(),
    ("shutter", "identify"): lambda rig: rig.shutter.identify(deadline_s=1.0),
    ("shutter", "set_open"): lambda rig: rig.shutter.set_open(True, deadline_s=1.0),
    ("shutter", "close"): lambda rig: rig.shutter.close(),
    ("ambient", "identify"): lambda rig: rig.ambient.identify(deadline_s=1.0),
    ("ambient", "read"): lambda rig: rig.ambient.read(deadline_s=1.0),
    ("ambient", "close"): lambda rig: rig.ambient.close(),
    ("detector", "measure"): lambda rig: rig.analogue.measure(S, deadline_s=2.0),
    ("filter", "identify"): lambda rig: rig.filter.identify(deadline_s=1.0),
    ("filter", "select"): lambda rig: rig.filter.select("none", deadline_s=1.0),
    ("lamp", "select"): lambda rig: rig.lamp.select("lamp", deadline_s=1.0),
    ("slits", "set_widths"): lambda rig: rig.slits.set_widths(entrance_um=30.0, exit_um=30.0, deadline_s=1.0),
    ("reference", "gate"): lambda rig: rig.reference.gate(S, deadline_s=2.0),
    ("reference", "close"): lambda rig: rig.reference.close(),
}
ERRORS: dict[str, type[Exception]] = {
    "link": LinkError,
    "reply": ReplyError,
    "hardware": HardwareFault,
    "over-light": OverLight,
    "crash": RuntimeError,
    "hang": LinkError,
}


@pytest.mark.parametrize("kind", ERRORS)
@pytest.mark.parametrize(("device", "call"), CALLS)
def test_the_scripted_call_fails_and_no_other(device: str, call: str, kind: str) -> None:
    async def story(rig: Rig) -> list[type[Exception] | None]:
        await rig.drive.home(deadline_s=60.0)
        outcome: list[type[Exception] | None] = []
        for _ in range(5):
            try:
                await CALLS[device, call](rig)
                outcome.append(None)
            except (GratingdError, RuntimeError) as error:
                outcome.append(type(error) if device in str(error) else None)
        return outcome

    first = 3 if (device, call) == ("drive", "home") else 2  # the story itself homes once
    fault = {"device": device, "call": call, "nth": first, "kind": kind, "times": 2}
    error = ERRORS[kind]
    assert play(story, faults=[fault]) == [None, error, error, None, None]


def test_a_fault_can_come_late_in_a_call() -> None:
    async def story(rig: Rig) -> int:
        before = rig.clock.monotonic_ns()
        with pytest.raises(LinkError, match=r"the link went down in gate \(call 1\)"):
            await rig.detector.gate(S, deadline_s=2.0)
        return rig.clock.monotonic_ns() - before

    fault = {"device": "detector", "call": "gate", "nth": 1, "kind": "link", "after_s": 0.4}
    assert play(story, faults=[fault]) == 400_000_000


def test_a_hanging_call_lasts_until_its_deadline() -> None:
    async def story(rig: Rig) -> int:
        before = rig.clock.monotonic_ns()
        with pytest.raises(LinkError, match="no answer within 2 s"):
            await rig.detector.gate(S, deadline_s=2.0)
        return rig.clock.monotonic_ns() - before

    fault = {"device": "detector", "call": "gate", "nth": 1, "kind": "hang"}
    assert play(story, faults=[fault]) == 2 * S


@pytest.mark.parametrize(
    ("fault", "fragment"),
    [
        ({"device": "lathe", "call": "gate", "nth": 1, "kind": "link"}, "lathe"),
        ({"device": "drive", "call": "move_to", "nth": 0, "kind": "link"}, "nth"),
        ({"device": "drive", "call": "move_to", "nth": 1, "kind": "gremlin"}, "gremlin"),
    ],
)
def test_a_wrong_fault_script_is_refused(fault: dict[str, Any], fragment: str) -> None:
    async def story(rig: Rig) -> None:
        raise AssertionError("the world must not have been built")

    with pytest.raises(SettingsError, match=rf"faults\[.*{fragment}"):
        play(story, faults=[fault])
