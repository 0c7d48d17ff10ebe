"""Hands and runner against drivers that misbehave in ways the fault scripts do not know."""

from __future__ import annotations

import asyncio
import math
from pathlib import Path
from typing import Any

import numpy as np
import pytest
from cellar import QUICK_TARGET, bench_file, fault, run, target_file

from daq.records import Kind
from daq.runner import Runner
from drivers.protocols import AmbientReading, Gate


def _stop(runner: Runner) -> None:
    runner.wish("stop", reason="stopped-by-user", source="test")


def _patched(runner: Runner, role: str, call: str, replacement: Any) -> None:
    device = getattr(runner._hands._devices, role)
    setattr(device, call, replacement)


async def _hang(*_: object, **__: object) -> None:
    await asyncio.sleep(1e9)


@pytest.mark.parametrize(
    ("role", "call"),
    [
        ("drive", "identify"),
        ("drive", "home"),
        ("drive", "move_to"),
        ("drive", "halt"),
        ("detector", "gate"),
        ("shutter", "set_open"),
    ],
)
def test_a_driver_that_never_answers_is_not_waited_for(tmp_path: Path, role: str, call: str) -> None:
    """A driver that ignores its own deadline is abandoned; the run repairs in vain and stops."""
    outcome = run(
        tmp_path,
        wishes=[(0.0, lambda runner: _patched(runner, role, call, _hang)), (300.0, _stop)],
    )
    assert outcome.summary["stop_reason"] in ("fault", "goal-reached", "stopped-by-user")
    assert outcome.world.clock.monotonic_ns() < 700e9
    if call != "halt":
        assert "no answer within" in outcome.of_kind(Kind.FAULT)[0]["text"]


def test_a_wish_nobody_knows_is_refused_where_it_is_made(tmp_path: Path) -> None:
    refused: list[str] = []

    def ask(runner: Runner) -> None:
        for wish, reason in (("puase", ""), ("stop", "typo")):
            with pytest.raises(ValueError, match=r"puase|typo"):
                runner.wish(wish, reason=reason, source="test")
            refused.append(wish)

    outcome = run(tmp_path, wishes=[(12.0, ask)])
    assert refused == ["puase", "stop"]
    assert outcome.summary["stop_reason"] == "goal-reached"


def test_a_record_that_cannot_be_taken_is_not_journalled(tmp_path: Path) -> None:
    """It would poison every recovery; it becomes an internal fault and a safe stop."""
    outcome = run(
        tmp_path, wishes=[(40.0, lambda runner: runner.post(Kind.WISH, {"at_ns": 0, "wish": "dance"}))]
    )
    assert outcome.summary["stop_reason"] == "internal-error"
    assert outcome.of_kind(Kind.WISH) == []
    assert "dance" in outcome.of_kind(Kind.FAULT)[0]["text"]


def test_air_without_sense_is_not_recorded(tmp_path: Path) -> None:
    async def nonsense(*, deadline_s: float) -> AmbientReading:
        return AmbientReading(math.nan, 101_325.0, 50.0)

    outcome = run(tmp_path, wishes=[(0.0, lambda r: _patched(r, "ambient", "read", nonsense))])
    assert outcome.summary["stop_reason"] == "goal-reached"
    assert outcome.of_kind(Kind.PREPARED)[0]["ambient"] is None


@pytest.mark.parametrize("counts", [-3, 3.5, "7", None])
def test_counts_without_sense_are_reply_errors(tmp_path: Path, counts: Any) -> None:
    async def nonsense(gate_ns: int, *, deadline_s: float) -> Gate:
        return Gate(counts, gate_ns)

    outcome = run(tmp_path, wishes=[(0.0, lambda r: _patched(r, "detector", "gate", nonsense))])
    assert outcome.summary["stop_reason"] == "fault"
    assert {f["error"] for f in outcome.of_kind(Kind.FAULT)} == {"ReplyError"}
    assert outcome.of_kind(Kind.POINT) == []


def _watched(runner: Runner, change: Any) -> None:
    """The detector's own gates, seen through `change`."""
    gate = runner._hands._devices.detector.gate

    async def changed(gate_ns: int, *, deadline_s: float) -> Gate:
        return change(await gate(gate_ns, deadline_s=deadline_s))

    _patched(runner, "detector", "gate", changed)


def test_numbers_of_an_array_library_are_whole_numbers_too(tmp_path: Path) -> None:
    def change(gate: Gate) -> Gate:
        return Gate(np.int64(gate.counts), np.int64(gate.gate_ns))  # type: ignore[arg-type]

    outcome = run(tmp_path, wishes=[(0.0, lambda r: _watched(r, change))])
    assert outcome.summary["stop_reason"] == "goal-reached"


def test_a_counter_whose_gates_are_a_little_short_is_taken_as_it_is(tmp_path: Path) -> None:
    """Many quantise the gate; nobody asks for the 37 ns that are missing."""
    outcome = run(tmp_path, wishes=[(0.0, lambda r: _watched(r, lambda g: Gate(g.counts, g.gate_ns - 37)))])
    assert outcome.summary["stop_reason"] == "goal-reached"
    points = outcome.of_kind(Kind.POINT)
    assert {p["gates"] for p in points if p["light"]} == {1}
    assert all(p["complete"] for p in points)


def test_over_light_after_counted_gates_closes_the_shutter_and_stops(tmp_path: Path) -> None:
    """The third gate of a dwell trips: two are kept, and the next record is the fault."""
    light = 20
    bench = bench_file(tmp_path, faults=fault("detector", "gate", light, "over-light"))
    outcome = run(tmp_path, bench=bench, target=target_file(tmp_path, LONG_DWELLS))
    kinds = [(r.kind, r.body.get("gates")) for r in outcome.records]
    at = next(i for i, (kind, _) in enumerate(kinds) if kind == Kind.FAULT)
    assert kinds[at - 1][0] == Kind.POINT
    assert not outcome.records[at - 1].body["complete"]
    assert outcome.summary["stop_reason"] == "over-light"
    assert not outcome.world.shutter.is_open


def test_a_driver_that_fails_before_it_can_be_awaited_does_not_spoil_making_safe(tmp_path: Path) -> None:
    def broken(is_open: bool, *, deadline_s: float) -> None:
        raise TypeError("no such argument")

    outcome = run(
        tmp_path, wishes=[(40.0, lambda r: _patched(r, "shutter", "set_open", broken)), (41.0, _stop)]
    )
    assert outcome.summary["safe"]["shutter"] == "unknown"
    assert outcome.summary["safe"]["drive"] == "stopped"


LONG_DWELLS = QUICK_TARGET.replace("dwell_s = 0.25", "dwell_s = 3.4").replace("400.0", "900.0")


def test_gates_counted_before_a_fault_are_kept(tmp_path: Path) -> None:
    """A gate in a dark of 13.6 s and one in a light of 3.4 s fail: those before them count."""
    bench = bench_file(
        tmp_path, faults=fault("detector", "gate", 5, "link") + fault("detector", "gate", 17, "link")
    )
    outcome = run(tmp_path, bench=bench, target=target_file(tmp_path, LONG_DWELLS))
    partial = [p for p in outcome.of_kind(Kind.POINT) if not p["complete"]]
    assert [(p["light"], p["gates"]) for p in partial[:1]] == [(False, 4)]
    assert len(outcome.of_kind(Kind.FAULT)) == 2
    light = sum(p["gate_ns"] for p in outcome.of_kind(Kind.POINT) if p["light"])
    assert outcome.summary["light_s"] == pytest.approx(light * 1e-9)


def test_the_shutter_stays_closed_when_a_stop_comes_before_it_opens(tmp_path: Path) -> None:
    """The stop falls into the settling before the first light: nothing may open after it."""
    quiet = run(tmp_path / "a")
    first = next(p for p in quiet.of_kind(Kind.POINT) if p["light"])
    opened: list[bool] = []

    def stop_and_watch(runner: Runner) -> None:
        _stop(runner)
        shutter = runner._hands._devices.shutter
        set_open = shutter.set_open

        async def watched(is_open: bool, *, deadline_s: float) -> None:
            opened.append(is_open)
            await set_open(is_open, deadline_s=deadline_s)

        shutter.set_open = watched

    run(tmp_path / "b", wishes=[(first["at_ns"] * 1e-9 + 0.03, stop_and_watch)])
    assert opened
    assert not any(opened)


def test_a_conclusion_that_fails_still_ends_the_run(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    from daq.summary import conclusion

    def broken(head: Any, machine: Any, look: Any) -> dict[str, Any]:
        if look is not None:
            raise KeyError("second_nm")
        return conclusion(head, machine, None)

    monkeypatch.setattr("daq.carry.conclusion", broken)
    outcome = run(tmp_path)
    assert outcome.summary["flags"] == ["analysis-failed"]
    assert "second_nm" in outcome.of_kind(Kind.FAULT)[0]["text"]


def test_system_exit_in_a_task_makes_the_bench_safe(tmp_path: Path) -> None:
    worlds: list[Any] = []

    def leave(notice: Any) -> None:
        if notice.kind == Kind.POINT and notice.body["light"]:
            raise SystemExit(9)

    def remember(runner: Runner) -> None:
        worlds.append(runner._hands._devices.drive._world)

    with pytest.raises(SystemExit):
        run(tmp_path, wishes=[(0.0, remember)], observe=leave)
    assert not worlds[0].shutter.is_open
