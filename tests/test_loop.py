"""The whole loop under virtual time: machine, hands, runner, simulated bench, journal, file."""

from __future__ import annotations

import itertools
from collections.abc import Callable
from pathlib import Path

import pytest
from cellar import QUICK_TARGET, Outcome, bench_file, fault, run, target_file

from daq.carry import left_unsafe
from daq.machine import Machine
from daq.records import Kind, StopReason
from daq.runfile import read_run
from daq.runner import Runner
from daq.tally import SETTLING

CALLS = [
    ("drive", "identify", (1,)),
    ("drive", "home", (1,)),
    ("drive", "move_to", (1, 2, 17)),
    ("detector", "identify", (1,)),
    ("detector", "gate", (1, 2, 17)),
    ("shutter", "identify", (1,)),
    ("shutter", "set_open", (1, 2, 3)),
]
EVERY_CALL = [(device, call, nth) for device, call, numbers in CALLS for nth in numbers]


def check_whole(outcome: Outcome) -> None:
    """What holds after every run, however it went."""
    assert outcome.machine.ended
    assert outcome.summary["stop_reason"] in set(StopReason)
    assert outcome.records[-1].kind == Kind.CONCLUSION
    file = read_run(outcome.file)
    assert file.complete
    assert [(r.seq, r.kind, r.body) for r in file.records()] == [
        (r.seq, r.kind, r.body) for r in outcome.records
    ]
    machine = Machine(outcome.records[0].body["plan"])
    for record in outcome.records[1:]:
        machine.step(record.kind, record.body)
    assert machine.ended
    assert machine.points == outcome.machine.points


def test_a_quiet_run_reaches_its_goal(tmp_path: Path) -> None:
    """The truth is 29 pm (Hg 313.155 and 313.184 nm, memory), ratio 0.7; 4 standard uncertainties."""
    outcome = run(tmp_path)
    check_whole(outcome)
    summary = outcome.summary
    assert (summary["verdict"], summary["stop_reason"]) == ("pair", "goal-reached")
    assert summary["separation_u_pm"] <= 0.6
    assert summary["separation_pm"] == pytest.approx(29.0, abs=4 * summary["separation_u_pm"])
    assert summary["ratio"] == pytest.approx(0.7, abs=4 * summary["ratio_u"])
    assert not outcome.world.shutter.is_open
    assert summary["safe"] == {"shutter": "closed", "drive": "stopped", "problems": []}
    assert not left_unsafe(summary)
    assert [notice.seq for notice in outcome.notices] == [record.seq for record in outcome.records[1:]]


@pytest.mark.parametrize(("device", "call", "nth"), EVERY_CALL)
@pytest.mark.parametrize("kind", ["link", "reply", "hang"])
def test_a_repeatable_fault_at_any_call_is_repaired(
    tmp_path: Path, device: str, call: str, nth: int, kind: str
) -> None:
    outcome = run(tmp_path, bench=bench_file(tmp_path, faults=fault(device, call, nth, kind)))
    check_whole(outcome)
    assert len(outcome.of_kind(Kind.FAULT)) == 1
    assert outcome.summary["stop_reason"] == "goal-reached"
    assert not outcome.world.shutter.is_open


@pytest.mark.parametrize(("device", "call", "nth"), EVERY_CALL)
@pytest.mark.parametrize(("kind", "reason"), [("crash", "internal-error"), ("hardware", "fault")])
def test_an_exception_from_any_driver_call_ends_in_a_safe_stop(
    tmp_path: Path, device: str, call: str, nth: int, kind: str, reason: str
) -> None:
    outcome = run(tmp_path, bench=bench_file(tmp_path, faults=fault(device, call, nth, kind)))
    check_whole(outcome)
    assert outcome.summary["stop_reason"] == reason
    (told,) = outcome.of_kind(Kind.FAULT)
    assert call in told["text"]
    assert outcome.summary["cause"] == f"{told['device']}: {told['text']}"
    assert [record.kind for record in outcome.records[-2:]] == [Kind.SAFE, Kind.CONCLUSION]
    assert not outcome.world.shutter.is_open


@pytest.mark.parametrize(("device", "call", "nth"), EVERY_CALL)
def test_a_fault_that_stays_stops_after_three_repairs(
    tmp_path: Path, device: str, call: str, nth: int
) -> None:
    outcome = run(tmp_path, bench=bench_file(tmp_path, faults=fault(device, call, nth, "link", 10_000)))
    check_whole(outcome)
    assert outcome.summary["stop_reason"] == "fault"
    assert len(outcome.of_kind(Kind.FAULT)) == 4
    safe = outcome.of_kind(Kind.SAFE)[-1]
    if (device, call) == ("shutter", "set_open"):
        assert safe["shutter"] == "unknown"
        assert "shutter" in safe["problems"][0]
    else:
        assert safe["shutter"] == "closed"
        assert not outcome.world.shutter.is_open


@pytest.mark.parametrize("call", ["identify", "read"])
@pytest.mark.parametrize("kind", ["link", "reply", "hang", "crash", "hardware"])
@pytest.mark.parametrize("times", [1, 10_000])
def test_an_air_sensor_that_fails_costs_its_reading_only(
    tmp_path: Path, call: str, kind: str, times: int
) -> None:
    """The air is recorded, not used: nothing of the night depends on it."""
    outcome = run(tmp_path, bench=bench_file(tmp_path, faults=fault("ambient", call, 1, kind, times)))
    check_whole(outcome)
    assert outcome.summary["stop_reason"] == "goal-reached"
    assert outcome.of_kind(Kind.PREPARED)[0]["ambient"] is None
    darks = [p for p in outcome.of_kind(Kind.POINT) if not p["light"]]
    assert any("ambient" in p for p in darks) is (times == 1)


@pytest.mark.parametrize("call", ["halt", "set_open"])
def test_making_safe_goes_on_when_half_of_it_fails(tmp_path: Path, call: str) -> None:
    device = "drive" if call == "halt" else "shutter"
    nth = 1 if call == "halt" else 3
    outcome = run(
        tmp_path,
        bench=bench_file(tmp_path, faults=fault(device, call, nth, "crash", 10_000)),
        wishes=[(40.0, lambda runner: runner.wish("stop", reason="stopped-by-user", source="test"))],
    )
    check_whole(outcome)
    safe = outcome.of_kind(Kind.SAFE)[-1]
    expected = ("closed", "unknown") if call == "halt" else ("unknown", "stopped")
    assert (safe["shutter"], safe["drive"]) == expected
    assert left_unsafe(outcome.summary)


def test_over_light_closes_the_shutter_before_anything_else(tmp_path: Path) -> None:
    changes = [("highest_rate_per_s = 2e6", "highest_rate_per_s = 150.0")]
    outcome = run(tmp_path, bench=bench_file(tmp_path, changes=changes))
    check_whole(outcome)
    assert outcome.summary["stop_reason"] == "over-light"
    (told,) = outcome.of_kind(Kind.FAULT)
    assert "narrow the slits" in told["text"]
    assert not outcome.world.shutter.is_open


def _stop(runner: Runner) -> None:
    runner.wish("stop", reason="stopped-by-user", source="test")


@pytest.mark.parametrize("at_s", [0.0, 0.001, 2.0, 4.0, 8.03, 8.2, 12.345, 20.0, 33.333])
def test_a_stop_at_any_moment_ends_cleanly_and_soon(tmp_path: Path, at_s: float) -> None:
    outcome = run(tmp_path, wishes=[(at_s, _stop)])
    check_whole(outcome)
    assert outcome.summary["stop_reason"] == "stopped-by-user"
    (asked,) = outcome.of_kind(Kind.WISH)
    (safe,) = outcome.of_kind(Kind.SAFE)
    assert safe["at_ns"] - asked["at_ns"] < 1.1e9, "one gate and a shutter at most"
    assert not outcome.world.shutter.is_open
    assert outcome.world.stepper.is_still(outcome.world.clock.monotonic_ns())


def test_pause_closes_the_shutter_and_resume_goes_on(tmp_path: Path) -> None:
    def pause(runner: Runner) -> None:
        runner.wish("pause", source="test")

    def resume(runner: Runner) -> None:
        runner.wish("resume", source="test")

    outcome = run(tmp_path, wishes=[(15.1, pause), (80.0, resume)])
    check_whole(outcome)
    assert outcome.summary["stop_reason"] == "goal-reached"
    first = outcome.of_kind(Kind.SAFE)[0]
    later = [p for p in outcome.of_kind(Kind.POINT) if p["at_ns"] > first["at_ns"]]
    assert first["shutter"] == "closed"
    assert min(p["at_ns"] for p in later) >= 80.0e9
    assert len(outcome.of_kind(Kind.PREPARED)) == 1, "a pause does not lose the position"


def test_pause_and_resume_within_a_dwell_lose_no_light(tmp_path: Path) -> None:
    """With dwells of 3.4 s in gates of 1 s a pause keeps whole gates, and the rest is counted afterwards."""
    text = QUICK_TARGET.replace("dwell_s = 0.25", "dwell_s = 3.4").replace("400.0", "1500.0")
    wishes: list[tuple[float, Callable[[Runner], None]]] = []
    for at_s in (40.0, 61.7, 83.4):
        wishes.append((at_s, lambda runner: runner.wish("pause", source="test")))
        wishes.append((at_s + 0.5, lambda runner: runner.wish("resume", source="test")))
    outcome = run(tmp_path, target=target_file(tmp_path, text), wishes=wishes)
    check_whole(outcome)
    points = [point for point in outcome.of_kind(Kind.POINT) if point["sweep"] != SETTLING]
    assert any(not point["complete"] for point in points)
    for (_, _), visit in itertools.groupby(points, key=lambda p: (p["sweep"], p["index"])):
        parts = list(visit)
        total = sum(part["gate_ns"] for part in parts)
        last = parts[-1]["sweep"] == points[-1]["sweep"] and parts[-1]["index"] == points[-1]["index"]
        assert total == (3_400_000_000 if parts[0]["light"] else 13_600_000_000) or last


def test_the_time_limit_stops_between_gates(tmp_path: Path) -> None:
    text = QUICK_TARGET.replace("time_s = 400.0", "time_s = 25.0")
    outcome = run(tmp_path, target=target_file(tmp_path, text))
    check_whole(outcome)
    assert outcome.summary["stop_reason"] == "time-limit"
    assert 25.0 <= outcome.summary["bench_time_s"] < 26.1


def test_the_light_limit_is_not_exceeded(tmp_path: Path) -> None:
    text = QUICK_TARGET.replace("[limits]", "[limits]\nlight_s = 13.3")
    outcome = run(tmp_path, target=target_file(tmp_path, text))
    check_whole(outcome)
    assert outcome.summary["stop_reason"] == "light-limit"
    light = sum(p["gate_ns"] for p in outcome.of_kind(Kind.POINT) if p["light"])
    assert light == 13_300_000_000


def test_a_display_that_fails_ends_in_a_safe_stop_not_a_hang(tmp_path: Path) -> None:
    def broken(notice: object) -> None:
        if getattr(notice, "seq", 0) == 20:
            raise ValueError("no room on the screen")

    outcome = run(tmp_path, observe=broken)
    check_whole(outcome)
    assert outcome.summary["stop_reason"] == "internal-error"
    assert "no room on the screen" in outcome.of_kind(Kind.FAULT)[0]["text"]


def test_an_analysis_that_fails_still_leaves_a_whole_file(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    def broken(*_: object) -> None:
        raise ArithmeticError("singular")

    monkeypatch.setattr("daq.looks.answer", broken)
    outcome = run(tmp_path)
    check_whole(outcome)
    assert outcome.summary["stop_reason"] == "internal-error"
    assert outcome.summary["verdict"] == "undecided"
    assert outcome.summary["flags"] == ["analysis-failed"]


def test_every_prefix_of_a_run_reopens_and_ends(tmp_path: Path) -> None:
    """Recovery without devices from each prefix: the points of the prefix, concluded as interrupted."""
    from machine_bench import Play

    outcome = run(tmp_path)
    plan = outcome.records[0].body["plan"]
    records = outcome.records[1:-1]
    for length in range(0, len(records) + 1):
        play = Play(plan)
        machine = Machine(plan)
        for record in records[:length]:
            machine.step(record.kind, record.body)
        play.machine = machine
        rows = machine.tally.snapshot().rows
        play.good_light = [sum(r[2] for r in rows), sum(r[3] for r in rows)]
        play.session(devices=length % 2 == 0)
        play.to_the_end(most=100_000)
        assert play.machine.points >= sum(r.kind == Kind.POINT for r in records[:length])
