"""Run files read back: everything the journal held, from the HDF5 file alone."""

from __future__ import annotations

import json
import os
from collections.abc import Iterator, Mapping
from dataclasses import dataclass
from pathlib import Path
from typing import Any, NoReturn

import h5py
import numpy as np
from numpy.typing import NDArray

from daq.export_columns import AMBIENT, COLUMNS, SWITCHES, bodies
from daq.records import FORMAT, Kind, Record, other_format
from drivers.errors import DataError

_BLOCK = 4096


@dataclass(frozen=True, slots=True)
class RunData:
    """One run as recorded.

    `points` holds one array (N,) a column of `export_columns.COLUMNS`, in acquisition order: integers as
    int64, `light` and `complete` as bool, ambient readings as float64 (NaN: not read), `flags` as str objects
    (comma between several). `events` are all other records, the head first.
    """

    path: Path
    complete: bool
    head: dict[str, Any]
    points: dict[str, NDArray[Any]]
    events: tuple[Record, ...]
    conclusion: dict[str, Any] | None

    def records(self) -> Iterator[Record]:
        """The journal again: all records in their order."""
        events = iter(self.events)
        event = next(events, None)
        for seq, body in zip(self.points["seq"].tolist(), bodies(self.points), strict=True):
            while event is not None and event.seq < seq:
                yield event
                event = next(events, None)
            yield Record(seq, Kind.POINT, body)
        while event is not None:
            yield event
            event = next(events, None)


def read_run(path: str | os.PathLike[str]) -> RunData:
    """Read a whole run file.

    Raises DataError naming the file if it is missing, a directory, not HDF5, truncated, not a run file, or
    written by a newer gratingd.
    """
    path = Path(path)
    with open_run(path) as file:
        try:
            complete = bool(file["entry/config/complete"][()])
            points = {name: file[f"entry/scan/{name}"][:] for name in COLUMNS if name != "flags"}
            points["flags"] = file["entry/scan/flags"].asstr()[:]
            events = tuple(read_events(file))
        except (KeyError, OSError, ValueError, TypeError, AttributeError) as error:
            _raise_damaged(path, error)
    for name in SWITCHES:
        points[name] = points[name].astype(np.bool_)
    seqs = np.sort(np.concatenate([points["seq"], np.array([e.seq for e in events], dtype=np.int64)]))
    if not np.array_equal(seqs, np.arange(1, len(seqs) + 1)) or not events or events[0].kind != Kind.HEAD:
        _raise_damaged(path, "records are missing")
    last = events[-1]
    conclusion = last.body if last.kind == Kind.CONCLUSION else None
    return RunData(path, complete, events[0].body, points, events, conclusion)


def open_run(path: Path) -> h5py.File:
    """Open a run file for reading after checking that it is one. Raises DataError."""
    if path.is_dir():
        raise DataError(f"{path}: is a directory; name a run file (.h5) in it")
    if not path.exists():
        raise DataError(f"{path}: no such file")
    try:
        file = h5py.File(path, "r")
    except OSError as error:
        if _starts_with(path, b"\x89HDF\r\n\x1a\n"):
            _raise_damaged(path, error)
        if _starts_with(path, b"SQLite format 3\0"):
            raise DataError(
                f"{path}: is a journal; its run file (.h5) is wanted. If there is none yet: "
                f"gratingd recover {path.parent}"
            ) from error
        raise DataError(f"{path}: is not an HDF5 file; a run file made by gratingd is wanted") from error
    try:
        if file.attrs.get("creator") != "gratingd" or "entry/config/format" not in file:
            raise DataError(f"{path}: is HDF5, but not a run file made by gratingd")
        found = file["entry/config/format"][()]
        if not isinstance(found, np.integer) or found < 1:
            _raise_damaged(path, f"its format is {found!r}")
        if found != FORMAT:
            raise DataError(f"{path}: {other_format(int(found))}")
    except (OSError, RuntimeError) as error:
        file.close()
        _raise_damaged(path, error)
    except DataError:
        file.close()
        raise
    return file


def read_events(file: h5py.File) -> Iterator[Record]:
    """All records of an open run file that are no points, in order."""
    for seq, kind, text in event_rows(file):
        yield Record(seq, kind, json.loads(text))


def event_rows(file: h5py.File) -> Iterator[tuple[int, str, str]]:
    """As `read_events`, bodies as JSON text."""
    group = file["entry/events"]
    for start in range(0, len(group["seq"]), _BLOCK):
        part = slice(start, start + _BLOCK)
        yield from zip(
            group["seq"][part].tolist(), group["kind"].asstr()[part], group["body"].asstr()[part], strict=True
        )


def scan_block(file: h5py.File, start: int, stop: int) -> dict[str, NDArray[Any]]:
    """Rows start..stop of the scan, as `export_columns.columns` makes them."""
    scan = file["entry/scan"]
    table = {name: scan[name][start:stop] for name in COLUMNS if name != "flags"}
    return table | {"flags": scan["flags"].asstr()[start:stop]}


def same_columns(one: Mapping[str, NDArray[Any]], other: Mapping[str, NDArray[Any]]) -> str | None:
    """Name of the first column that differs in type or in any bit, or None."""
    for name in COLUMNS:
        a, b = one[name], other[name]
        if a.dtype != b.dtype or a.shape != b.shape:
            return name
        same = a.tolist() == b.tolist() if name == "flags" else _bits(a, name) == _bits(b, name)
        if not same:
            return name
    return None


def _bits(values: NDArray[Any], name: str) -> bytes:
    # which of the many NaNs stands for "not read" is no information
    return (np.where(np.isnan(values), np.nan, values) if name in AMBIENT else values).tobytes()


def _starts_with(path: Path, signature: bytes) -> bool:
    try:
        with path.open("rb") as stream:
            return stream.read(len(signature)) == signature
    except OSError:
        return False


def _raise_damaged(path: Path, why: object) -> NoReturn:
    text = f"{path}: truncated or damaged run file ({why}); make it again with 'gratingd recover' if its "
    error = DataError(text + "journal is still there")
    if isinstance(why, BaseException):
        raise error from why
    raise error
