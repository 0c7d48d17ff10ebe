"""What a person sees while a run goes on: a live table on a terminal, plain lines anywhere else.

Both are observers of durable records. Nothing shown here is journalled, and a terminal that goes away (a
closed window, a pipe nobody reads any more) stops no run: from then on nothing is shown.
"""

from __future__ import annotations

import contextlib
import sys
from collections.abc import Callable, Mapping
from typing import Any, Protocol, TextIO

from daq.machine import Machine
from daq.records import Kind, utc_stamp
from daq.runner import Notice
from daq.wording import duration, light_to_goal, look_in_words

LINE_EVERY_NS = 30_000_000_000
REFRESH_NS = 200_000_000


class Progress(Protocol):
    """An observer that also hears which run begins and when all is over."""

    def begin(self, head: Mapping[str, Any]) -> None: ...

    def observe(self, notice: Notice) -> None: ...

    def close(self) -> None: ...


class Silent:
    """For scripts."""

    def begin(self, head: Mapping[str, Any]) -> None:
        """Says nothing."""

    def observe(self, notice: Notice) -> None:
        """Says nothing."""

    def close(self) -> None:
        """Nothing to close."""


class Lines:
    """One line for each thing worth knowing, and one every half minute between."""

    def __init__(self, stream: TextIO | None = None, *, status_lines: bool = True) -> None:
        # without a stream (standard error closed from the start) print() would turn to standard output
        self._stream: TextIO | None = stream or sys.stderr
        self._status_lines = status_lines
        self._head: Mapping[str, Any] = {}
        self._last_ns = 0

    def begin(self, head: Mapping[str, Any]) -> None:
        self._head = head
        self._last_ns = 0
        self._say(f"{utc_stamp(head['created_utc_ns'])}  {head['target']['name']}: run {head['run_id']}")

    def observe(self, notice: Notice) -> None:
        if notice.kind == Kind.POINT:
            if self._status_lines and notice.machine.bench_ns - self._last_ns >= LINE_EVERY_NS:
                self._last_ns = notice.machine.bench_ns
                self._say(f"  {status(self._head, notice.machine)}")
            return
        text = event_in_words(notice, self._head)
        if text is not None:
            self._last_ns = notice.machine.bench_ns
            self._say(f"  {duration(notice.machine.bench_ns * 1e-9):>12}  {text}")

    def close(self) -> None:
        """Nothing is held back."""

    def _say(self, text: str) -> None:
        if self._stream is None:
            return
        try:
            print(text, file=self._stream, flush=True)
        except OSError:
            self._stream = None


class Live:
    """A small table that stays in place, refreshed by records only: no thread of its own."""

    def __init__(self) -> None:
        from rich.console import Console
        from rich.live import Live as RichLive

        self._console = Console(stderr=True)
        self._live = RichLive(console=self._console, auto_refresh=False, transient=True)
        self._head: Mapping[str, Any] = {}
        self._shown_ns = -REFRESH_NS
        self._last_point: Mapping[str, Any] | None = None
        self._is_gone = False
        self._live.start()

    def begin(self, head: Mapping[str, Any]) -> None:
        self._head = head
        self._shown_ns = -REFRESH_NS
        self._last_point = None
        self._attempt(lambda: self._say(f"{head['target']['name']}: run {head['run_id']}"))

    def observe(self, notice: Notice) -> None:
        self._attempt(lambda: self._observe(notice))

    def close(self) -> None:
        with contextlib.suppress(OSError):
            self._live.stop()

    def _attempt(self, show: Callable[[], None]) -> None:
        if self._is_gone:
            return
        try:
            show()
        except OSError:
            self._is_gone = True

    def _say(self, text: str) -> None:
        self._console.print(text, highlight=False, markup=False)

    def _observe(self, notice: Notice) -> None:
        if notice.kind == Kind.POINT:
            self._last_point = notice.body
        else:
            text = event_in_words(notice, self._head)
            if text is not None:
                self._say(f"  {duration(notice.machine.bench_ns * 1e-9):>12}  {text}")
        if notice.machine.bench_ns - self._shown_ns >= REFRESH_NS or notice.kind != Kind.POINT:
            self._shown_ns = notice.machine.bench_ns
            self._live.update(self._table(notice.machine), refresh=True)

    def _table(self, machine: Machine) -> Any:
        from rich.table import Table
        from rich.text import Text

        table = Table(show_header=False, box=None, padding=(0, 2, 0, 0))
        for name, value in self._rows(machine):
            table.add_row(Text(name, style="bold"), Text(value))
        return table

    def _rows(self, machine: Machine) -> list[tuple[str, str]]:
        from daq.planned import mount_of

        rows = [("doing", doing(machine))]
        point = self._last_point
        if point is not None:
            plan = self._head["plan"]
            where_nm = float(mount_of(plan).wavelength_nm([point["steps"]])[0])
            rate = point["counts"] / (point["gate_ns"] * 1e-9)
            rows.append(
                (
                    "last point",
                    f"{where_nm:.4f} nm ({plan['medium']}), {point['counts']} counts"
                    f"{'' if point['light'] else ' dark'}, {rate:.0f} /s",
                )
            )
        limit_s = machine.time_limit_ns * 1e-9
        rows.append(
            (
                "spent",
                f"{machine.points} points in {machine.sweeps_done} sweeps, light "
                f"{duration(machine.light_ns * 1e-9)}, bench {duration(machine.bench_ns * 1e-9)}"
                f" of {duration(limit_s)}",
            )
        )
        rows.append(("estimate", look_in_words(machine.looks[-1]) if machine.looks else "no look yet"))
        rows.append(("time to goal", time_to_goal(self._head, machine)))
        return rows


def doing(machine: Machine) -> str:
    """What the machine waits for, in a few words."""
    if machine.ended:
        return f"done: {machine.stop}"
    if machine.action == "point" and machine.is_settling:
        return "repeating the dark until it has settled"
    words = {
        "nothing": "paused" if machine.paused else "about to start",
        "prepare": "identifying and homing",
        "point": f"sweep {machine.sweeps_done + 1}, measuring",
        "look": "weighing the evidence",
        "halt": "stopping",
        "safe": "closing the shutter",
        "conclude": "weighing everything",
    }
    return words[machine.action]


def status(head: Mapping[str, Any], machine: Machine) -> str:
    """One line: points, light, estimate, time to goal."""
    estimate = look_in_words(machine.looks[-1]) if machine.looks else "no look yet"
    return (
        f"{machine.points} points, light {duration(machine.light_ns * 1e-9)}; {estimate}; "
        f"to goal: {time_to_goal(head, machine)}"
    )


def time_to_goal(head: Mapping[str, Any], machine: Machine) -> str:
    """Bench time still needed if things go on as they did, never more than the limit leaves."""
    if not machine.looks or machine.light_ns == 0:
        return "not known yet"
    light_s = machine.light_ns * 1e-9
    more_s = light_to_goal(machine.looks[-1], head["question"], light_s)
    if more_s is None:
        return "not foreseeable"
    bench_s = more_s * machine.bench_ns / machine.light_ns
    left_s = (machine.time_limit_ns - machine.bench_ns) * 1e-9
    if bench_s > left_s:
        return f"about {duration(bench_s)}, more than the {duration(left_s)} left"
    return f"about {duration(bench_s)}"


def event_in_words(notice: Notice, head: Mapping[str, Any]) -> str | None:
    """A record for people, None if it is of no interest to them."""
    body = notice.body
    match notice.kind:
        case Kind.PREPARED:
            drive = body["identities"]["drive"]
            return f"ready: drive {drive['maker']} {drive['model']} homed at {body['home_steps']} steps"
        case Kind.LOOK:
            look = body["look"]
            return f"look {look['number']} at {body['horizon']} points: {look_in_words(look)}"
        case Kind.FAULT:
            again = ", trying again" if body["repeat"] and notice.machine.stop is None else ""
            return f"fault: {body['device']}: {body['text']}{again}"
        case Kind.WISH:
            return f"{body['wish']} asked for by {body['source']}"
        case Kind.DEADLINE:
            return "the time limit is reached"
        case Kind.SAFE:
            problems = "; ".join(body["problems"])
            return f"shutter {body['shutter']}, drive {body['drive']}{': ' + problems if problems else ''}"
        case Kind.CONCLUSION:
            look = body["look"]
            said = "nothing could be weighed" if look is None else look_in_words(look)
            return f"ended ({body['stop_reason']}): {said}"
        case _:
            return None
