"""A night as a whole: what happens to the other targets when one of them, or somebody, stops."""

from __future__ import annotations

from pathlib import Path
from typing import Any

import pytest
from cellar import QUICK_TARGET, START_UTC_NS, bench_file, fault, target_file

from daq.carry import Outcome, Stopper, left_unsafe
from daq.cli import Exit
from daq.cli_bench import _exit_code
from daq.night import NightOrder, run_night
from daq.records import Kind, StopReason
from daq.runner import Notice
from drivers.bench import LoadedBench
from drivers.clock import Clock, run_virtual
from drivers.errors import DeviceError


def night(
    folder: Path, bench: LoadedBench, *, observe: Any = lambda notice: None, stopper: Stopper | None = None
) -> Outcome:
    """Three quick targets on one bench."""
    targets = [
        target_file(folder, QUICK_TARGET.replace("Quick pair", f"Quick {n}"), f"target-{n}.toml")
        for n in "abc"
    ]
    order = NightOrder(bench=bench, targets=targets, out=folder / "runs", seed=1)

    async def work(clock: Clock) -> Outcome:
        return await run_night(order, clock, observe=observe, stopper=stopper)

    return run_virtual(work, START_UTC_NS)


def test_a_quiet_night_does_all(tmp_path: Path) -> None:
    outcome = night(tmp_path, bench_file(tmp_path))
    assert [run["target"] for run in outcome.runs] == ["Quick a", "Quick b", "Quick c"]
    assert (outcome.not_started, outcome.problems, outcome.stopped) == ([], [], None)
    assert _exit_code(outcome, False, False) is Exit.DONE
    assert len(list((tmp_path / "runs").glob("*.h5"))) == 3


def test_a_stop_after_a_finished_run_is_not_a_finished_night(tmp_path: Path) -> None:
    """The stop comes when the first run has just concluded: two targets were never started."""
    stopper = Stopper()

    def watch(notice: Notice) -> None:
        if notice.kind == Kind.CONCLUSION:
            stopper.stop(StopReason.STOPPED_BY_USER, "test")

    outcome = night(tmp_path, bench_file(tmp_path), observe=watch, stopper=stopper)
    assert [run["stop_reason"] for run in outcome.runs] == ["goal-reached"]
    assert outcome.not_started == ["Quick b", "Quick c"]
    assert _exit_code(outcome, False, False) is Exit.STOPPED


def test_a_fault_at_one_target_does_not_cost_the_others(tmp_path: Path) -> None:
    outcome = night(tmp_path, bench_file(tmp_path, faults=fault("drive", "move_to", 5, "hardware")))
    assert [run["stop_reason"] for run in outcome.runs] == ["fault", "goal-reached", "goal-reached"]
    assert _exit_code(outcome, False, False) is Exit.BENCH_FAULT


def test_a_shutter_that_does_not_close_ends_the_night(tmp_path: Path) -> None:
    """Opening light after light on a bench nobody can darken helps nobody."""
    outcome = night(tmp_path, bench_file(tmp_path, faults=fault("shutter", "set_open", 3, "link", 10_000)))
    (run,) = outcome.runs
    assert left_unsafe(run)
    assert run["safe"]["shutter"] == "unknown"
    assert outcome.not_started == ["Quick b", "Quick c"]
    assert _exit_code(outcome, False, True) is Exit.BENCH_FAULT


def test_a_run_that_breaks_off_is_told_and_the_others_go_on(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    """Its journal cannot be written for once, as on a disk that was full for a while."""
    from daq.journal import Journal, JournalError

    append = Journal.append
    broken: list[str] = []

    def once(self: Journal, kind: str, body: Any) -> int:
        if "quick-b" in self.path.name and kind == Kind.POINT:
            broken.append(kind)
            raise JournalError(f"{self.path}: the disk is full")
        return append(self, kind, body)

    monkeypatch.setattr(Journal, "append", once)
    outcome = night(tmp_path, bench_file(tmp_path))
    assert broken == [Kind.POINT]
    assert [run["target"] for run in outcome.runs] == ["Quick a", "Quick c"]
    (problem,) = outcome.problems
    assert "Quick b" in problem
    assert "disk is full" in problem
    assert _exit_code(outcome, True, False) is Exit.BROKE_OFF


def test_devices_opened_before_one_that_cannot_be_are_closed_again(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    closed: list[str] = []

    async def note(self: Any) -> None:
        closed.append(self._role)

    def refuse(options: Any, context: Any) -> Any:
        raise DeviceError(context.role, "nobody answers")

    monkeypatch.setattr("simulators.memory_device.MemoryDevice.close", note)
    monkeypatch.setattr("simulators.memory.shutter", refuse)
    with pytest.raises(DeviceError, match="nobody answers"):
        night(tmp_path, bench_file(tmp_path))
    assert closed == ["drive", "detector"]
