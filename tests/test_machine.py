"""The run machine: stated invariants under random record sequences, and the cases one can think of."""

from __future__ import annotations

import itertools

import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from machine_bench import GATE_NS, Play, plan, replay, state_of

from daq.machine import LEGAL, Action, Halt, MachineError, StartPoint
from daq.records import KINDS, Kind, StopReason

CHOICES = st.lists(st.integers(min_value=0, max_value=4095), max_size=90)
PLANS = st.sampled_from(
    [
        plan(),
        plan(light_limit_ns=37 * GATE_NS),
        plan(time_limit_ns=55 * GATE_NS),
        plan(time_limit_ns=55 * GATE_NS, light_limit_ns=9 * GATE_NS),
    ]
)


@settings(max_examples=2000, deadline=None, derandomize=True)
@given(choices=CHOICES, the_plan=PLANS, settle=st.integers(min_value=1, max_value=12))
def test_invariants_hold_over_random_sequences(choices: list[int], the_plan: dict, settle: int) -> None:
    """2000 sequences: the invariants (machine_bench.Play) hold at each record, and the run ends."""
    play = Play(the_plan, settle_at_look=settle)
    for choice in choices:
        play.choose(choice)
    play.to_the_end()
    assert play.machine.stop in StopReason
    if the_plan["light_limit_ns"] is not None:
        assert play.machine.light_ns <= the_plan["light_limit_ns"]
    with pytest.raises(MachineError):
        play.machine.step(Kind.WISH, {"at_ns": 0, "wish": "pause", "reason": "", "source": "test"})
    assert state_of(replay(the_plan, play.journal)) == state_of(play.machine)


@settings(max_examples=60, deadline=None, derandomize=True)
@given(choices=CHOICES, the_plan=PLANS)
def test_every_prefix_of_a_journal_reopens_and_ends(choices: list[int], the_plan: dict) -> None:
    play = Play(the_plan, settle_at_look=5)
    for choice in choices:
        play.choose(choice)
    play.to_the_end()
    for length in range(len(play.journal)):
        for devices in (True, False):
            again = Play.__new__(Play)
            again.__init__(the_plan, settle_at_look=5)  # type: ignore[misc]
            again.machine = replay(the_plan, play.journal[:length])
            again.journal = list(play.journal[:length])
            rows = again.machine.tally.snapshot().rows
            again.good_light = [sum(r[2] for r in rows), sum(r[3] for r in rows)]
            again.session(devices=devices)
            again.to_the_end()


@settings(max_examples=200, deadline=None, derandomize=True)
@given(late=st.lists(st.integers(min_value=0, max_value=40), min_size=40, max_size=40))
def test_late_looks_change_no_decision(late: list[int]) -> None:
    """Answers delayed by any number of records give the same points and the same end as answers at once."""
    prompt = Play(settle_at_look=6)
    while not prompt.machine.ended:
        if prompt.looks_asked:
            prompt.answer_look()
        else:
            prompt.finish()
    slow = Play(settle_at_look=6)
    waited, wait = 0, iter(late)
    due = next(wait)
    while not slow.machine.ended:
        if slow.looks_asked and (waited >= due or slow.outstanding is None):
            slow.answer_look()
            waited, due = 0, next(wait)
        else:
            waited += bool(slow.looks_asked)
            slow.finish()
    assert slow.points_started == prompt.points_started
    assert slow.machine.points == prompt.machine.points
    assert slow.machine.stop is prompt.machine.stop is StopReason.GOAL_REACHED


def test_table_names_every_kind_but_the_head() -> None:
    assert set(LEGAL) == KINDS - {Kind.HEAD}
    for kind, actions in LEGAL.items():
        assert actions, f"'{kind}' is never legal"


@pytest.mark.parametrize("kind", sorted(LEGAL))
@pytest.mark.parametrize("action", list(Action))
def test_illegal_records_are_refused_and_change_nothing(kind: str, action: Action) -> None:
    play = Play()
    play.machine.action = action
    before = state_of(play.machine)
    if action in LEGAL[kind]:
        play.machine.admit(kind)
    else:
        with pytest.raises(MachineError, match=f"'{kind}'.*'{action}'"):
            play.machine.step(kind, {"at_ns": 0})
    assert state_of(play.machine) == before


def _measuring(points: int = 3) -> Play:
    play = Play()
    for _ in range(points + 1):
        play.finish()
    assert isinstance(play.outstanding, StartPoint)
    return play


def _wish(play: Play, wish: str, reason: str = "") -> None:
    play.record(Kind.WISH, wish=wish, reason=reason, source="test")


def test_pause_and_resume_within_a_dwell_keeps_the_visit() -> None:
    """A dwell cut short by a pause is completed after the resume: planned and counted time agree."""
    play = _measuring()
    visit = play.outstanding.visit
    _wish(play, "pause")
    assert play.letting_go
    _wish(play, "resume")
    play.finish(2)  # one gate of two
    again = play.outstanding.visit
    assert (again.steps, again.dwell_ns) == (visit.steps, visit.dwell_ns - GATE_NS)
    play.finish()
    assert play.outstanding.visit.steps > visit.steps


def test_pause_makes_safe_and_resume_goes_on_without_preparing_again() -> None:
    play = _measuring()
    _wish(play, "pause")
    play.finish(2)
    assert play.machine.action is Action.SAFE
    play.finish()
    assert play.machine.action is Action.NOTHING
    _wish(play, "resume")
    assert play.machine.action is Action.POINT


def test_time_limit_ends_a_paused_run() -> None:
    play = _measuring()
    _wish(play, "pause")
    play.finish()
    play.finish()
    play.record(Kind.DEADLINE, limit="time")
    play.to_the_end()
    assert play.machine.stop is StopReason.TIME_LIMIT


def test_stop_during_prepare_halts_then_makes_safe() -> None:
    play = Play()
    assert play.machine.action is Action.PREPARE
    _wish(play, "stop", StopReason.STOPPED_BY_USER)
    assert play.machine.action is Action.HALT
    play.finish()  # the preparation finished before the halt reached it: legal
    assert play.machine.action is Action.SAFE
    play.to_the_end()
    assert (play.machine.points, play.points_started) == (0, [])


def test_stop_keeps_the_gates_already_counted() -> None:
    play = _measuring()
    points = play.machine.points
    _wish(play, "stop", StopReason.STOPPED_BY_USER)
    play.finish(2)
    assert play.machine.points == points + 1
    play.to_the_end()


def test_a_second_stop_changes_nothing() -> None:
    play = _measuring()
    _wish(play, "stop", StopReason.STOPPED_BY_USER)
    _wish(play, "stop", StopReason.NIGHT_DEADLINE)
    play.to_the_end()
    assert play.machine.stop is StopReason.STOPPED_BY_USER


def test_three_link_faults_in_a_row_are_repaired_the_fourth_stops() -> None:
    play = _measuring()
    for _ in range(3):
        play.finish(8)  # LinkError at the point
        assert play.machine.action is Action.PREPARE
        play.finish()
    play.finish(8)
    assert play.machine.stop is StopReason.FAULT
    play.to_the_end()


def test_a_good_point_between_faults_starts_the_count_anew() -> None:
    play = _measuring()
    for _ in range(10):
        play.finish(8)
        play.finish()
        play.finish()
    assert play.machine.stop is None


@pytest.mark.parametrize(
    ("choice", "reason"),
    [
        (16 + 10, StopReason.FAULT),
        (32 + 3, StopReason.OVER_LIGHT),
        (48 + 5, StopReason.INTERNAL_ERROR),
    ],
)
def test_grave_faults_stop_at_once(choice: int, reason: StopReason) -> None:
    play = _measuring()
    assert choice % 9 == 8
    play.finish(choice)
    assert play.machine.action is Action.SAFE
    play.to_the_end()
    assert play.machine.stop is reason


def test_flagged_points_spend_light_but_are_not_weighed() -> None:
    play = _measuring()
    before = play.machine.tally.snapshot()
    light_ns = play.machine.light_ns
    play.finish(10)
    assert play.machine.tally.snapshot() == before
    assert play.machine.light_ns > light_ns


def test_light_limit_shortens_the_last_dwell() -> None:
    play = Play(plan(light_limit_ns=5 * GATE_NS))
    play.to_the_end()
    assert play.machine.stop is StopReason.LIGHT_LIMIT
    assert play.machine.light_ns == 5 * GATE_NS
    assert play.points_started[-1].visit.dwell_ns == GATE_NS


def test_looks_are_geometric_in_the_light() -> None:
    play = Play(plan(time_limit_ns=6000 * GATE_NS))
    horizons = []
    while play.machine.stop is None:
        if play.looks_asked and play.looks_asked[0].horizon not in horizons:
            horizons.append(play.looks_asked[0].horizon)
        play.go_on()
    assert len(horizons) > 15
    for early, late in itertools.pairwise(horizons[5:]):
        assert 1.19 * early < late < 1.2 * early + 16, "not later than the first sweep's end after 1.2"


def test_a_look_asked_before_a_crash_is_asked_again() -> None:
    play = Play()
    while not play.looks_asked:
        play.finish()
    horizon = play.looks_asked[0].horizon
    play.session(devices=True)
    play.finish()
    assert [look.horizon for look in play.looks_asked] == [horizon]


def test_a_late_answer_after_the_stop_is_harmless() -> None:
    play = Play()
    while not play.looks_asked:
        play.finish()
    _wish(play, "stop", StopReason.STOPPED_BY_USER)
    play.finish(2)
    play.answer_look()
    play.finish()
    play.to_the_end()
    assert play.machine.looks == []


def test_recovery_without_devices_touches_none() -> None:
    play = _measuring()
    started = len(play.points_started)
    play.session(devices=False)
    assert play.machine.action is Action.LOOK
    play.to_the_end()
    assert play.machine.stop is StopReason.INTERRUPTED
    assert len(play.points_started) == started


def test_an_unexpected_fault_elsewhere_halts_the_point() -> None:
    play = _measuring()
    seen = []
    play._hold = lambda effect, hold=play._hold: (seen.append(effect), hold(effect))  # type: ignore[method-assign]
    play.record(Kind.FAULT, action="look", device="gratingd", error="Internal", text="", repeat=False)
    assert seen == [Halt()]
    play.to_the_end()
    assert play.machine.stop is StopReason.INTERNAL_ERROR


def test_claims_rest_on_whole_sweeps_only() -> None:
    """A sweep that is under way, or that lost a position to a flag, is in the estimate but not in the evidence:
    its share of a comb would otherwise be weighed against the whole comb."""
    play = Play()
    visits = len(play.machine._visits)
    play.finish()
    for _ in range(visits):
        play.finish()
    assert play.looks_asked[0].swept == play.looks_asked[0].now
    play.finish(10)  # a flagged point in the second sweep
    while play.machine.sweeps_done < 3:
        play.go_on()
    _wish(play, "stop", StopReason.STOPPED_BY_USER)
    play.finish(2)
    play.finish()
    final = play.outstanding
    seconds = {row[:2]: row[3] // (2 * GATE_NS) for row in final.swept.rows}
    assert sum(row[3] for row in final.now.rows) > sum(row[3] for row in final.swept.rows)
    assert {group for _, group in seconds} == {0, 2}, "the comb of the flagged sweep is left out"
    assert set(seconds.values()) == {1}, "every position of a comb was counted equally often"
