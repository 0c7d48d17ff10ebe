"""The run machine's looks: when they are asked for, what they are told, when their answers apply."""

from __future__ import annotations

import itertools

import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from machine_bench import GATE_NS, Play, measuring, plan, until_look, wish

from analysis.allocate import next_sweep
from daq.machine import Action, StartLook, StartPoint
from daq.records import Kind, StopReason


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
    wish(play, "stop", StopReason.STOPPED_BY_USER)
    play.finish(2)
    play.answer_look()
    play.finish()
    play.to_the_end()
    assert play.machine.looks == []


def test_claims_rest_on_whole_sweeps_only() -> None:
    """A sweep that is under way, or that lost a position to a flag, is in the estimate but not in the
    evidence: its share of a comb would otherwise be weighed against the whole comb."""
    play = Play()
    visits = len(play.machine._visits)
    play.finish()
    for _ in range(visits):
        play.finish()
    assert play.looks_asked[0].swept == play.looks_asked[0].now
    play.finish(10)  # a flagged point in the second sweep
    while play.machine.sweeps_done < 3:
        play.go_on()
    wish(play, "stop", StopReason.STOPPED_BY_USER)
    play.finish(2)
    play.finish()
    final = play.outstanding
    seconds = {row[:2]: row[3] // (2 * GATE_NS) for row in final.swept.rows}
    assert sum(row[3] for row in final.now.rows) > sum(row[3] for row in final.swept.rows)
    assert {group for _, group in seconds} == {0, 2}, "the comb of the flagged sweep is left out"
    assert set(seconds.values()) == {1}, "every position of a comb was counted equally often"


@pytest.mark.parametrize("late", [False, True])
def test_the_answer_of_a_look_applies_six_visits_after_its_horizon(late: bool) -> None:
    """Not sooner when it is there at once, not later when it has to be waited for."""
    play = Play(settle_at_look=1)
    horizon = until_look(play).horizon
    if not late:
        play.answer_look()
    for _ in range(6):
        assert play.machine.stop is None
        assert play.machine.looks == []
        play.finish()
    if late:
        assert play.outstanding is None
        assert play.machine.action is Action.LOOK
        play.answer_look()
    assert play.machine.stop is StopReason.GOAL_REACHED
    assert len(play.machine.looks) == 1
    assert play.machine.points == horizon + 6


def test_a_sweep_shorter_than_the_lag_waits_at_its_last_visit() -> None:
    """The next look needs the answer of this one: it applies before the sweep is over."""
    narrow = plan()["window"] | {"stretches": [[0, 6]]}  # two or three positions and a dark a sweep
    play = Play(plan(window=narrow))
    horizon = 0
    while not play.machine.tally.can_be_weighed and play.machine.points < 200:
        play.finish()
    assert not play.looks_asked, "seven places in three groups are never enough to weigh"
    narrow = plan()["window"] | {"stretches": [[0, 12]]}
    play = Play(plan(window=narrow))
    horizon = until_look(play).horizon
    while play.outstanding is not None:
        play.finish()
    waits_after = play.machine.points - horizon
    assert waits_after == len(next_sweep(play.machine.window, number=play.machine.sweeps_done)) - 1 < 6
    play.answer_look()
    assert isinstance(play.outstanding, StartPoint)


def test_each_look_is_told_of_the_last_and_of_the_first() -> None:
    """`previous` and `first` are their whole sweeps, `previous_look` is the last one's answer."""
    play = Play()
    asked: list[StartLook] = []
    while len(asked) < 4:
        asked.append(until_look(play))
        play.answer_look()
        assert play.machine.stop is None
        while len(play.machine.looks) < len(asked):
            play.finish()
    assert [(look.previous, look.first, look.previous_look) for look in asked[:1]] == [(None, None, None)]
    for before, look in itertools.pairwise(asked):
        assert look.previous == before.swept
        assert look.first == asked[0].swept
        assert look.previous_look == play.machine.looks[asked.index(before)]
        assert not look.final
    assert len({look.swept for look in asked}) == 4


def test_a_pause_does_not_wait_for_a_late_look() -> None:
    """The shutter closes at once; after the resume the machine waits for the answer again."""
    play = Play()
    until_look(play)
    while play.outstanding is not None:
        play.finish()
    wish(play, "pause")
    assert play.machine.action is Action.SAFE
    play.finish()
    wish(play, "resume")
    assert (play.machine.action, play.outstanding) == (Action.LOOK, None)
    play.answer_look()
    assert play.machine.action is Action.POINT


def _look(play: Play, horizon: int, *, goal_reached: bool) -> None:
    play.record(Kind.LOOK, horizon=horizon, look={"goal_reached": goal_reached})


def test_only_the_first_answer_to_the_look_that_was_asked_counts() -> None:
    """Answers to another horizon, second answers and answers nobody asked for change nothing."""
    play = measuring()
    _look(play, play.machine.points, goal_reached=True)
    horizon = until_look(play).horizon
    for other in (horizon - 1, horizon + 1):
        _look(play, other, goal_reached=True)
    play.finish()
    _look(play, horizon, goal_reached=False)
    _look(play, horizon, goal_reached=True)
    play.looks_asked.clear()
    for _ in range(6):
        play.finish()
    assert play.machine.looks == [{"goal_reached": False}]
    assert play.machine.stop is None


def test_a_late_answer_does_not_ask_for_a_second_conclusion() -> None:
    """The answer of an earlier look arrives while the final one is at work."""
    play = Play()
    until_look(play)
    wish(play, "stop", StopReason.STOPPED_BY_USER)
    play.finish(2)
    play.finish()
    final = play.outstanding
    assert isinstance(final, StartLook)
    assert final.final
    play.answer_look()
    assert play.outstanding is final
    assert play.machine.action is Action.CONCLUDE
    play.finish()
    assert play.machine.ended


def test_a_stop_does_not_wait_for_a_late_look() -> None:
    """The bench is made safe at once."""
    play = Play()
    until_look(play)
    while play.outstanding is not None:
        play.finish()
    wish(play, "stop", StopReason.STOPPED_BY_USER)
    assert play.machine.action is Action.SAFE


def test_an_answer_given_before_a_crash_is_not_asked_for_again() -> None:
    """It stands in the journal and applies at its visit."""
    play = Play(settle_at_look=1)
    until_look(play)
    play.answer_look()
    play.session(devices=True)
    for _ in range(7):
        play.finish()
    assert play.looks_asked == []
    assert play.machine.stop is StopReason.GOAL_REACHED


def test_a_look_is_due_at_the_ratio_itself() -> None:
    """One comb, equal sweeps: looks after sweeps 1 to 6 (6 is 1.2 times 5), then 8, 10, 12, 15."""
    window = plan()["window"] | {"groups": 1}
    play = Play(plan(window=window))
    sweeps = []
    while play.machine.sweeps_done < 16:
        if play.looks_asked:
            sweeps.append(play.machine.sweeps_done)
            play.answer_look()
        play.finish()
    assert sweeps == [1, 2, 3, 4, 5, 6, 8, 10, 12, 15]
