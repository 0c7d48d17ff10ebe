"""Carrying one run from wherever its journal stands to its file: the same way for a new and a resumed one."""

from __future__ import annotations

import asyncio
import contextlib
import json
import logging
import sys
from collections.abc import Callable, Mapping
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

from daq.hands import Devices, Grip, Hands
from daq.journal import Journal
from daq.looks import InlineLooker, Looker, ProcessLooker
from daq.machine import Machine
from daq.records import StopReason
from daq.runner import Notice, Runner
from daq.summary import conclusion
from drivers.clock import Clock
from drivers.errors import GratingdError

log = logging.getLogger(__name__)

SHORTEST_SNAPSHOT_PAUSE_S = 5.0
SNAPSHOT_PAUSE_RATIO = 20.0
"""A live snapshot of the file may cost at most a twentieth of the time."""

Observer = Callable[[Notice], None]


class ExportFailed(GratingdError):
    """The journal is whole, but its file could not be made."""


@dataclass(slots=True)
class Outcome:
    """What came of a night or a recovery: a summary a finished run, and what to say of the others."""

    runs: list[dict[str, Any]] = field(default_factory=list)
    problems: list[str] = field(default_factory=list)
    not_started: list[str] = field(default_factory=list)
    stopped: StopReason | None = None


def left_unsafe(summary: Mapping[str, Any]) -> bool:
    """Whether the bench could not be seen to be safe at the end of a run that used it."""
    safe = summary.get("safe")
    return safe is not None and (safe["shutter"], safe["drive"]) != ("closed", "stopped")


class Stopper:
    """Where a stop is asked for, by Ctrl-C, a signal or a timer; it reaches the run."""

    def __init__(self) -> None:
        self.reason: StopReason | None = None
        self._runner: Runner | None = None

    def stop(self, reason: StopReason, source: str) -> None:
        if self.reason is None:
            self.reason = reason
        if self._runner is not None:
            self._runner.wish("stop", reason=reason, source=source)

    def attend(self, runner: Runner | None) -> None:
        """From now on stops go to this runner."""
        self._runner = runner
        if runner is not None and self.reason is not None:
            runner.wish("stop", reason=self.reason, source="night")


def journal_path_of(out: Path, run_id: str) -> Path:
    return out / f"{run_id}.journal"


async def carry_run(
    head: dict[str, Any],
    journal: Journal,
    machine: Machine,
    *,
    devices: Devices | None,
    clock: Clock,
    session: int,
    reason: str,
    observe: Observer,
    stopper: Stopper,
) -> dict[str, Any]:
    """One session of one run, to its conclusion and its file; returns its summary. Closes the journal.

    Raises RunFailed or JournalError when the run broke off (the journal can be recovered).
    """
    looker: Looker = InlineLooker(head) if clock.is_virtual else ProcessLooker(head)
    hands = None if devices is None else Hands(devices, Grip(**head["plan"]["grip"]), clock)
    runner = Runner(
        journal=journal,
        machine=machine,
        hands=hands,
        looker=looker,
        session=session,
        reason=reason,
        conclude=lambda machine, look: conclusion(head, machine, look),
        clock=clock,
        observe=observe,
    )
    out = journal.path.with_suffix(".h5")
    snapshots = None if clock.is_virtual else asyncio.create_task(_snapshots(journal.path, out))
    stopper.attend(runner)
    try:
        await runner.run()
    finally:
        stopper.attend(None)
        if snapshots is not None:
            snapshots.cancel()
            with contextlib.suppress(asyncio.CancelledError):
                await snapshots
        await looker.close()
        journal.close()
    assert machine.conclusion is not None, "the runner returns after the conclusion only"
    return await with_file(machine.conclusion["summary"], journal.path, clock)


async def with_file(summary: dict[str, Any], journal_path: Path, clock: Clock) -> dict[str, Any]:
    """The summary with the path of its exported file; without one, `file` is null and `problem` says why.

    A file that cannot be made must not cost the rest of the night: the journal holds everything.
    """
    out = journal_path.with_suffix(".h5")
    try:
        await export_run(journal_path, out, clock)
    except ExportFailed as error:
        log.error("%s", error)
        return summary | {"file": None, "problem": str(error)}
    return summary | {"file": str(out.absolute())}


async def export_run(journal_path: Path, out: Path, clock: Clock) -> None:
    """The file of a journal: a plain call under virtual time, a child process otherwise.

    Raises ExportFailed.
    """
    if clock.is_virtual:
        problem = _export_here(journal_path, out)
    else:
        problem = await _export_in_child(journal_path, out)
    if problem is not None:
        raise ExportFailed(
            f"{journal_path}: its file could not be made: {problem}; "
            f"mend that and run: gratingd recover {journal_path.parent}"
        )


def _export_here(journal_path: Path, out: Path) -> str | None:
    from daq.export import export

    try:
        export(journal_path, out)
    except GratingdError as error:
        return str(error)
    return None


async def _export_in_child(journal_path: Path, out: Path) -> str | None:
    try:
        child = await asyncio.create_subprocess_exec(
            *(sys.executable, "-P", "-m", "daq.export", str(journal_path), str(out)),
            stdin=asyncio.subprocess.DEVNULL,
            stdout=asyncio.subprocess.PIPE,
            stderr=asyncio.subprocess.PIPE,
            start_new_session=True,  # Ctrl-C ends the run cleanly; its file is made all the same
        )
    except OSError as error:  # no process or no memory to be had just now
        return f"the export could not be started: {error}"
    try:
        printed, complained = await child.communicate()
    except asyncio.CancelledError:
        with contextlib.suppress(ProcessLookupError):
            child.kill()
        await child.wait()
        raise
    if child.returncode == 0:
        return None
    with contextlib.suppress(ValueError, KeyError, TypeError):
        return str(json.loads(printed)["error"])
    return complained.decode(errors="replace").strip() or f"the export ended with code {child.returncode}"


async def _snapshots(journal_path: Path, out: Path) -> None:
    """The file so far, now and then, for whoever looks in meanwhile."""
    loop = asyncio.get_running_loop()
    pause_s = SHORTEST_SNAPSHOT_PAUSE_S
    while True:
        await asyncio.sleep(pause_s)
        started_s = loop.time()
        problem = await _export_in_child(journal_path, out)
        if problem is not None:
            log.warning("no live snapshot: %s", problem)
        pause_s = max(SHORTEST_SNAPSHOT_PAUSE_S, SNAPSHOT_PAUSE_RATIO * (loop.time() - started_s))
