"""Journal to run file: stream, write beside the target, read back, compare every bit, replace.

Run as a child process it keeps h5py and the time it takes away from the daemon:

    python -P -m daq.export JOURNAL OUT

prints one line of JSON ({"ok": true, "file", "complete", "records", "points"} or {"ok": false, "error",
"kind"}) and ends with 0 when the file stands, 2 for wrong arguments, 3 when the journal cannot be read, 4
when the file cannot be written or must not be replaced.
"""

from __future__ import annotations

import contextlib
import json
import os
import sys
from collections.abc import Callable
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import h5py

from daq.export_columns import columns
from daq.export_layout import Curve, FloatArray, RunWriter, Scale
from daq.export_notes import Note, notes_in, put_note, turn
from daq.journal import JournalError, decode, fsync_folder, newest_seq, read_rows
from daq.records import Body, Kind, Record
from daq.runfile import event_rows, open_run, same_columns, scan_block
from daq.tally import Snapshot
from drivers.errors import DataError, GratingdError

_BLOCK = 4096

ScaleOf = Callable[[Body], Scale]


class ExportError(GratingdError):
    """A run file cannot be written, or must not be replaced; the text says what to do."""


@dataclass(frozen=True, slots=True)
class Exported:
    """A run file that stands: complete or a snapshot, with how many records and points."""

    file: Path
    complete: bool
    records: int
    points: int


def plan_scale(plan: Body) -> Scale:
    """The wavelength scale that the head's plan describes."""
    from daq.planned import mount_of

    return mount_of(plan)


def fitted_curve(look: Body, head: Body, snapshot: Snapshot, *, kind: str) -> FloatArray:
    """The model rates of a look's fit (see `export_layout.Curve`)."""
    from analysis.curve import curve
    from analysis.question import Look, Question, from_json
    from analysis.readings import AnalogueLaw
    from daq.looks import counts_of
    from daq.planned import detector_law

    # what the record of a look carries beside the look itself
    plain = {key: value for key, value in look.items() if key not in ("horizon", "at_ns")}
    question = from_json(Question, head["question"])
    made = curve(from_json(Look, plain), question, counts_of(snapshot, head["plan"]), kind=kind)
    law = detector_law(head["plan"])
    return law.recorded_per_s(made) if isinstance(law, AnalogueLaw) else made


def export(
    journal_path: str | os.PathLike[str],
    out_path: str | os.PathLike[str],
    *,
    complete: bool | None = None,
    scale_of: ScaleOf = plan_scale,
    curve: Curve | None = fitted_curve,
) -> Exported:
    """Make the run file of a journal, finished or not, and verify it against the journal bit for bit.

    `complete` None: complete if the journal ends with its conclusion; True demands that. A journal that is
    still being written is exported up to the newest record found at the start. The same records give the same
    bytes. Raises JournalError if the journal cannot be read; ExportError if the file cannot be written, if it
    differs from the journal, or if a file stands there that must not be replaced: a complete one by an
    incomplete or shorter one or by another run's, or one that is no run file. Notes that were added to the
    file are carried over.
    """
    journal_path, out_path = Path(journal_path), Path(out_path)
    last_seq = newest_seq(journal_path)
    _clear_leftovers(out_path)
    with contextlib.ExitStack() as held:
        if out_path.exists():
            with contextlib.suppress(OSError):  # where nothing can be locked, no note can be added either
                held.enter_context(turn(out_path.parent))
        return _export(journal_path, out_path, last_seq, complete, scale_of, curve)


def _export(
    journal_path: Path,
    out_path: Path,
    last_seq: int,
    complete: bool | None,
    scale_of: ScaleOf,
    curve: Curve | None,
) -> Exported:
    temporary = out_path.with_name(f"{out_path.name}.tmp-{os.getpid()}")
    try:
        writer = _write(journal_path, last_seq, temporary, complete, scale_of, curve, _notes(out_path))
        done = Exported(
            out_path, _is_complete(writer, complete), writer.summary.records, writer.summary.points
        )
        _fsync(temporary)
        _compare(journal_path, last_seq, temporary)
        _check_replace(out_path, done, str(writer.summary.head["run_id"]))
        os.replace(temporary, out_path)
        fsync_folder(out_path.parent)
    except OSError as error:
        raise ExportError(
            f"{out_path}: cannot be written ({error.strerror or error}); the journal is whole: "
            "make room or choose a folder that can be written, then export again"
        ) from error
    finally:
        temporary.unlink(missing_ok=True)
    return done


def _write(
    journal_path: Path,
    last_seq: int,
    temporary: Path,
    complete: bool | None,
    scale_of: ScaleOf,
    curve: Curve | None,
    notes: tuple[Note, ...],
) -> RunWriter:
    try:
        # In memory, about 50 bytes a point: HDF5 that meets a full disk ends the process with a signal, a
        # plain write with an error.
        with h5py.File(temporary, "w", driver="core", backing_store=False) as file:
            writer = RunWriter(file)
            for seq, kind, text in read_rows(journal_path, last_seq=last_seq):
                writer.add(Record(seq, kind, decode(journal_path, seq, kind, text)), text)
            scale = scale_of(writer.summary.head["plan"])
            writer.finish(complete=_is_complete(writer, complete), scale=scale, curve=curve)
            for note in notes:
                put_note(file, note)
            file.flush()
            temporary.write_bytes(file.id.get_file_image())
    except (KeyError, TypeError, ValueError, OverflowError) as error:
        why = f"no {error} in it" if isinstance(error, KeyError) else str(error)
        raise ExportError(f"{journal_path}: a record does not fit the layout of a run file: {why}") from error
    return writer


def _notes(out_path: Path) -> tuple[Note, ...]:
    """What a person wrote into the file that is about to be replaced; the journal does not know it."""
    if not out_path.exists():
        return ()
    try:
        with open_run(out_path) as file:
            return notes_in(file)
    except DataError as error:
        raise ExportError(f"{error}; it is not replaced: move it away, then export again") from error


def _is_complete(writer: RunWriter, wanted: bool | None) -> bool:
    concluded = writer.summary.conclusion is not None
    if wanted and not concluded:
        raise ExportError(
            "a complete run file was asked for, but the journal has no conclusion; "
            "run 'gratingd recover' on its folder first"
        )
    return concluded if wanted is None else wanted


def _compare(journal_path: Path, last_seq: int, temporary: Path) -> None:
    """Journal against file: every point's columns and every other record's text, in order."""
    with open_run(temporary) as file:
        events = event_rows(file)
        block: list[tuple[int, int, Body]] = []
        start = sessions = 0
        for seq, kind, text in read_rows(journal_path, last_seq=last_seq):
            if kind == Kind.POINT:
                block.append((seq, sessions, decode(journal_path, seq, kind, text)))
                if len(block) == _BLOCK:
                    start, block = _compare_block(file, start, block), []
                continue
            sessions += kind == Kind.SESSION
            found = next(events, None)
            if found != (seq, kind, text):
                _raise_differs(temporary, f"record {seq} ({kind})")
        start = _compare_block(file, start, block)
        if next(events, None) is not None or len(file["entry/scan/seq"]) != start:
            _raise_differs(temporary, "the number of records")


def _compare_block(file: h5py.File, start: int, block: list[tuple[int, int, Body]]) -> int:
    stop = start + len(block)
    odd = same_columns(columns(block), scan_block(file, start, stop)) if block else None
    if odd is not None:
        _raise_differs(Path(file.filename), f"column {odd}, points {start} to {stop - 1}")
    return stop


def _raise_differs(path: Path, what: str) -> None:
    raise ExportError(
        f"{path}: read back, the file differs from the journal ({what}); nothing was replaced and "
        "the journal is whole: check disk and memory, then export again"
    )


def _check_replace(out_path: Path, new: Exported, run_id: str) -> None:
    if not out_path.exists():
        return
    try:
        with open_run(out_path) as file:
            config = file["entry/config"]
            complete, records = bool(config["complete"][()]), int(config["records"][()])
            old_id = file["entry/entry_identifier"].asstr()[()]
    except (DataError, KeyError) as error:
        raise ExportError(f"{error}; it is not replaced: move it away, then export again") from error
    if complete and (not new.complete or new.records < records or old_id != run_id):
        raise ExportError(
            f"{out_path}: is the complete file of run {old_id} with {records} records; it is not replaced by "
            f"{'a complete' if new.complete else 'an incomplete'} one of run {run_id} with {new.records}: "
            "choose another name"
        )


def _clear_leftovers(out_path: Path) -> None:
    """Temporary files of exports that were killed."""
    for leftover in out_path.parent.glob(f"{out_path.name}.tmp-*"):
        pid = leftover.name.rpartition("-")[2]
        if pid.isdecimal() and not Path("/proc", pid).exists():
            leftover.unlink(missing_ok=True)


def _fsync(path: Path) -> None:
    descriptor = os.open(path, os.O_RDONLY)
    try:
        os.fsync(descriptor)
    finally:
        os.close(descriptor)


def _say(answer: dict[str, Any]) -> None:
    sys.stdout.write(json.dumps(answer, sort_keys=True) + "\n")


def main(arguments: list[str]) -> int:
    """The child process; returns its exit code."""
    if len(arguments) != 2:
        _say({"ok": False, "kind": "Usage", "error": "usage: python -P -m daq.export JOURNAL OUT"})
        return 2
    try:
        done = export(arguments[0], arguments[1])
    except GratingdError as error:
        _say({"ok": False, "kind": type(error).__name__, "error": str(error)})
        return 3 if isinstance(error, JournalError) else 4
    _say(
        {
            "ok": True,
            "file": str(done.file),
            "complete": done.complete,
            "records": done.records,
            "points": done.points,
        }
    )
    return 0


if __name__ == "__main__":
    from daq import guard

    guard.check()
    sys.exit(main(sys.argv[1:]))
