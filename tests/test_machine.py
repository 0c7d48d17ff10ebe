"""The run machine: stated invariants under random record sequences, and the cases one can think of."""

from __future__ import annotations

import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from machine_bench import GATE_NS, Play, measuring, plan, replay, state_of, until_look, wish

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
        plan(dark_settling_ns=11 * GATE_NS),
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


def test_pause_and_resume_within_a_dwell_keeps_the_visit() -> None:
    """A dwell cut short by a pause is completed after the resume: planned and counted time agree."""
    play = measuring()
    visit = play.outstanding.visit
    wish(play, "pause")
    assert play.letting_go
    wish(play, "resume")
    play.finish(2)  # one gate of two
    again = play.outstanding.visit
    assert (again.steps, again.dwell_ns) == (visit.steps, visit.dwell_ns - GATE_NS)
    play.finish()
    assert play.outstanding.visit.steps > visit.steps


def test_pause_makes_safe_and_resume_goes_on_without_preparing_again() -> None:
    play = measuring()
    wish(play, "pause")
    play.finish(2)
    assert play.machine.action is Action.SAFE
    play.finish()
    assert play.machine.action is Action.NOTHING
    wish(play, "resume")
    assert play.machine.action is Action.POINT


def test_time_limit_ends_a_paused_run() -> None:
    play = measuring()
    wish(play, "pause")
    play.finish()
    play.finish()
    play.record(Kind.DEADLINE, limit="time")
    play.to_the_end()
    assert play.machine.stop is StopReason.TIME_LIMIT


def test_stop_during_prepare_halts_then_makes_safe() -> None:
    play = Play()
    assert play.machine.action is Action.PREPARE
    wish(play, "stop", StopReason.STOPPED_BY_USER)
    assert play.machine.action is Action.HALT
    play.finish()  # the preparation finished before the halt reached it: legal
    assert play.machine.action is Action.SAFE
    play.to_the_end()
    assert (play.machine.points, play.points_started) == (0, [])


def test_stop_keeps_the_gates_already_counted() -> None:
    play = measuring()
    points = play.machine.points
    wish(play, "stop", StopReason.STOPPED_BY_USER)
    play.finish(2)
    assert play.machine.points == points + 1
    play.to_the_end()


def test_a_second_stop_changes_nothing() -> None:
    play = measuring()
    wish(play, "stop", StopReason.STOPPED_BY_USER)
    wish(play, "stop", StopReason.NIGHT_DEADLINE)
    play.to_the_end()
    assert play.machine.stop is StopReason.STOPPED_BY_USER


def test_three_link_faults_in_a_row_are_repaired_the_fourth_stops() -> None:
    play = measuring()
    for _ in range(3):
        play.finish(8)  # LinkError at the point
        assert play.machine.action is Action.PREPARE
        play.finish()
    play.finish(8)
    assert play.machine.stop is StopReason.FAULT
    play.to_the_end()


def test_a_good_point_between_faults_starts_the_count_anew() -> None:
    play = measuring()
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
    play = measuring()
    assert choice % 9 == 8
    play.finish(choice)
    assert play.machine.action is Action.SAFE
    play.to_the_end()
    assert play.machine.stop is reason


def test_flagged_points_spend_light_but_are_not_weighed() -> None:
    play = measuring()
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


def test_recovery_without_devices_touches_none() -> None:
    play = measuring()
    started = len(play.points_started)
    play.session(devices=False)
    assert play.machine.action is Action.CONCLUDE
    play.to_the_end()
    assert play.machine.stop is StopReason.INTERRUPTED
    assert len(play.points_started) == started


def test_an_unexpected_fault_elsewhere_halts_the_point() -> None:
    play = measuring()
    seen = []
    play._hold = lambda effect, hold=play._hold: (seen.append(effect), hold(effect))  # type: ignore[method-assign]
    play.record(Kind.FAULT, action="look", device="gratingd", error="Internal", text="", repeat=False)
    assert seen == [Halt()]
    play.to_the_end()
    assert play.machine.stop is StopReason.INTERNAL_ERROR


def test_the_words_of_the_actions_stand_in_journals_and_do_not_change() -> None:
    """Fault records carry them, and people read them on the screen."""
    assert [str(action) for action in Action] == [
        "nothing",
        "prepare",
        "point",
        "look",
        "halt",
        "safe",
        "conclude",
    ]


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


@pytest.mark.parametrize("kind", [Kind.HEAD, "nonsense"])
def test_what_is_no_record_of_a_session_is_refused(kind: str) -> None:
    """The head is the machine's plan, never one of its records."""
    with pytest.raises(MachineError, match=f"'{kind}' is not legal"):
        Play().machine.admit(kind)


def test_bench_time_adds_up_over_sessions_and_never_steps_back() -> None:
    """A session's times start at zero; a record that began before the last one ended changes nothing."""
    play = measuring(2)
    first_ns = play.machine.bench_ns
    assert first_ns == play.now_ns == 5 * GATE_NS  # prepare 1, two dwells of 2
    play.now_ns = 3 * GATE_NS
    wish(play, "resume")
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
    play = measuring()
    with pytest.raises(MachineError, match="unknown wish 'stpo'"):
        play.machine.step(Kind.WISH, {"at_ns": 0, "wish": "stpo", "reason": "", "source": "test"})


def test_a_repeatable_fault_during_a_pause_still_closes_the_shutter() -> None:
    """The link fails before the dwell has ended: nobody prepares while paused, so the bench is made safe."""
    play = measuring()
    wish(play, "pause")
    play.finish(8)
    assert play.machine.action is Action.SAFE
    play.finish()
    assert play.machine.action is Action.NOTHING
    wish(play, "resume")
    assert play.machine.action is Action.PREPARE, "the position is not trusted after a fault"


def test_a_fault_while_preparing_during_a_pause_makes_safe() -> None:
    """A preparation that broke off may have left the motor running."""
    play = Play()
    wish(play, "pause")
    play.finish(4)
    assert play.machine.action is Action.SAFE


@pytest.mark.parametrize("ending", [0, 1, 2, 8])
def test_a_second_pause_ends_its_own_dwell(ending: int) -> None:
    """However the first dwell ended (whole, halted, cut short, by a fault), the second is asked to end."""
    play = measuring()
    wish(play, "pause")
    assert play.letting_go
    play.finish(ending)
    play.finish()  # made safe
    wish(play, "resume")
    while not isinstance(play.outstanding, StartPoint):
        play.finish()
    assert not play.letting_go
    wish(play, "pause")
    assert play.letting_go


def test_a_new_session_forgets_the_pause_and_what_it_asked_of_the_hands() -> None:
    """Whoever resumes a run wants it to go on; the hands of the last session are gone."""
    play = measuring()
    wish(play, "pause")
    play.session(devices=True)
    assert play.machine.action is Action.PREPARE
    play.finish()
    assert isinstance(play.outstanding, StartPoint)
    wish(play, "pause")
    assert play.letting_go


def test_a_new_session_counts_faults_anew() -> None:
    """Three repairs each: somebody has looked at the bench in between."""
    play = measuring()
    for _ in range(2):
        for _ in range(3):
            play.finish(8)
            play.finish()
        assert isinstance(play.outstanding, StartPoint)
        play.session(devices=True)
        play.finish()
    for _ in range(3):
        play.finish(8)
        assert play.machine.stop is None
        play.finish()
    play.finish(8)
    assert play.machine.stop is StopReason.FAULT


def test_a_pause_while_preparing_needs_no_safe_stop() -> None:
    """A prepared bench has its shutter closed and its drive at rest."""
    play = Play()
    wish(play, "pause")
    play.finish()
    assert (play.machine.action, play.outstanding) == (Action.NOTHING, None)
    wish(play, "resume")
    assert play.machine.action is Action.POINT


@pytest.mark.parametrize("wanted", ["pause", "stop"])
def test_a_safe_stop_that_fails_is_not_tried_for_ever(wanted: str) -> None:
    """It has done what it could; the run is concluded, and what failed is in the record."""
    play = measuring()
    wish(play, wanted, StopReason.STOPPED_BY_USER if wanted == "stop" else "")
    play.finish()
    assert play.machine.action is Action.SAFE
    play.finish(6)
    assert isinstance(play.outstanding, StartLook)
    assert play.outstanding.final
    assert play.machine.stop is (StopReason.STOPPED_BY_USER if wanted == "stop" else StopReason.FAULT)


def test_only_faults_of_a_preparation_or_a_point_are_repaired() -> None:
    """A drive that cannot be halted is not trusted again, even if its link can be repeated."""
    play = measuring()
    play.record(Kind.FAULT, action="halt", device="drive", error="LinkError", text="", repeat=True)
    assert play.machine.stop is StopReason.FAULT


def test_the_conclusion_is_the_body_of_the_last_record() -> None:
    """With it the run has ended, and nobody waits for anything."""
    play = measuring()
    assert play.machine.conclusion is None
    wish(play, "stop", StopReason.STOPPED_BY_USER)
    play.to_the_end()
    assert play.machine.conclusion == play.journal[-1][1]
    assert play.machine.action is Action.NOTHING


def test_nothing_but_a_pause_or_a_stop_ends_a_dwell() -> None:
    """Answers, and a resume that nobody needed, arrive in the middle of it."""
    play = Play()
    until_look(play)
    play.answer_look()
    wish(play, "resume")
    assert isinstance(play.outstanding, StartPoint)
    assert not play.letting_go


def test_a_pause_in_a_repair_after_a_pause_makes_safe_again() -> None:
    """What was at rest before the repair began is not at rest after it failed."""
    play = measuring()
    wish(play, "pause")
    play.finish(8)
    play.finish()
    wish(play, "resume")
    assert play.machine.action is Action.PREPARE
    wish(play, "pause")
    play.finish(4)
    assert play.machine.action is Action.SAFE


def test_the_time_limit_itself_ends_the_run() -> None:
    """Prepare takes one gate time and a dwell two: the limit is met exactly after four dwells."""
    play = Play(plan(time_limit_ns=9 * GATE_NS))
    for _ in range(5):
        assert play.machine.stop is None
        play.finish()
    assert play.machine.stop is StopReason.TIME_LIMIT
    assert play.machine.bench_ns == 9 * GATE_NS
    assert play.machine.action is Action.SAFE


def test_the_hands_are_asked_once_to_end_a_dwell() -> None:
    """Pause, resume and pause again within one dwell: it is ending already (Play refuses a second one)."""
    play = measuring()
    for wanted in ("pause", "pause", "resume", "pause"):
        wish(play, wanted)
    assert play.letting_go
    play.finish(2)
    assert play.machine.action is Action.SAFE


def test_a_plan_that_asks_for_no_settling_has_no_unsettled_dark() -> None:
    """Neither does one from before there was such a key: its sweeps begin at once, and nothing is said."""
    play = measuring(3)
    assert "dark_settling_ns" not in play.plan
    assert [start.sweep for start in play.points_started] == [0] * len(play.points_started)
    assert not play.machine.dark_is_unsettled
