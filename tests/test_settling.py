"""Before the first sweep of a session the dark is repeated until it has settled; and further ways to end."""

from __future__ import annotations

import json
from pathlib import Path

import pytest
from cellar import QUICK_TARGET, START_UTC_NS, bench_file, fault, run, target_file
from commandline import gratingd
from machine_bench import GATE_NS, Play, plan, replay, state_of, wish

from daq.machine import NARROW, NARROW_IN_A_ROW, StartPoint
from daq.records import Kind, StopReason, utc_stamp
from daq.runfile import read_run
from daq.tally import KEPT_UNSETTLED, SETTLING


def settling(play: Play) -> list[int]:
    """Go on until the first point of a sweep is under way; the counts of the dark dwells before it."""
    play.finish()  # prepared
    while isinstance(play.outstanding, StartPoint) and play.outstanding.sweep == SETTLING:
        play.finish()
    return [body["counts"] for kind, body in play.journal if kind == Kind.POINT]


def test_the_dark_is_repeated_until_it_has_settled_and_only_the_settled_part_is_summed() -> None:
    """It begins at 410 counts and halves its excess with each dwell; the light is not let in before."""
    play = Play(plan(dark_settling_ns=1000 * GATE_NS))
    counts = settling(play)
    assert counts[:4] == [410, 210, 110, 60]
    assert len(counts) > 8
    assert play.machine.tally.dark_is_settled
    assert not play.machine.dark_is_unsettled
    assert play.machine.light_ns == 0
    snapshot = play.machine.tally.snapshot()
    dwells = snapshot.dark_gate_ns // (2 * GATE_NS)
    assert 4 <= dwells < len(counts)
    assert snapshot.dark_counts == sum(counts[-dwells:])
    assert max(counts[-dwells:]) < 60, "the raised ones are recorded, not summed"


def test_a_dark_that_does_not_settle_in_its_time_is_taken_as_it_last_was() -> None:
    play = Play(plan(dark_settling_ns=9 * GATE_NS))
    counts = settling(play)
    assert not play.machine.tally.dark_is_settled
    assert len(counts) == 4
    assert play.machine.tally.snapshot().dark_counts == sum(counts[-KEPT_UNSETTLED:])
    assert play.machine.dark_is_unsettled, "and the summary says so"
    play.finish()
    assert play.outstanding.sweep == 0


def test_every_session_waits_for_the_dark_anew_and_keeps_what_was_settled_before() -> None:
    """After a crash the bench may have been in daylight."""
    play = Play(plan(dark_settling_ns=1000 * GATE_NS))
    settling(play)
    before = play.machine.tally.snapshot()
    for _ in range(5):
        play.finish()
    play.session(devices=True)
    settling(play)
    after = play.machine.tally.snapshot()
    assert after.dark_counts > before.dark_counts
    assert after.dark_gate_ns > before.dark_gate_ns
    assert state_of(replay(play.plan, play.journal)) == state_of(play.machine)


def test_the_dwells_of_every_session_are_numbered_anew() -> None:
    play = Play(plan(dark_settling_ns=1000 * GATE_NS))
    first = len(settling(play))
    play.session(devices=True)
    second = len(settling(play)) - first
    numbers = [body["index"] for kind, body in play.journal if kind == Kind.POINT]
    assert numbers == [*range(first), *range(second)]


def test_the_darks_of_the_sweeps_are_kept_with_the_middles_of_their_dwells() -> None:
    """In bench time, which goes on over sessions; without those before the first sweep, and without a
    flagged one."""
    play = Play(plan(dark_settling_ns=1000 * GATE_NS))
    wanted = []

    def sweeps(number: int, began_ns: int) -> None:
        for _ in range(number):
            start = play.outstanding
            assert isinstance(start, StartPoint)
            assert (start.index, start.visit.light) == (0, False)
            middle_ns = began_ns + play.now_ns + GATE_NS  # a dwell is two gates long
            play.finish()
            wanted.append((play.journal[-1][1]["counts"], 2 * GATE_NS, middle_ns))
            done = play.machine.sweeps_done
            while play.machine.sweeps_done == done:
                play.go_on()

    settling(play)
    sweeps(2, 0)
    first_session_ns = play.now_ns
    play.session(devices=True)
    settling(play)
    play.finish(10)  # too much light: flagged
    while play.machine.sweeps_done == 2:
        play.go_on()
    sweeps(2, first_session_ns)
    assert play.machine.darks == wanted


def test_a_pause_while_the_dark_settles_goes_on_where_it_was() -> None:
    play = Play(plan(dark_settling_ns=1000 * GATE_NS), settle_at_look=2)
    play.finish()
    play.finish()
    wish(play, "pause")
    play.finish(2)
    play.finish()
    wish(play, "resume")
    assert play.outstanding.sweep == SETTLING
    play.to_the_end()


def test_no_settling_where_no_dark_is_asked_for() -> None:
    window = plan()["window"] | {"dark_ns": 0}
    play = Play(plan(window=window, dark_settling_ns=1000 * GATE_NS))
    play.finish()
    assert play.outstanding.sweep == 0
    assert not play.machine.dark_is_unsettled


def test_the_settled_darks_of_a_run_are_those_of_its_file(tmp_path: Path) -> None:
    """The export sums the points by itself: both must agree, dwell for dwell."""
    import h5py

    outcome = run(tmp_path)
    with h5py.File(outcome.file) as file:
        data = file["entry/data"]
        assert int(data["dark_counts"][()]) == outcome.machine.tally.snapshot().dark_counts
        assert int(data["dark_gate_ns"][()]) == outcome.machine.tally.snapshot().dark_gate_ns
        sweeps = file["entry/scan/sweep"][:]
    assert (sweeps[:4] == SETTLING).all()


def test_after_too_much_light_the_next_run_waits_for_the_dark_and_says_if_it_has_not_settled(
    tmp_path: Path,
) -> None:
    """A night of two: the first trips the counter, whose dark is raised sixfold and decays for minutes."""
    bench_file(tmp_path, faults=fault("detector", "gate", 20, "over-light"))
    for number in (1, 2):
        target_file(tmp_path, QUICK_TARGET.replace("Quick", f"Quick {number}"), f"{number}.toml")
    night = tmp_path / "night.toml"
    runs = "".join(f'[[runs]]\ntarget = "{number}.toml"\n' for number in (1, 2))
    night.write_text(f'format = 1\nname = "Two"\n{runs}', encoding="utf-8")
    done = gratingd("night", "bench.toml", night, "--confirm", "--json", cwd=tmp_path)
    first, second = json.loads(done.stdout)["runs"]
    assert first["stop_reason"] == "over-light"
    records = list(read_run(Path(second["file"])).records())
    darks = [r.body for r in records if r.kind == Kind.POINT and r.body["sweep"] == SETTLING]
    # half of the 400 s that the run has, in dwells of 1 s; at once it would have been content with four
    assert len(darks) > 100
    assert ("dark-unsettled" in second["flags"]) == (second["points"] > len(darks))


def test_a_run_that_ends_before_the_line_does_not_blame_the_lamp(tmp_path: Path) -> None:
    """Enough positions to be weighed, but all of them on the short side of the line."""
    target = target_file(tmp_path, QUICK_TARGET.replace("time_s = 400.0", "time_s = 60.0"))
    outcome = run(
        tmp_path,
        target=target,
        wishes=[(33.0, lambda runner: runner.wish("stop", reason="stopped-by-user", source="test"))],
    )
    light = [body for body in outcome.of_kind(Kind.POINT) if body["light"]]
    assert 12 <= len(light) < 18
    assert "line-not-reached" in outcome.summary["flags"]
    assert "no-line" not in outcome.summary["flags"]
    assert outcome.summary["verdict"] == "undecided"


@pytest.mark.parametrize(("wide_at", "looks"), [(None, 3), (1, 5), (2, 6)])
def test_lines_narrower_than_the_slits_stop_the_run_before_the_night_is_spent(
    wide_at: int | None, looks: int
) -> None:
    """Not at the first look that says so, but when three in a row do."""
    play = Play()
    asked = 0
    while not play.machine.ended and asked < 20:
        play.go_on()
        if play.looks_asked:
            request = play.looks_asked.pop(0)
            play.looks_answered.add(request.horizon)
            flags = [] if asked == wide_at else [NARROW]
            asked += 1
            look = {"goal_reached": False, "number": asked, "flags": flags}
            play.record(Kind.LOOK, horizon=request.horizon, look=look)
    assert play.machine.stop is StopReason.NOT_AS_STATED
    assert NARROW_IN_A_ROW == 3
    assert asked == looks


def test_slits_set_narrower_than_stated_are_found_out(tmp_path: Path) -> None:
    """The bench file says 20 um, the slits stand at 12: the run stops at once, and says where to look."""
    stated = "[world.options.optics]"
    bench = bench_file(tmp_path)
    text = bench.text.replace("exit_slit_um = 20.0", "exit_slit_um = 12.0")
    head, _, world = text.partition(stated)
    head = head.replace("12.0", "20.0")
    world = world.replace("entrance_slit_um = 20.0", "entrance_slit_um = 12.0")
    changed = bench_file(tmp_path, changes=[(bench.text, head + stated + world)])
    target = target_file(
        tmp_path,
        QUICK_TARGET.replace("313.155", "546.074")
        .replace("separation_uncertainty_pm = 0.6", "separation_uncertainty_pm = 0.01")
        .replace("time_s = 400.0", "time_s = 3600.0"),
    )
    outcome = run(tmp_path / "run", bench=changed, target=target)
    assert outcome.summary["stop_reason"] == StopReason.NOT_AS_STATED
    assert NARROW in outcome.summary["flags"]
    assert any("look at the slits" in sentence for sentence in outcome.summary["evidence"])


@pytest.mark.parametrize("after_s", [60.0, 0.0, -5.0])
def test_a_run_ends_at_its_deadline(tmp_path: Path, after_s: float) -> None:
    """A moment in UTC, also one that has passed: the bench is made safe and what there is, is concluded."""
    stamp = utc_stamp(START_UTC_NS + round(after_s * 1e9))
    moment = f"{stamp[:4]}-{stamp[4:6]}-{stamp[6:11]}:{stamp[11:13]}:{stamp[13:15]}Z"
    text = QUICK_TARGET.replace("0.6", "0.05").replace("[limits]", f"[limits]\ndeadline_utc = {moment}")
    outcome = run(tmp_path, target=target_file(tmp_path, text))
    assert outcome.summary["stop_reason"] == StopReason.DEADLINE
    assert outcome.summary["bench_time_s"] < max(after_s, 0.0) + 3.0
    assert outcome.summary["safe"] == {"shutter": "closed", "drive": "stopped", "problems": []}
