"""The run as a state machine without I/O.

It holds ONE outstanding action and a few wishes. `LEGAL` says which record may come under which action;
`step` takes one record in; `advance` alone starts things, and only when nothing is outstanding. Records come
in journal order, so a run is resumed by folding the same `step` over its journal: there is no other rebuild.

    action     what the machine waits for            records that end it
    nothing    a wish (only while paused)
    prepare    devices identified, homed, dark safe  prepared, halted, fault
    point      one dwell at one position             point, halted, fault
    look       an answer of the analysis             look
    halt       the hands to let go                   point, halted, prepared, fault
    safe       shutter closed, motion stopped        safe, fault
    conclude   the final look and what follows of it conclusion

Invariants (tests/test_machine.py holds them over random sequences):
- at most one action is outstanding, and every effect that starts one follows a moment with none;
- after a stop no point starts; a safe stop always precedes the conclusion when devices are open;
- a paused bench is at rest: shutter closed, nothing moving, whatever ended the dwell;
- the run ends exactly once, with a reason from StopReason, and nothing is accepted afterwards;
- points are never lost or counted twice: the tally is the sum of the good points so far (of the darks before
  the first sweep of a session those since the dark has settled);
- decisions depend on the order of records only, never on when a look's answer arrived.
"""

from __future__ import annotations

from collections.abc import Iterable
from dataclasses import dataclass
from enum import StrEnum
from typing import Any

from analysis.allocate import SHORTEST_DWELL_NS, Visit, Window, next_sweep, settling_dark
from daq.planned import tally_of
from daq.records import Body, Kind, StopReason
from daq.tally import SETTLING, Snapshot, Tally

LOOK_LAG_VISITS = 6
"""A look's answer applies this many visits after its horizon: time for a worker to think while the bench
measures on, and the same in every replay however fast the computer is."""

LOOK_RATIO = 1.2
"""Looks are geometric in the collected light."""

NARROW = "narrower-than-expected"
"""The flag of a line that is sharper than the stated slits and the diffraction let it be."""

NARROW_IN_A_ROW = 3
"""Looks that must find the line narrower than slits and diffraction can make it before the run is stopped."""

FAULTS_IN_A_ROW = 3
"""A repeatable fault is repaired by preparing anew, this many times without a good point between."""


class MachineError(RuntimeError):
    """A record that is not legal now: a defect of the program, never of the bench."""


class Action(StrEnum):
    NOTHING = "nothing"
    PREPARE = "prepare"
    POINT = "point"
    LOOK = "look"
    HALT = "halt"
    SAFE = "safe"
    CONCLUDE = "conclude"


_ALWAYS = frozenset(Action)

LEGAL: dict[str, frozenset[Action]] = {
    Kind.SESSION: _ALWAYS,
    Kind.WISH: _ALWAYS,
    Kind.DEADLINE: _ALWAYS,
    Kind.LOOK: _ALWAYS,
    Kind.FAULT: _ALWAYS,
    Kind.PREPARED: frozenset({Action.PREPARE, Action.HALT}),
    Kind.POINT: frozenset({Action.POINT, Action.HALT}),
    Kind.HALTED: frozenset({Action.POINT, Action.HALT}),
    Kind.SAFE: frozenset({Action.SAFE}),
    Kind.CONCLUSION: frozenset({Action.CONCLUDE}),
}


@dataclass(frozen=True, slots=True)
class StartPrepare:
    """Open, identify, home, close the shutter, read the air."""


@dataclass(frozen=True, slots=True)
class StartPoint:
    """Go to `visit.steps` and count for `visit.dwell_ns`."""

    sweep: int
    index: int
    visit: Visit


@dataclass(frozen=True, slots=True)
class StartLook:
    """Weigh the evidence up to `horizon` points. `final` asks for the conclusion.

    `now` is everything counted, `swept` whole sweeps only, in which every position had its full dwell;
    `previous` and `first` are `swept` as it was at the previous look and at the first.
    """

    horizon: int
    now: Snapshot
    swept: Snapshot
    previous: Snapshot | None
    first: Snapshot | None
    previous_look: dict[str, Any] | None
    final: bool


@dataclass(frozen=True, slots=True)
class EndDwell:
    """Let the point end after the gate in progress; what was counted stays."""


@dataclass(frozen=True, slots=True)
class Halt:
    """Stop motion at once and end the dwell after the gate in progress."""


@dataclass(frozen=True, slots=True)
class StartSafe:
    """Shutter closed, motion stopped."""


Effect = StartPrepare | StartPoint | StartLook | EndDwell | Halt | StartSafe


@dataclass(slots=True)
class _Pending:
    """A look under way: what it sees, when its answer applies, and the answer once it is here."""

    request: StartLook
    visits_left: int
    asked: bool = False
    answer: dict[str, Any] | None = None


class Machine:
    """One run. `plan` is the head's plan: window, dwells and limits as plain numbers.

    darks : (counts, gate ns, middle of the dwell in bench time ns) of the sweeps' good dark dwells.
    dark_is_unsettled : a sweep began before the dark had settled, its time for that being over.
    """

    def __init__(self, plan: Body) -> None:
        self.window = Window.from_json(plan["window"])
        self.time_limit_ns: int = plan["time_limit_ns"]
        self.light_limit_ns: int | None = plan["light_limit_ns"]
        self.deadline_utc_ns: int | None = plan.get("deadline_utc_ns")
        self._dark_settling_ns: int = plan.get("dark_settling_ns", 0)
        self.action = Action.NOTHING
        self.paused = False
        self.stop: StopReason | None = None
        self.ended = False
        self.tally = tally_of(plan)
        self._swept = Tally()
        self._sweep: Tally | None = Tally()
        self.darks: list[tuple[int, int, int]] = []
        self.points = 0
        self.light_ns = 0
        self.sweeps_done = 0
        self.looks: list[dict[str, Any]] = []
        self.conclusion: dict[str, Any] | None = None
        self.last_safe: dict[str, Any] | None = None
        self.cause: str | None = None
        self.dark_is_unsettled = False
        self.bench_ns = 0
        self._session_base_ns = 0
        self._settle_until_ns = 0
        self._settling_dwells = 0
        self._narrow_in_a_row = 0
        self._devices = False
        self._prepared = False
        self._resting = False
        self._made_safe = False
        self._dwell_ending = False
        self._faults_in_a_row = 0
        self._visits: tuple[Visit, ...] = next_sweep(self.window, number=0)
        self._cursor = 0
        self._counted_ns = 0
        self._pending: _Pending | None = None
        self._first: Snapshot | None = None
        self._previous: Snapshot | None = None
        self._light_at_last_look_ns = 0

    # ---- records in -------------------------------------------------------------------------------------

    def admit(self, kind: str) -> None:
        """Raises MachineError if a record of this kind is not legal now. Asked before it is journalled."""
        if self.ended:
            raise MachineError(f"record '{kind}' after the end of the run")
        allowed = LEGAL.get(kind)
        if allowed is None or self.action not in allowed:
            raise MachineError(f"record '{kind}' is not legal while the machine waits for '{self.action}'")

    def step(self, kind: str, body: Body) -> list[Effect]:
        """Take one record in and return what is to be started or interrupted because of it."""
        self.admit(kind)
        if kind == Kind.SESSION:
            self._begin_session(body)
        else:
            self.bench_ns = max(self.bench_ns, self._session_base_ns + body.get("end_ns", body["at_ns"]))
            _TAKE[Kind(kind)](self, body)
        return list(self.advance())

    def _begin_session(self, body: Body) -> None:
        """A process takes the run up (again): whatever was outstanding died with the last one."""
        self._session_base_ns = self.bench_ns
        self._settle_until_ns = self.bench_ns + self._dark_settling_ns
        self._settling_dwells = 0
        self.tally.begin_session()
        self._devices = body["devices"]
        self._prepared = self._resting = self._made_safe = False
        self._dwell_ending = False
        if self._pending is not None:
            self._pending.asked = False
        self._faults_in_a_row = 0
        self.action = Action.NOTHING
        self.paused = False
        if not self._devices:
            self._stop_for(StopReason.INTERRUPTED)

    def _prepared_record(self, body: Body) -> None:
        self._prepared = True
        self._resting = True
        self.action = Action.NOTHING

    def _point_record(self, body: Body) -> None:
        self.action = Action.NOTHING
        self._dwell_ending = False
        self.points += 1
        if body["light"]:
            self.light_ns += body["gate_ns"]
        if not body["flags"]:
            self._faults_in_a_row = 0
            self.tally.add_point(body)
            if not body["light"] and body["sweep"] != SETTLING:
                middle_ns = self._session_base_ns + (body["at_ns"] + body["end_ns"]) // 2
                self.darks.append((body["counts"], body["gate_ns"], middle_ns))
        if body["sweep"] == SETTLING:
            self._settling_dwells += 1
            return
        if body["flags"]:
            self._sweep = None  # a sweep with a gap in it says nothing about the comb as a whole
        elif self._sweep is not None:
            self._sweep.add_point(body)
        self._counted_ns += body["gate_ns"]
        if self._counted_ns > self._visits[self._cursor].dwell_ns - SHORTEST_DWELL_NS:
            self._next_visit()

    def _halted_record(self, body: Body) -> None:
        self.action = Action.NOTHING
        self._dwell_ending = False

    def _wish_record(self, body: Body) -> None:
        match body["wish"]:
            case "pause":
                self.paused = True
            case "resume":
                self.paused = False
            case "stop":
                self._stop_for(StopReason(body["reason"]))
            case other:
                raise MachineError(f"unknown wish '{other}'")

    def _deadline_record(self, body: Body) -> None:
        self._stop_for(StopReason.DEADLINE if body["limit"] == "deadline" else StopReason.TIME_LIMIT)

    def _look_record(self, body: Body) -> None:
        pending = self._pending
        if pending is None or pending.request.horizon != body["horizon"] or pending.answer is not None:
            return  # asked for twice around a restart: the first answer stands
        pending.answer = body["look"]
        if self.action is Action.LOOK:
            self.action = Action.NOTHING

    def _fault_record(self, body: Body) -> None:
        of_devices = body["action"] in (Action.PREPARE, Action.POINT)
        if body["action"] == Action.SAFE:
            self._made_safe = self._resting = True
            self.last_safe = {"shutter": "unknown", "drive": "unknown", "problems": [body["text"]]}
        if of_devices or body["action"] == Action.SAFE:
            self.action = Action.NOTHING
            self._dwell_ending = False
        if of_devices and body["repeat"] and self._faults_in_a_row < FAULTS_IN_A_ROW:
            self._faults_in_a_row += 1
            self._prepared = False
            return
        if self.stop is None:
            self.cause = f"{body['device']}: {body['text']}"
        self._stop_for(_FAULT_REASONS.get(body["error"], StopReason.FAULT))

    def _safe_record(self, body: Body) -> None:
        self.action = Action.NOTHING
        self._resting = True
        self._made_safe = self.stop is not None
        self.last_safe = {key: body[key] for key in ("shutter", "drive", "problems")}

    def _conclusion_record(self, body: Body) -> None:
        self.action = Action.NOTHING
        self.conclusion = dict(body)
        self.ended = True

    def _stop_for(self, reason: StopReason) -> None:
        """The first reason stands."""
        if self.stop is None:
            self.stop = reason

    # ---- what to do next --------------------------------------------------------------------------------

    def advance(self) -> Iterable[Effect]:
        """Start the next thing, if nothing is outstanding; interrupt what a wish overtakes."""
        if self.ended:
            return
        yield from self._interrupt()
        if self.action is not Action.NOTHING:
            return
        if self.stop is None:
            self._apply_look()
            self._check_limits()
        if self.stop is not None:
            yield self._wind_up()
        elif self.paused:
            if not self._resting:
                yield self._begin(Action.SAFE, StartSafe())
        elif not self._prepared:
            yield self._begin(Action.PREPARE, StartPrepare())
        else:
            yield from self._measure()

    def _interrupt(self) -> Iterable[Effect]:
        if self.action is Action.LOOK and (self.paused or self.stop is not None):
            self.action = Action.NOTHING  # nobody waits any more; the answer is taken when it comes
        elif self.stop is not None:
            if self.action in (Action.PREPARE, Action.POINT):
                self.action = Action.HALT
                yield Halt()
        elif self.paused and self.action is Action.POINT and not self._dwell_ending:
            self._dwell_ending = True
            yield EndDwell()

    def _begin(self, action: Action, effect: Effect) -> Effect:
        self.action = action
        if action in (Action.PREPARE, Action.POINT):
            self._resting = False  # until it is prepared or made safe: a fault leaves the shutter as it was
        return effect

    def _wind_up(self) -> Effect:
        if self._devices and not self._made_safe:
            return self._begin(Action.SAFE, StartSafe())
        return self._begin(Action.CONCLUDE, self.look_request(final=True))

    @property
    def is_settling(self) -> bool:
        """Whether the dark is still to be waited for: it decays for minutes after too much light."""
        waits = self.window.dark_ns > 0 and self.bench_ns < self._settle_until_ns
        return waits and not self.tally.dark_is_settled

    def _measure(self) -> Iterable[Effect]:
        if self.is_settling:
            dark = StartPoint(SETTLING, self._settling_dwells, settling_dark(self.window))
            yield self._begin(Action.POINT, dark)
            return
        if self._pending is None and self._sweep_is_over():
            self._plan_sweep()
        if self._pending is not None:
            if not self._pending.asked and self._pending.answer is None:
                self._pending.asked = True
                yield self._pending.request
            if self._pending.visits_left <= 0:
                self.action = Action.LOOK  # the answer is late: wait, decisions do not depend on speed
                return
        if self.window.dark_ns > 0 and self._dark_settling_ns > 0 and not self.tally.dark_is_settled:
            self.dark_is_unsettled = True  # it was given its time, and the light cannot wait for ever
        visit = self._visits[self._cursor].shortened(self._counted_ns, self._light_left_ns())
        yield self._begin(Action.POINT, StartPoint(self.sweeps_done, self._cursor, visit))

    def _plan_sweep(self) -> None:
        self.sweeps_done += 1
        self._visits = next_sweep(self.window, number=self.sweeps_done)
        self._cursor = 0
        if self.tally.can_be_weighed and self.light_ns >= LOOK_RATIO * self._light_at_last_look_ns:
            lag = min(LOOK_LAG_VISITS, len(self._visits) - 1)
            self._pending = _Pending(self.look_request(final=False), visits_left=lag)
            self._light_at_last_look_ns = self.light_ns

    def _next_visit(self) -> None:
        self._cursor += 1
        self._counted_ns = 0
        if self._pending is not None:
            self._pending.visits_left -= 1
        if self._sweep_is_over():
            if self._sweep is not None:
                self._swept.include(self._sweep)
            self._sweep = Tally()

    def _sweep_is_over(self) -> bool:
        return self._cursor >= len(self._visits)

    def look_request(self, *, final: bool) -> StartLook:
        """The evidence as it stands now."""
        return StartLook(
            horizon=self.points,
            now=self.tally.snapshot(),
            swept=self._swept.snapshot(),
            previous=self._previous,
            first=self._first,
            previous_look=self.looks[-1] if self.looks else None,
            final=final,
        )

    def _apply_look(self) -> None:
        pending = self._pending
        if pending is None or pending.visits_left > 0 or pending.answer is None:
            return
        self._pending = None
        self.looks.append(pending.answer)
        self._previous = pending.request.swept
        if self._first is None:
            self._first = pending.request.swept
        if pending.answer["goal_reached"]:
            self._stop_for(StopReason.GOAL_REACHED)
        elif "conflict" in pending.answer.get("flags", ()):
            self._stop_for(StopReason.CONFLICT)  # both claims stand for good: more light cannot part them
        self._check_width(pending.answer)

    def _check_width(self, look: Body) -> None:
        """Slits that are not as the bench file says would spoil the rest of the night as well."""
        narrow = NARROW in look.get("flags", ())
        self._narrow_in_a_row = self._narrow_in_a_row + 1 if narrow else 0
        if self._narrow_in_a_row >= NARROW_IN_A_ROW:
            self._stop_for(StopReason.NOT_AS_STATED)

    def _light_left_ns(self) -> int | None:
        return None if self.light_limit_ns is None else self.light_limit_ns - self.light_ns

    def _check_limits(self) -> None:
        if self.bench_ns >= self.time_limit_ns:
            self._stop_for(StopReason.TIME_LIMIT)
        left_ns = self._light_left_ns()
        if left_ns is not None and left_ns < SHORTEST_DWELL_NS:
            self._stop_for(StopReason.LIGHT_LIMIT)


_TAKE = {
    Kind.PREPARED: Machine._prepared_record,
    Kind.POINT: Machine._point_record,
    Kind.HALTED: Machine._halted_record,
    Kind.WISH: Machine._wish_record,
    Kind.DEADLINE: Machine._deadline_record,
    Kind.LOOK: Machine._look_record,
    Kind.FAULT: Machine._fault_record,
    Kind.SAFE: Machine._safe_record,
    Kind.CONCLUSION: Machine._conclusion_record,
}

_FAULT_REASONS = {
    "OverLight": StopReason.OVER_LIGHT,
    "Internal": StopReason.INTERNAL_ERROR,
}
