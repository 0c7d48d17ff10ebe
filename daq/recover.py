"""Journals left behind by a crash: made into files, or carried on where they stopped."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from pathlib import Path
from typing import Any

from daq.carry import Observer, Outcome, Stopper, carry_run, with_file
from daq.head import path_of
from daq.journal import FolderLock, Journal, JournalError, read_journal
from daq.machine import Machine, MachineError
from daq.night import open_devices
from daq.records import Kind, Record
from daq.runfile import read_run
from drivers.bench import LoadedBench, read_bench
from drivers.clock import Clock
from drivers.errors import DataError, GratingdError
from drivers.slug import slug_of


@dataclass(frozen=True, slots=True)
class Left:
    """A journal and what is known of it without changing it."""

    path: Path
    head: dict[str, Any]
    records: int
    points: int
    sessions: int
    concluded: dict[str, Any] | None

    @property
    def file(self) -> Path:
        return self.path.with_suffix(".h5")


def find_journals(folder: Path) -> list[Path]:
    """Every journal of the folder, by name. Raises DataError without a folder."""
    if not folder.is_dir():
        raise DataError(f"{folder}: is no folder; give the folder that holds the .journal files")
    return sorted(folder.glob("*.journal"))


def examine(path: Path) -> Left:
    """Raises JournalError if it is damaged, of a newer format or no journal."""
    records = read_journal(path)
    head = next(records).body
    points = sessions = 0
    last: Record | None = None
    for last in records:
        points += last.kind == Kind.POINT
        sessions += last.kind == Kind.SESSION
    seq = 1 if last is None else last.seq
    concluded = last.body if last is not None and last.kind == Kind.CONCLUSION else None
    return Left(path, head, seq, points, sessions, concluded)


def refold(path: Path, head: dict[str, Any]) -> Machine:
    """The machine as it stood when the last record was acknowledged.

    Raises JournalError if the records cannot have followed each other.
    """
    records = read_journal(path)
    seq = next(records).seq
    try:
        machine = Machine(head["plan"])
        for record in records:
            seq = record.seq
            machine.step(record.kind, record.body)
    except (KeyError, TypeError, ValueError, MachineError) as error:
        raise JournalError(
            f"{path}: damaged: record {seq} does not fit ({type(error).__name__}: {error}); "
            "restore the journal from a copy"
        ) from error
    return machine


async def recover(
    folder: Path,
    clock: Clock,
    *,
    resume: bool,
    observe: Observer,
    on_run: Callable[[dict[str, Any]], None],
    stopper: Stopper,
) -> Outcome:
    """Every run of the folder concluded and with a complete file; a summary for each that was not.

    Without `resume` no device is touched: a run that had not ended is concluded from the points it has, with
    the stop reason "interrupted". With it the bench of the journal's head is opened and the run carried on.
    A journal that cannot be used is a problem told and costs none of the others. Raises DataError without a
    folder, JournalError if another gratingd works in it.
    """
    journals = find_journals(folder)
    done = Outcome()
    with FolderLock(folder):
        for path in journals:
            try:
                left = examine(path)
                if left.concluded is not None and _has_complete_file(left):
                    continue
                on_run(left.head)
                if left.concluded is not None:
                    summary = await with_file(left.concluded["summary"], path, clock)
                else:
                    summary = await _carry_on(left, clock, resume, observe, stopper)
            except GratingdError as error:
                done.problems.append(str(error))
            else:
                done.runs.append(summary)
            if stopper.reason is not None:
                break
    done.stopped = stopper.reason
    return done


def _has_complete_file(left: Left) -> bool:
    try:
        return read_run(left.file).complete
    except DataError:
        return False


async def _carry_on(
    left: Left, clock: Clock, resume: bool, observe: Observer, stopper: Stopper
) -> dict[str, Any]:
    machine = refold(left.path, left.head)
    devices = await open_devices(bench_of(left), clock, left.head["seed"]) if resume else None
    journal = Journal.open(left.path, threaded=not clock.is_virtual)
    try:
        return await carry_run(
            left.head,
            journal,
            machine,
            devices=devices,
            clock=clock,
            session=left.sessions + 1,
            reason="resume" if resume else "recover",
            observe=observe,
            stopper=stopper,
        )
    finally:
        if devices is not None:
            await devices.close()


def bench_of(left: Left) -> LoadedBench:
    """The bench as the journal's head has it; relative paths in it start where the bench file was."""
    text = left.head["bench"]["text"]
    path = path_of(left.head["bench"]["path"])
    name = f"{left.path} (the bench in its head)"
    bench = read_bench(text, name)
    return LoadedBench(
        bench=bench,
        path=path,
        text=text,
        sha256=left.head["bench"]["sha256"],
        folder=path.parent,
        slug=slug_of(bench.name),
    )
