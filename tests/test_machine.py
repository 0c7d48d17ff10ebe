"""The run machine: stated invariants under random record sequences, and the cases one can think of."""

from __future__ import annotations

import itertools

import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from machine_bench import GATE_NS, Play, plan, replay, state_of

from analysis.allocate import next_sweep
from daq.machine import LEGAL, Action, Halt, Machine, MachineError, StartLook, StartPoint
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
    _wish(play, "stop", StopReason.STOPPED_BY_USER)
    play.finish(2)
    play.finish()
    final = play.outstanding
    seconds = {row[:2]: row[3] // (2 * GATE_NS) for row in final.swept.rows}
    assert sum(row[3] for row in final.now.rows) > sum(row[3] for row in final.swept.rows)
    assert {group for _, group in seconds} == {0, 2}, "the comb of the flagged sweep is left out"
    assert set(seconds.values()) == {1}, "every position of a comb was counted equally often"


def test_the_words_of_the_actions_stand_in_journals_and_do_not_change() -> None:
    """Fault records carry them, and people read them on the screen."""
    assert [str(action) for action in Action] == ["nothing", "prepare", "point", "look", "halt", "safe"]


def test_a_machine_before_its_first_session_has_done_nothing() -> None:
    """What a display may read before the first record."""
    machine = Machine(plan())
    assert machine.action is Action.NOTHING
    assert (machine.paused, machine.stop, machine.ended) == (False, None, False)
    assert (machine.points, machine.light_ns, machine.bench_ns, machine.sweeps_done) == (0, 0, 0, 0)
    assert (machine.looks, machine.conclusion) == ([], None)


def test_the_first_sweep_is_visited_whole_and_in_order() -> None:
    """Dark first, then every position of the comb, each with its full dwell, numbered from 0."""
    play = Play()
    visits = next_sweep(play.machine.window, number=0)
    for _ in range(len(visits) + 2):
        play.finish()
    first = [start for start in play.points_started if start.sweep == 0]
    assert [(start.index, start.visit) for start in first] == list(enumerate(visits))
    assert (play.points_started[len(visits)].sweep, play.points_started[len(visits)].index) == (1, 0)


def _until_look(play: Play) -> StartLook:
    while not play.looks_asked:
        play.finish()
    return play.looks_asked[0]


@pytest.mark.parametrize("late", [False, True])
def test_the_answer_of_a_look_applies_six_visits_after_its_horizon(late: bool) -> None:
    """Not sooner when it is there at once, not later when it has to be waited for."""
    play = Play(settle_at_look=1)
    horizon = _until_look(play).horizon
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
    narrow = plan()["window"] | {"highest_steps": 6}  # two or three positions and a dark a sweep
    play = Play(plan(window=narrow))
    horizon = 0
    while not play.machine.tally.can_be_weighed and play.machine.points < 200:
        play.finish()
    assert not play.looks_asked, "seven places in three groups are never enough to weigh"
    narrow = plan()["window"] | {"highest_steps": 12}
    play = Play(plan(window=narrow))
    horizon = _until_look(play).horizon
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
        asked.append(_until_look(play))
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


@pytest.mark.parametrize("kind", [Kind.HEAD, "nonsense"])
def test_what_is_no_record_of_a_session_is_refused(kind: str) -> None:
    """The head is the machine's plan, never one of its records."""
    with pytest.raises(MachineError, match=f"'{kind}' is not legal"):
        Play().machine.admit(kind)


def test_bench_time_adds_up_over_sessions_and_never_steps_back() -> None:
    """A session's times start at zero; a record that began before the last one ended changes nothing."""
    play = _measuring(2)
    first_ns = play.machine.bench_ns
    assert first_ns == play.now_ns == 5 * GATE_NS  # prepare 1, two dwells of 2
    play.now_ns = 3 * GATE_NS
    _wish(play, "resume")
    assert play.machine.bench_ns == first_ns
    play.session(devices=True)
    assert play.machine.bench_ns == first_ns
    play.finish()
    assert play.machine.bench_ns == first_ns + GATE_NS
    play.session(devices=True)
    play.finish()
    assert play.machine.bench_ns == first_ns + 2 * GATE_NS


def test_an_illegal_wish_is_an_error_of_the_program() -> None:
    """Nobody may take a misspelt stop for a stop."""
    play = _measuring()
    with pytest.raises(MachineError, match="unknown wish 'stpo'"):
        play.machine.step(Kind.WISH, {"at_ns": 0, "wish": "stpo", "reason": "", "source": "test"})


def test_a_repeatable_fault_during_a_pause_still_closes_the_shutter() -> None:
    """The link fails before the dwell has ended: nobody prepares while paused, so the bench is made safe."""
    play = _measuring()
    _wish(play, "pause")
    play.finish(8)
    assert play.machine.action is Action.SAFE
    play.finish()
    assert play.machine.action is Action.NOTHING
    _wish(play, "resume")
    assert play.machine.action is Action.PREPARE, "the position is not trusted after a fault"


def test_a_fault_while_preparing_during_a_pause_makes_safe() -> None:
    """A preparation that broke off may have left the motor running."""
    play = Play()
    _wish(play, "pause")
    play.finish(4)
    assert play.machine.action is Action.SAFE


def test_a_pause_does_not_wait_for_a_late_look() -> None:
    """The shutter closes at once; after the resume the machine waits for the answer again."""
    play = Play()
    _until_look(play)
    while play.outstanding is not None:
        play.finish()
    _wish(play, "pause")
    assert play.machine.action is Action.SAFE
    play.finish()
    _wish(play, "resume")
    assert (play.machine.action, play.outstanding) == (Action.LOOK, None)
    play.answer_look()
    assert play.machine.action is Action.POINT


@pytest.mark.parametrize("ending", [0, 1, 2, 8])
def test_a_second_pause_ends_its_own_dwell(ending: int) -> None:
    """However the first dwell ended (whole, halted, cut short, by a fault), the second is asked to end."""
    play = _measuring()
    _wish(play, "pause")
    assert play.letting_go
    play.finish(ending)
    play.finish()  # made safe
    _wish(play, "resume")
    while not isinstance(play.outstanding, StartPoint):
        play.finish()
    assert not play.letting_go
    _wish(play, "pause")
    assert play.letting_go


def test_a_new_session_forgets_the_pause_and_what_it_asked_of_the_hands() -> None:
    """Whoever resumes a run wants it to go on; the hands of the last session are gone."""
    play = _measuring()
    _wish(play, "pause")
    play.session(devices=True)
    assert play.machine.action is Action.PREPARE
    play.finish()
    assert isinstance(play.outstanding, StartPoint)
    _wish(play, "pause")
    assert play.letting_go


def test_a_new_session_counts_faults_anew() -> None:
    """Three repairs each: somebody has looked at the bench in between."""
    play = _measuring()
    for _ in range(2):
        for _ in range(3):
            play.finish(8)
            play.finish()
        assert isinstance(play.outstanding, StartPoint)
        play.session(devices=True)
        play.finish()
    play.finish(8)
    assert play.machine.stop is None


def test_a_pause_while_preparing_needs_no_safe_stop() -> None:
    """A prepared bench has its shutter closed and its drive at rest."""
    play = Play()
    _wish(play, "pause")
    play.finish()
    assert (play.machine.action, play.outstanding) == (Action.NOTHING, None)
    _wish(play, "resume")
    assert play.machine.action is Action.POINT


def _look(play: Play, horizon: int, *, goal_reached: bool) -> None:
    play.record(Kind.LOOK, horizon=horizon, look={"goal_reached": goal_reached})


def test_only_the_first_answer_to_the_look_that_was_asked_counts() -> None:
    """Answers to another horizon, second answers and answers nobody asked for change nothing."""
    play = _measuring()
    _look(play, play.machine.points, goal_reached=True)
    horizon = _until_look(play).horizon
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
    _until_look(play)
    _wish(play, "stop", StopReason.STOPPED_BY_USER)
    play.finish(2)
    play.finish()
    final = play.outstanding
    assert isinstance(final, StartLook)
    assert final.final
    play.answer_look()
    assert play.outstanding is final
    assert play.machine.action is Action.LOOK
    play.finish()
    assert play.machine.ended
