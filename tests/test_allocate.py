"""Where the light goes, and what the looks are told of it."""

from __future__ import annotations

import itertools
import json
from dataclasses import replace
from typing import Any

import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from analysis.allocate import Visit, Window, next_sweep
from analysis.readings import AnalogueLaw
from daq.tally import FEWEST_POSITIONS, KEPT_UNSETTLED, SETTLING, Snapshot, Tally, dark_events

WINDOW = Window(
    stretches=((100, 172),), step_steps=8, groups=4, dwell_ns=500, dark_ns=2000
)  # 72 steps wide: the first comb ends on the window's last step


def changed(**changes: Any) -> Window:
    return replace(WINDOW, **changes)


def light_of(sweep: tuple[Visit, ...]) -> list[Visit]:
    return [visit for visit in sweep if visit.light]


windows = st.builds(
    lambda lowest, step, groups, more: changed(
        stretches=((lowest, lowest + step + more),), step_steps=step, groups=min(groups, step)
    ),
    st.integers(-1000, 1000),
    st.integers(1, 40),
    st.integers(1, 20),
    st.integers(0, 300),
)


def test_a_sweep_goes_from_end_to_end_of_the_window() -> None:
    """Both ends of the window belong to it, and every dwell is the one asked for."""
    sweep = light_of(next_sweep(WINDOW, number=0))
    assert [visit.steps for visit in sweep] == [100, 108, 116, 124, 132, 140, 148, 156, 164, 172]
    assert {(visit.dwell_ns, visit.group) for visit in sweep} == {(500, 0)}


def test_each_sweep_opens_with_one_dark_dwell_where_it_starts() -> None:
    """The drive goes once to the first position, for the dark and for the light."""
    for number in range(4):
        sweep = next_sweep(WINDOW, number=number)
        assert sweep[0] == Visit(sweep[1].steps, 2000, False, number)
        assert all(visit.light for visit in sweep[1:])


def test_no_dark_dwell_where_none_is_asked_for() -> None:
    """A dark time of zero is no visit of zero length; one of a nanosecond is a visit."""
    assert all(visit.light for visit in next_sweep(changed(dark_ns=0), number=0))
    assert next_sweep(changed(dark_ns=1), number=0)[0].dwell_ns == 1


def test_successive_sweeps_start_at_half_then_quarter_steps() -> None:
    """Offsets 0, 1/2, 1/4, 3/4 of a step, then the same again."""
    starts = [next_sweep(WINDOW, number=number)[0].steps - 100 for number in range(8)]
    assert starts == [0, 4, 2, 6, 0, 4, 2, 6]
    assert [next_sweep(WINDOW, number=number)[1].group for number in range(8)] == [0, 1, 2, 3, 0, 1, 2, 3]


def test_sixteen_sweeps_follow_the_bit_reversed_order() -> None:
    """The van der Corput sequence in base 2 (van der Corput 1935): 0, 1/2, 1/4, 3/4, 1/8, 5/8, ..."""
    window = changed(step_steps=16, groups=16)
    starts = [next_sweep(window, number=number)[0].steps - 100 for number in range(16)]
    assert starts == [0, 8, 4, 12, 2, 10, 6, 14, 1, 9, 5, 13, 3, 11, 7, 15]


@settings(deadline=None, derandomize=True)
@given(window=windows)
def test_every_sweep_covers_the_window_in_rising_equal_steps(window: Window) -> None:
    """Nothing outside the window, and no stretch of it wider than a step left out at either end."""
    for number in range(window.groups):
        steps = [visit.steps for visit in light_of(next_sweep(window, number=number))]
        assert window.lowest_steps <= steps[0] < window.lowest_steps + window.step_steps
        assert window.highest_steps - window.step_steps < steps[-1] <= window.highest_steps
        assert {late - early for early, late in itertools.pairwise(steps)} <= {window.step_steps}


@settings(deadline=None, derandomize=True)
@given(window=windows)
def test_the_groups_interleave_evenly(window: Window) -> None:
    """All combs together sample the window at distances that differ by a step of the drive at most."""
    combs = [
        {visit.steps for visit in light_of(next_sweep(window, number=number))}
        for number in range(window.groups)
    ]
    together = sorted(set().union(*combs))
    assert len(together) == sum(len(comb) for comb in combs), "no position belongs to two groups"
    gaps = [late - early for early, late in itertools.pairwise(together)]
    fine = window.step_steps // window.groups
    assert set(gaps) <= {fine, fine + 1}


@settings(deadline=None, derandomize=True)
@given(power=st.integers(0, 5), first=st.integers(0, 200), length=st.integers(1, 32))
def test_any_run_of_sweeps_samples_the_step_evenly(power: int, first: int, length: int) -> None:
    """Of any n successive sweeps (groups a power of two) each eighth of a step gets its share, within two."""
    groups = 2**power
    window = changed(step_steps=32, groups=groups, stretches=((100, 400),))
    starts = [next_sweep(window, number=first + i)[0].steps - 100 for i in range(length)]
    cells = min(8, groups)
    for cell in range(cells):
        inside = sum(start * cells // 32 == cell for start in starts)
        assert abs(inside - length / cells) < 2


@pytest.mark.parametrize(
    ("changes", "named"),
    [
        ({"stretches": ((100, 107),)}, "stretch must end"),
        ({"stretches": ((100, 99),)}, "stretch must end"),
        ({"groups": 0}, "groups"),
        ({"groups": 9}, "groups"),
        ({"step_steps": 0}, "step_steps"),
        ({"step_steps": -8}, "step_steps"),
        ({"dwell_ns": 0}, "dwell_ns"),
        ({"dark_ns": -1}, "dark_ns"),
    ],
)
def test_windows_that_make_no_sense_are_refused(changes: dict[str, int], named: str) -> None:
    """The message names what is wrong."""
    with pytest.raises(ValueError, match=named):
        changed(**changes)


@pytest.mark.parametrize(
    "changes", [{"stretches": ((100, 108),)}, {"groups": 1}, {"groups": 8}, {"dwell_ns": 1}, {"dark_ns": 0}]
)
def test_the_narrowest_windows_allowed_have_a_point_in_every_sweep(changes: dict[str, int]) -> None:
    """The limits themselves are allowed, and no sweep is empty at them."""
    window = changed(**changes)
    assert all(light_of(next_sweep(window, number=number)) for number in range(window.groups))


def test_a_window_comes_back_from_json() -> None:
    """The plan stands in the journal's head as JSON."""
    assert Window.from_json(json.loads(json.dumps(WINDOW.to_json()))) == WINDOW
    other = {"stretches": [[1, 9]], "step_steps": 3, "groups": 2, "dwell_ns": 5, "dark_ns": 6}
    assert Window.from_json(other).to_json() == other


@pytest.mark.parametrize(
    ("light", "counted_ns", "light_left_ns", "left_ns"),
    [
        (True, 0, None, 500),
        (True, 0, 500, 500),
        (True, 0, 499, 499),
        (True, 200, None, 300),
        (True, 200, 1000, 300),
        (True, 200, 120, 120),
        (False, 200, 120, 300),
        (False, 0, 1, 500),
    ],
)
def test_a_visit_is_shortened_by_what_was_counted_and_by_the_light_left(
    light: bool, counted_ns: int, light_left_ns: int | None, left_ns: int
) -> None:
    """A dark dwell spends no light, so the light limit does not shorten it."""
    visit = Visit(7, 500, light, 3)
    assert visit.shortened(counted_ns, light_left_ns) == Visit(7, left_ns, light, 3)


# ---- the tally ------------------------------------------------------------------------------------------

POINTS = st.lists(
    st.tuples(
        st.integers(-3, 3), st.integers(0, 2), st.booleans(), st.integers(0, 2**40), st.integers(1, 2**40)
    ),
    max_size=40,
)


def tally_of(points: list[tuple[int, int, bool, int, int]]) -> Tally:
    tally = Tally()
    for steps, group, light, counts, gate_ns in points:
        tally.add(steps=steps, group=group, light=light, counts=counts, gate_ns=gate_ns)
    return tally


def test_sums_are_kept_per_position_and_group_and_dark_apart() -> None:
    """Hand-added: two dwells at one place, the same place in another group, two darks."""
    light = [(5, 1, True, 10, 100), (5, 0, True, 4, 40), (-2, 1, True, 7, 70), (5, 1, True, 3, 30)]
    dark = [(5, 1, False, 2, 400), (9, 0, False, 1, 300)]
    snapshot = tally_of([*light, *dark]).snapshot()
    assert snapshot == Snapshot(((-2, 1, 7, 70, 0), (5, 0, 4, 40, 0), (5, 1, 13, 130, 0)), 3, 700)


@settings(deadline=None, derandomize=True)
@given(points=POINTS, data=st.data())
def test_sums_do_not_depend_on_the_order_of_the_points(
    points: list[tuple[int, int, bool, int, int]], data: st.DataObject
) -> None:
    """Integers only: any order gives the same snapshot, rows sorted by position and group."""
    shuffled = data.draw(st.permutations(points))
    snapshot = tally_of(points).snapshot()
    assert tally_of(shuffled).snapshot() == snapshot
    assert list(snapshot.rows) == sorted(snapshot.rows)
    assert sum(row[2] for row in snapshot.rows) == sum(p[3] for p in points if p[2])
    assert snapshot.dark_gate_ns == sum(p[4] for p in points if not p[2])


@settings(deadline=None, derandomize=True)
@given(points=POINTS, more=POINTS)
def test_including_a_tally_is_adding_its_points(
    points: list[tuple[int, int, bool, int, int]], more: list[tuple[int, int, bool, int, int]]
) -> None:
    """What was summed apart (a sweep) sums up to the same; the tally that is included stays as it was."""
    whole, part = tally_of(points), tally_of(more)
    before = part.snapshot()
    whole.include(part)
    assert whole.snapshot() == tally_of(points + more).snapshot()
    assert part.snapshot() == before


def test_a_tally_goes_its_own_way_after_it_was_included() -> None:
    """The sums are copied, not shared."""
    whole, part = Tally(), tally_of([(0, 0, True, 5, 50)])
    whole.include(part)
    part.add(steps=0, group=0, light=True, counts=1, gate_ns=10)
    assert whole.snapshot().rows == ((0, 0, 5, 50, 0),)


@settings(deadline=None, derandomize=True)
@given(points=POINTS)
def test_a_snapshot_comes_back_from_json(points: list[tuple[int, int, bool, int, int]]) -> None:
    """Looks cross a process boundary as JSON."""
    snapshot = tally_of(points).snapshot()
    assert Snapshot.from_json(json.loads(json.dumps(snapshot.to_json()))) == snapshot


def test_a_snapshot_does_not_grow_with_the_tally() -> None:
    """It is the evidence at its horizon, also when the points go on."""
    tally = tally_of([(0, 0, True, 5, 50)])
    snapshot = tally.snapshot()
    tally.add(steps=0, group=0, light=True, counts=1, gate_ns=10)
    assert snapshot.rows == ((0, 0, 5, 50, 0),)


def test_a_dozen_positions_with_light_can_be_weighed() -> None:
    """Eleven cannot; dark dwells and second dwells at the same place do not count."""
    assert FEWEST_POSITIONS == 12
    tally = tally_of([(steps, 0, True, 1, 10) for steps in range(11)])
    tally.add(steps=3, group=0, light=True, counts=1, gate_ns=10)
    tally.add(steps=99, group=0, light=False, counts=1, gate_ns=10)
    assert not tally.can_be_weighed
    assert not tally.snapshot().can_be_weighed
    tally.add(steps=11, group=0, light=True, counts=1, gate_ns=10)
    assert tally.can_be_weighed
    assert tally.snapshot().can_be_weighed


# ---- the dark before the first sweep -----------------------------------------------------------------------

LAW = AnalogueLaw(charge_unit_c=1e-15, read_noise_a=1e-13, shot_noise_c=2e-13)


def darks(tally: Tally, *counts: int, gate_s: float = 2.0) -> None:
    for number in counts:
        tally.add_point({"sweep": SETTLING, "counts": number, "gate_ns": round(1e9 * gate_s)})


def dark_of(tally: Tally) -> tuple[int, float]:
    snapshot = tally.snapshot()
    return snapshot.dark_counts, 1e-9 * snapshot.dark_gate_ns


def test_dark_readings_are_events_in_seconds() -> None:
    """Counts are events; 200 units of charge are one, read noise adds a quarter of an event per second, and
    what an offset takes below zero is none."""
    readings = [(400, 1_500_000_000), (-500, 1_000_000_000)]
    assert dark_events(readings, None) == [(400.0, 1.5), (-500.0, 1.0)]
    assert dark_events(readings, LAW) == [(pytest.approx(2.375), 1.5), (0.0, 1.0)]


def test_each_session_adds_the_dark_that_has_settled_in_it() -> None:
    """Raised dwells at the beginning of a session are not summed, and an earlier session's are kept."""
    tally = Tally()
    darks(tally, 5000, 100, 100, 100, 100)
    assert tally.dark_is_settled
    assert dark_of(tally) == (400, 8.0)
    tally.begin_session()
    assert not tally.dark_is_settled
    assert dark_of(tally) == (400, 8.0)
    darks(tally, 900)
    assert not tally.dark_is_settled
    assert dark_of(tally) == (1300, 10.0)
    darks(tally, 120, 120, 120, 120)
    assert tally.dark_is_settled
    assert dark_of(tally) == (880, 16.0)


def test_of_a_dark_that_has_not_settled_the_last_three_dwells_are_taken() -> None:
    assert KEPT_UNSETTLED == 3
    tally = Tally()
    darks(tally, 5000, 2500, 1200, 600)
    assert not tally.dark_is_settled
    assert dark_of(tally) == (4300, 6.0)


def test_a_dark_current_is_judged_by_its_events() -> None:
    """A hundred events scatter by ten; as many units of charge as they are made of would not scatter so."""
    currents, pulses = Tally(LAW), Tally()
    for tally in (currents, pulses):
        darks(tally, 20_000, 22_000, 19_000, 21_000)
    assert currents.dark_is_settled
    assert not pulses.dark_is_settled
    assert dark_of(currents) == (82_000, 8.0), "what is summed are the integers that were recorded"


def test_after_too_much_light_a_dark_must_be_seen_for_longer() -> None:
    """Four dwells of 2 s are enough where every sweep takes a dark of its own, not for ten minutes ahead."""
    usual, after_light = Tally(), Tally(dark_horizon_s=600.0)
    for tally in (usual, after_light):
        darks(tally, 16, 16, 16, 16)
    assert usual.dark_is_settled
    assert not after_light.dark_is_settled


@pytest.mark.parametrize(
    ("counts", "gate_s", "is_settled"),
    [(4, 0.33, True), (4, 0.30, False), (10, 0.30, True), (9, 0.30, False)],
)
def test_a_fall_by_the_rate_itself_or_by_twenty_per_second_may_go_unseen(
    counts: int, gate_s: float, is_settled: bool
) -> None:
    """Four dwells of n counts hide, at a risk of 0.01, a fall of 2.33 sqrt(4 n/(5/36)) over all four gates
    (5/36: variance of four even places over their span). By hand for n = 4: 18.9 per s in gates of 0.33 s,
    20.8 in 0.30 s; and it is 0.99 of the rate for n = 10, 1.04 of it for n = 9."""
    tally = Tally()
    darks(tally, *[counts] * 4, gate_s=gate_s)
    assert tally.dark_is_settled is is_settled
