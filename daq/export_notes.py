"""The log book in a run file: /entry/notebook, one NXnote a note, in the order they were added.

Notes are the only thing in a run file that its journal does not know; everything else is left as it is, and
`first_difference` says whether that is so.
"""

from __future__ import annotations

import contextlib
import fcntl
import io
import os
from collections.abc import Iterator
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import h5py
import numpy as np

from daq.export_tree import group, put
from daq.runfile import open_run
from drivers.errors import DataError

NOTEBOOK = "entry/notebook"


@dataclass(frozen=True, slots=True)
class Note:
    """One entry of the log book. `date` is UTC, ISO 8601; `author` None: nobody signed."""

    date: str
    author: str | None
    text: str


@contextlib.contextmanager
def turn(folder: Path) -> Iterator[None]:
    """One process at a time changes notes in a folder; the others wait. OSError where nothing can be locked.

    The lock is on the folder itself: a lock on a file would stay with the file that is replaced.
    """
    descriptor = os.open(folder, os.O_RDONLY | os.O_DIRECTORY)
    try:
        fcntl.flock(descriptor, fcntl.LOCK_EX)
        yield
    finally:
        os.close(descriptor)


def read_notes(path: Path) -> tuple[Note, ...]:
    """The notes of a run file. Raises DataError if it is none, or if its notes are damaged."""
    with open_run(path) as file:
        return notes_in(file)


def notes_in(file: h5py.File) -> tuple[Note, ...]:
    """The notes of an open run file."""
    if NOTEBOOK not in file:
        return ()
    try:
        made = sorted(file[NOTEBOOK].values(), key=lambda note: int(note["sequence_index"][()]))
        return tuple(
            Note(
                date=note["date"].asstr()[()],
                author=note["author"].asstr()[()] if "author" in note else None,
                text=note["data"].asstr()[()],
            )
            for note in made
        )
    except (KeyError, OSError, TypeError, ValueError, AttributeError) as error:
        raise DataError(f"{file.filename}: its log book is damaged ({error})") from error


def put_note(file: h5py.File, note: Note) -> None:
    """One more note at the end of the log book."""
    notebook = file[NOTEBOOK] if NOTEBOOK in file else group(file["entry"], "notebook", "NXcollection")
    number = len(notebook) + 1
    made = group(notebook, f"note_{number}", "NXnote")
    put(made, "author", note.author)
    put(made, "date", note.date)
    put(made, "type", "text/plain")
    put(made, "data", note.text)
    put(made, "sequence_index", number)


def image_with(data: bytes, note: Note) -> bytes:
    """The bytes of a run file, and of the same file with one more note."""
    image = io.BytesIO(data)
    with h5py.File(image, "r+") as file:
        put_note(file, note)
    return image.getvalue()


def first_difference(one: Path, other: Path) -> str | None:
    """Name of the first thing outside the log book in which two run files differ in any bit, or None."""
    with open_run(one) as left, open_run(other) as right:
        names = _names(left)
        if names != _names(right):
            return "the list of what it holds"
        for name in names:
            if not _same(left[name], right[name]):
                return name
    return None


def _names(file: h5py.File) -> list[str]:
    found = ["/"]
    file.visit(found.append)
    return [name for name in found if name != NOTEBOOK and not name.startswith(f"{NOTEBOOK}/")]


def _same(one: Any, other: Any) -> bool:
    if type(one) is not type(other) or list(one.attrs) != list(other.attrs):
        return False
    if not all(_bits(one.attrs[key]) == _bits(other.attrs[key]) for key in one.attrs):
        return False
    if isinstance(one, h5py.Group):
        return True
    return bool(one.dtype == other.dtype and one.shape == other.shape and _bits(one[()]) == _bits(other[()]))


def _bits(value: Any) -> Any:
    array = np.asarray(value)
    return array.tolist() if array.dtype == object else (str(array.dtype), array.shape, array.tobytes())
