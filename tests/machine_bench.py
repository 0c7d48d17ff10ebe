"""A bench made of choices, for testing the run machine without time or devices.

`Play` answers the machine's effects with records picked by a list of small integers (so that a failing
sequence shrinks), and holds the machine's stated invariants after every record.
"""

from __future__ import annotations

from collections.abc import Sequence
from typing import Any

from daq.machine import (
    Action,
    Effect,
    EndDwell,
    Halt,
    Machine,
    StartLook,
    StartPoint,
    StartPrepare,
    StartSafe,
)
from daq.records import Kind, StopReason
from daq.tally import SETTLING

GATE_NS = 1_000_000_000


def plan(**changes: Any) -> dict[str, Any]:
    window = {
        "stretches": [[0, 40]],
        "step_steps": 3,
        "groups": 3,
        "dwell_ns": 2 * GATE_NS,
        "dark_ns": 2 * GATE_NS,
    }
    return {"window": window, "time_limit_ns": 10_000 * GATE_NS, "light_limit_ns": None} | changes


def counts_at(steps: int, sweep: int) -> int:
    """Some counts that depend on the place only."""
    return 10 + (7 * steps + 3 * sweep) % 23


class Play:
    """One machine, one journal, and the choices."""

    def __init__(self, the_plan: dict[str, Any] | None = None, *, settle_at_look: int = 10**9) -> None:
        self.plan = the_plan or plan()
        self.machine = Machine(self.plan)
        self.journal: list[tuple[str, dict[str, Any]]] = []
        self.now_ns = 0
        self.settle_at_look = settle_at_look
        self.outstanding: Effect | None = None
        self.letting_go = False
        self.looks_asked: list[StartLook] = []
        self.looks_answered: set[int] = set()
        self.points_started: list[StartPoint] = []
        self.was_made_safe = False
        self.at_rest = False
        self.devices = True
        self.good_light = [0, 0]
        self.session(devices=True)

    # ---- records ----------------------------------------------------------------------------------------

    def record(self, kind: str, **body: Any) -> None:
        body = {"at_ns": self.now_ns} | body
        self.journal.append((kind, body))
        stop_before = self.machine.stop
        for effect in self.machine.step(kind, body):
            self._hold(effect)
        if stop_before is not None:
            assert self.machine.stop is stop_before, "the first stop reason stands"
        rows = self.machine.tally.snapshot().rows
        assert [sum(r[2] for r in rows), sum(r[3] for r in rows)] == self.good_light
        assert self.machine.action is (_action_of(self) if not self.machine.ended else Action.NOTHING)
        if self.machine.paused and self.outstanding is None and not self.machine.ended:
            assert self.at_rest, "paused, nothing under way, and the shutter may be open"

    def _hold(self, effect: Effect) -> None:
        """The invariants on what the machine starts."""
        match effect:
            case EndDwell():
                assert isinstance(self.outstanding, StartPoint)
                assert self.machine.paused
                assert not self.letting_go, "asked once a dwell"
                self.letting_go = True
                return
            case Halt():
                assert isinstance(self.outstanding, (StartPoint, StartPrepare))
                assert self.machine.stop is not None
                self.letting_go = True
                return
            case StartLook(final=False, horizon=horizon):
                assert self.machine.stop is None
                assert horizon not in [look.horizon for look in self.looks_asked], "asked once a session"
                assert horizon not in self.looks_answered, "an answer is not asked for again"
                self.looks_asked.append(effect)
                return
        assert self.outstanding is None, f"{effect} started while {self.outstanding} is outstanding"
        self.outstanding = effect
        self.letting_go = False
        match effect:
            case StartPoint(visit=visit):
                assert self.machine.stop is None
                assert not self.machine.paused
                assert visit.dwell_ns > 0
                self.was_made_safe = self.at_rest = False
                self.points_started.append(effect)
            case StartPrepare():
                assert self.machine.stop is None
                self.was_made_safe = self.at_rest = False
            case StartLook():
                assert self.machine.stop is not None
                assert self.was_made_safe or not self.devices, "no conclusion before a safe stop"

    def session(self, *, devices: bool) -> None:
        self.outstanding = None
        self.looks_asked = []
        self.was_made_safe = self.at_rest = False
        self.devices = devices
        self.now_ns = 0
        self.record(Kind.SESSION, number=1, reason="start", utc_ns=0, devices=devices)

    def finish(self, choice: int = 0) -> None:
        """Answer what is outstanding; choice 0 is the way it should go."""
        effect, self.outstanding = self.outstanding, None
        match effect:
            case StartPrepare():
                self.now_ns += GATE_NS
                if self.letting_go and choice % 2:
                    self.record(Kind.HALTED)
                elif choice % 5 == 4:
                    self._fault("prepare", choice)
                else:
                    self.at_rest = True
                    self.record(Kind.PREPARED, identities={}, home_steps=0, ambient=None)
            case StartPoint():
                self._finish_point(effect, choice)
            case StartSafe():
                self.was_made_safe = self.at_rest = True
                if choice % 7 == 6:
                    self._fault("safe", choice)
                else:
                    self.record(Kind.SAFE, shutter="closed", drive="stopped", problems=[])
            case StartLook():
                self.record(Kind.CONCLUSION, stop_reason=self.machine.stop, look=None)
            case _:
                raise AssertionError(f"nothing to finish: {effect}")

    def _finish_point(self, start: StartPoint, choice: int) -> None:
        visit = start.visit
        gates_ns = visit.dwell_ns
        if choice % 9 == 8:
            return self._fault("point", choice)
        if self.letting_go:
            if choice % 3 == 1:
                return self.record(Kind.HALTED)
            if choice % 3 == 2 and visit.dwell_ns > GATE_NS:
                gates_ns = GATE_NS
        flags = ["saturated"] if choice % 11 == 10 else []
        counts = counts_at(visit.steps, start.sweep)
        if start.sweep == SETTLING:  # a dark that was raised and comes down
            counts = 10 + (400 >> start.index)
        if visit.light and not flags:
            self.good_light[0] += counts
            self.good_light[1] += gates_ns
        began_ns = self.now_ns
        self.now_ns += gates_ns
        self.record(
            Kind.POINT,
            at_ns=began_ns,
            end_ns=self.now_ns,
            sweep=start.sweep,
            index=start.index,
            group=visit.group,
            light=visit.light,
            steps=visit.steps,
            counts=counts,
            gate_ns=gates_ns,
            flags=flags,
            complete=gates_ns == visit.dwell_ns,
        )

    def _fault(self, action: str, choice: int) -> None:
        error = ("LinkError", "HardwareFault", "OverLight", "Internal")[choice // 16 % 4]
        self.record(
            Kind.FAULT, action=action, device="drive", error=error, text="", repeat=error == "LinkError"
        )

    def answer_look(self) -> None:
        request = self.looks_asked.pop(0)
        number = len(self.machine.looks) + 1
        look = {"goal_reached": number >= self.settle_at_look, "number": number}
        self.looks_answered.add(request.horizon)
        self.record(Kind.LOOK, horizon=request.horizon, look=look)

    # ---- play -------------------------------------------------------------------------------------------

    def choose(self, choice: int) -> None:
        """One arbitrary thing that may happen now."""
        if self.machine.ended:
            return
        kind, detail = choice % 16, choice // 16
        if kind < 9:
            self.go_on(detail)
        elif kind == 9 and self.looks_asked:
            self.answer_look()
        elif kind == 10:
            self.record(Kind.WISH, wish="pause", reason="", source="test")
        elif kind in (11, 12):
            self.record(Kind.WISH, wish="resume", reason="", source="test")
        elif kind == 13 and detail % 4 == 0:
            reasons = (StopReason.STOPPED_BY_USER, StopReason.NIGHT_DEADLINE)
            self.record(Kind.WISH, wish="stop", reason=reasons[detail // 4 % 2], source="test")
        elif kind == 14 and detail % 8 == 0:
            self.record(Kind.DEADLINE, limit="time")
        elif kind == 15 and detail % 4 == 0:
            self.session(devices=detail % 3 != 0)
        elif kind == 15:
            self._outside_fault(detail)

    def _outside_fault(self, detail: int) -> None:
        where = ("look", "display", "halt")[detail % 3]
        if detail % 5 == 1:
            self.record(Kind.FAULT, action=where, device="gratingd", error="Internal", text="", repeat=False)

    def go_on(self, choice: int = 0) -> None:
        if self.outstanding is not None and not _waits_for_look(self):
            self.finish(choice)
        elif self.looks_asked:
            self.answer_look()
        elif self.machine.paused:
            self.record(Kind.WISH, wish="resume", reason="", source="test")
        else:
            raise AssertionError(f"nothing is under way, and the machine waits for '{self.machine.action}'")

    def to_the_end(self, *, most: int = 4000) -> None:
        """Everything goes well from here on; the run must end."""
        for _ in range(most):
            if self.machine.ended:
                return
            self.go_on()
        raise AssertionError(f"the run does not end: waits for {self.machine.action}")


def _waits_for_look(play: Play) -> bool:
    return play.outstanding is None and play.machine.action is Action.LOOK


def _action_of(play: Play) -> Action:
    match play.outstanding:
        case None:
            return play.machine.action if play.machine.action is Action.LOOK else Action.NOTHING
        case StartPrepare() | StartPoint() if play.letting_go and play.machine.stop is not None:
            return Action.HALT
        case StartPrepare():
            return Action.PREPARE
        case StartPoint():
            return Action.POINT
        case StartSafe():
            return Action.SAFE
        case _:
            return Action.CONCLUDE


def replay(the_plan: dict[str, Any], journal: Sequence[tuple[str, dict[str, Any]]]) -> Machine:
    machine = Machine(the_plan)
    for kind, body in journal:
        machine.step(kind, body)
    return machine


def state_of(machine: Machine) -> dict[str, Any]:
    """Everything a machine knows, comparable."""
    state = dict(vars(machine))
    for name in ("tally", "_swept", "_sweep"):
        tally = state[name]
        state[name] = None if tally is None else (tally.snapshot(), tally.dark_is_settled)
    return state


def measuring(points: int = 3, the_plan: dict[str, Any] | None = None) -> Play:
    """A run that is prepared and has made so many points; the next one is under way."""
    play = Play(the_plan)
    for _ in range(points + 1):
        play.finish()
    assert isinstance(play.outstanding, StartPoint)
    return play


def until_look(play: Play) -> StartLook:
    """Go on until the next look is asked for."""
    while not play.looks_asked:
        play.finish()
    return play.looks_asked[0]


def wish(play: Play, wanted: str, reason: str = "") -> None:
    """Somebody asks for "pause", "resume" or "stop"."""
    play.record(Kind.WISH, wish=wanted, reason=reason, source="test")
