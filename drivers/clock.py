"""Time, real and virtual: the only module that may ask the machine what time it is.

Real time is asyncio's own loop with the computer's clock. Virtual time is an event loop that jumps to the
next timer whenever nothing else is ready: a night passes in seconds, the order of things is the same as in
real time, and the same seed gives the same bytes. It owns no threads and no sockets, and it raises
`DeadlockError` where a real loop would wait for ever.
"""

from __future__ import annotations

import asyncio
import contextvars
import heapq
import itertools
import time
from asyncio import base_events, events
from collections.abc import Callable, Coroutine
from dataclasses import dataclass
from typing import Any, Protocol, TypeVar, cast

T = TypeVar("T")


class DeadlockError(RuntimeError):
    """Under virtual time every task waits and no timer is left."""


class Clock(Protocol):
    """Wall clock and monotonic clock, both in integer nanoseconds."""

    @property
    def is_virtual(self) -> bool: ...

    def utc_ns(self) -> int:
        """Nanoseconds since 1970-01-01T00:00:00Z."""
        ...

    def monotonic_ns(self) -> int:
        """Nanoseconds since some fixed moment; never steps back."""
        ...


@dataclass(frozen=True, slots=True)
class RealClock:
    """The computer's clocks."""

    is_virtual: bool = False

    def utc_ns(self) -> int:
        return time.time_ns()

    def monotonic_ns(self) -> int:
        return time.monotonic_ns()


class _Timer(asyncio.TimerHandle):
    """A timer that breaks ties by age: asyncio's own heap does not."""

    __slots__ = ("_order",)
    _order: int

    def __lt__(self, other: object) -> bool:
        if not isinstance(other, _Timer):
            return NotImplemented
        mine, theirs = cast(Any, self), cast(Any, other)
        return (mine._when, self._order) < (theirs._when, other._order)


class _Jump:
    """Stands where a selector stands in a real loop: instead of waiting it moves the clock."""

    def __init__(self) -> None:
        self.now_ns = 0

    def select(self, timeout: float | None) -> list[Any]:
        if timeout is None:
            raise DeadlockError("virtual time: every task waits and no timer is set")
        self.now_ns += round(timeout * 1e9)
        return []


class VirtualLoop(base_events.BaseEventLoop):
    """An event loop whose time is a number. Derives from the bare base loop: no self-pipe, no sockets."""

    def __init__(self) -> None:
        super().__init__()
        self._jump = _Jump()
        self._selector = self._jump
        self._clock_resolution = 1e-9
        self._orders = itertools.count()

    def time(self) -> float:
        return self._jump.now_ns * 1e-9

    @property
    def now_ns(self) -> int:
        return self._jump.now_ns

    def call_at(  # type: ignore[override]
        self,
        when: float,
        callback: Callable[..., object],
        *args: Any,
        context: contextvars.Context | None = None,
    ) -> asyncio.TimerHandle:
        self._check_closed()  # type: ignore[attr-defined]
        timer = _Timer(when, callback, args, self, context)
        timer._order = next(self._orders)
        heapq.heappush(self._scheduled, timer)  # type: ignore[attr-defined]
        cast(Any, timer)._scheduled = True
        return timer

    def _process_events(self, event_list: list[Any]) -> None:
        """There are never any: nothing outside can speak to this loop."""

    def _write_to_self(self) -> None:
        """Wake-ups from other threads: there are none."""

    def run_in_executor(self, executor: Any, func: Any, *args: Any) -> Any:  # type: ignore[override]
        raise RuntimeError("virtual time runs no threads")


@dataclass(frozen=True, slots=True)
class VirtualClock:
    """Reads a VirtualLoop; its wall clock started at `start_utc_ns`."""

    loop: VirtualLoop
    start_utc_ns: int
    is_virtual: bool = True

    def utc_ns(self) -> int:
        return self.start_utc_ns + self.loop.now_ns

    def monotonic_ns(self) -> int:
        return self.loop.now_ns


def run_real(main: Callable[[Clock], Coroutine[Any, Any, T]]) -> T:
    """Run `main(clock)` under real time."""
    with asyncio.Runner() as runner:
        return runner.run(main(RealClock()))


def run_virtual(main: Callable[[Clock], Coroutine[Any, Any, T]], start_utc_ns: int) -> T:
    """Run `main(clock)` under virtual time that starts at `start_utc_ns`."""
    loop = VirtualLoop()
    events.set_event_loop(None)
    with asyncio.Runner(loop_factory=lambda: loop) as runner:
        return runner.run(main(VirtualClock(loop, start_utc_ns)))
