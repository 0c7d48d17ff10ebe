"""The runner: the only place where machine, hands, journal, looks and the outside meet.

The way of a record: hands, looker or a wish -> `post` -> one queue -> journal -> machine -> the next effects.
Whoever watches is told of a record only once it is durable. Anything unexpected in a task becomes a fault
record, the fault a safe stop, and the safe stop a conclusion; only a journal that cannot be written ends a
run without one, and then the bench is made safe all the same.
"""

from __future__ import annotations

import asyncio
import logging
import traceback
from collections.abc import Awaitable, Callable
from dataclasses import dataclass
from functools import partial
from typing import Any

from daq.hands import Ending, Hands
from daq.journal import Journal
from daq.looks import Looker
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
from daq.records import Body, Kind, StopReason
from drivers.clock import Clock
from drivers.errors import DeviceError, GratingdError

log = logging.getLogger(__name__)

Conclude = Callable[[Machine, dict[str, Any] | None], dict[str, Any]]
"""`conclude(machine, final look or None)`: the body of the last record, without its time."""


class RunFailed(GratingdError):
    """The run could not be brought to its conclusion; the journal holds what was acknowledged."""


@dataclass(frozen=True, slots=True)
class Notice:
    """A durable record, and the machine it led to (which may be a little further by now)."""

    seq: int
    kind: str
    body: Body
    machine: Machine


class Runner:
    """Carries one session of one run to its end."""

    def __init__(
        self,
        *,
        journal: Journal,
        machine: Machine,
        hands: Hands | None,
        looker: Looker,
        session: int,
        reason: str,
        conclude: Conclude,
        clock: Clock,
        observe: Callable[[Notice], None] = lambda notice: None,
    ) -> None:
        self._journal = journal
        self._machine = machine
        self._hands = hands
        self._looker = looker
        self._conclude = conclude
        self._clock = clock
        self._observe: Callable[[Notice], None] | None = observe
        self._start_ns = clock.monotonic_ns()
        self._inbox: asyncio.Queue[Ending] = asyncio.Queue()
        self._outbox: asyncio.Queue[Notice | None] = asyncio.Queue()
        self._tasks: asyncio.TaskGroup
        # The session opens before anybody can wish for anything.
        opening = {
            "number": session,
            "reason": reason,
            "utc_ns": clock.utc_ns(),
            "devices": hands is not None,
        }
        self.post(Kind.SESSION, opening)

    def at_ns(self) -> int:
        """Nanoseconds since this session began."""
        return self._clock.monotonic_ns() - self._start_ns

    def post(self, kind: str, body: dict[str, Any]) -> None:
        """Hand a record in; records are journalled and consumed in the order of these calls."""
        self._inbox.put_nowait((kind, body))

    def wish(self, wish: str, *, reason: str = "", source: str) -> None:
        """Ask for "pause", "resume" or "stop" (a stop names its StopReason). ValueError for anything else."""
        if wish not in ("pause", "resume", "stop"):
            raise ValueError(f"wish = {wish!r}; allowed: 'pause', 'resume', 'stop'")
        if wish == "stop":
            reason = StopReason(reason)
        self.post(Kind.WISH, {"at_ns": self.at_ns(), "wish": wish, "reason": reason, "source": source})

    async def run(self) -> None:
        """Until the run has ended. Raises RunFailed if it could not be concluded; the bench is safe then."""
        try:
            async with asyncio.TaskGroup() as self._tasks:
                publisher = self._tasks.create_task(self._publish())
                limits = self._set_limits()
                try:
                    await self._consume()
                finally:
                    for limit in limits:
                        limit.cancel()
                self._outbox.put_nowait(None)
                await publisher
        except BaseExceptionGroup as failures:
            await self._rescue()
            first = failures.exceptions[0]
            raise RunFailed(f"the run broke off: {first}") from failures
        except BaseException:  # cancelled, or SystemExit out of a task: the bench is made safe all the same
            await self._rescue()
            raise

    async def _consume(self) -> None:
        while not self._machine.ended:
            kind, body = await self._inbox.get()
            try:
                effects = self._machine.step(kind, body)
            except Exception as error:  # not journalled: a record that cannot be folded would poison the run
                kind, body = Kind.FAULT, self._fault("machine", error)
                effects = self._machine.step(kind, body)
            seq = self._journal.append(kind, body)
            for effect in effects:
                self._start(effect)
            notice = Notice(seq, kind, body, self._machine)
            if self._clock.is_virtual:
                self._show(notice)
            else:
                self._outbox.put_nowait(notice)

    async def _publish(self) -> None:
        while (notice := await self._outbox.get()) is not None:
            await self._journal.durable(notice.seq)
            self._show(notice)

    def _show(self, notice: Notice) -> None:
        if self._observe is None:
            return
        try:
            self._observe(notice)
        except Exception as error:
            # Told once and never asked again: each failure is a record, and each record would be shown.
            self._observe = None
            log.exception("showing record %d failed", notice.seq)
            if not self._machine.ended:
                self.post(Kind.FAULT, self._fault("display", error))

    def _set_limits(self) -> list[asyncio.TimerHandle]:
        """The run's own time, and the moment by which it must have ended if there is one."""
        machine, loop = self._machine, asyncio.get_running_loop()
        left_ns = {"time": machine.time_limit_ns - machine.bench_ns}
        if machine.deadline_utc_ns is not None:
            left_ns["deadline"] = machine.deadline_utc_ns - self._clock.utc_ns()
        return [loop.call_later(max(0, ns) * 1e-9, self._time_is_up, limit) for limit, ns in left_ns.items()]

    def _time_is_up(self, limit: str) -> None:
        self.post(Kind.DEADLINE, {"at_ns": self.at_ns(), "limit": limit})

    # ---- effects ----------------------------------------------------------------------------------------

    def _start(self, effect: Effect) -> None:
        if isinstance(effect, StartLook):
            self._tasks.create_task(self._look(effect))
            return
        assert self._hands is not None, "a session without devices starts none"
        match effect:
            case StartPoint(sweep, index, visit):
                self._hands.arm()
                self._act(Action.POINT, partial(self._hands.point, sweep=sweep, index=index, visit=visit))
            case StartPrepare():
                self._hands.arm()
                self._act(Action.PREPARE, self._hands.prepare)
            case StartSafe():
                self._hands.arm()
                self._act(Action.SAFE, self._hands.safe)
            case EndDwell():
                self._hands.end_dwell()
            case Halt():
                self._tasks.create_task(self._halt())

    def _act(self, action: Action, call: Callable[[], Awaitable[Ending]]) -> None:
        self._tasks.create_task(self._carry_out(action, call))

    async def _carry_out(self, action: Action, call: Callable[[], Awaitable[Ending]]) -> None:
        try:
            kind, body = await call()
        except Exception as error:
            kind, body = Kind.FAULT, self._fault(action, error)
        self.post(kind, body)
        grave = None if self._hands is None else self._hands.grave()
        if grave is not None:
            self.post(Kind.FAULT, self._fault("dwell", grave))

    async def _halt(self) -> None:
        assert self._hands is not None
        try:
            await self._hands.halt()
        except Exception as error:
            self.post(Kind.FAULT, self._fault("halt", error))

    async def _look(self, request: StartLook) -> None:
        look = None
        if request.now.can_be_weighed:  # a run that ended early has nothing to weigh
            try:
                look = await self._looker.look(request)
            except Exception as error:
                self.post(Kind.FAULT, self._fault("look", error))
        if request.final:
            self.post(Kind.CONCLUSION, self._concluded(look))
        elif look is not None:
            self.post(Kind.LOOK, {"at_ns": self.at_ns(), "horizon": request.horizon, "look": look})

    def _concluded(self, look: dict[str, Any] | None) -> dict[str, Any]:
        try:
            conclusion = self._conclude(self._machine, look)
        except Exception as error:
            self.post(Kind.FAULT, self._fault("conclude", error))
            conclusion = self._conclude(self._machine, None)
        return {"at_ns": self.at_ns()} | conclusion

    def _fault(self, action: str, error: Exception) -> dict[str, Any]:
        body = {"at_ns": self.at_ns(), "action": str(action)}
        if isinstance(error, DeviceError):
            return body | {
                "device": error.device,
                "error": type(error).__name__,
                "text": error.text,
                "repeat": error.repeat,
            }
        log.error("unexpected error during %s", action, exc_info=error)
        where = traceback.extract_tb(error.__traceback__)[-1:] if error.__traceback__ else []
        place = "".join(f" ({frame.name}, line {frame.lineno})" for frame in where)
        text = f"{type(error).__name__}: {error}{place}"
        return body | {"device": "gratingd", "error": "Internal", "text": text, "repeat": False}

    async def _rescue(self) -> None:
        """The loop is gone: make the bench safe without it, and leave the journal to be recovered."""
        if self._hands is not None and not self._machine.ended:
            _, report = await asyncio.shield(self._hands.safe())
            log.error("the run broke off; shutter %s, drive %s", report["shutter"], report["drive"])
