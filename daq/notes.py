"""Notes for the log book of a run that is over: what somebody saw, did or found out afterwards."""

from __future__ import annotations

import unicodedata
from pathlib import Path
from typing import TYPE_CHECKING

from drivers.clock import Clock
from drivers.errors import DataError

if TYPE_CHECKING:
    from daq.export_notes import Note

LONGEST_TEXT = 10_000
LONGEST_AUTHOR = 200


def find_run(given: str, out: Path) -> Path:
    """The run file a user means: a path, or a run's identity in the folder `out`. Raises DataError."""
    path = Path(given)
    if path.exists():
        return path
    named = out / f"{given}.h5"
    if named.name == f"{given}.h5" and named.exists():
        return named
    raise DataError(
        f"{given}: no such file, and no such run in {out}; give a run file (.h5), or --out FOLDER"
    )


def add_note(path: Path, text: str, *, author: str | None, clock: Clock) -> Note:
    """Add a note to a finished run's file and return it as it stands there.

    Everything else in the file stays as it was, to the bit; the file is replaced as a whole, and two who
    write at once both find their notes in it. Raises DataError for a text or an author that cannot be taken,
    for a file that is no finished run, and where the file cannot be replaced.
    """
    from daq.export_layout import iso_utc
    from daq.export_notes import Note, first_difference, image_with, turn
    from daq.runfile import open_run
    from daq.wholefile import write_whole

    _check("the note", text, longest=LONGEST_TEXT, allowed="\n\t")
    if author is not None:
        _check("--author", author, longest=LONGEST_AUTHOR, allowed="")
    note = Note(iso_utc(clock.utc_ns()), author, text)

    def unchanged(new: Path) -> None:
        odd = first_difference(path, new)
        if odd is not None:
            raise DataError(f"{path}: with the note, {odd} would not be what it was; the file is left alone")

    path = path.resolve()  # a link goes on pointing at the file
    try:
        with turn(path.parent):
            with open_run(path) as file:
                if not bool(file["entry/config/complete"][()]):
                    raise DataError(
                        f"{path}: this run is not over, or broke off; when it has ended, or after "
                        f"'gratingd recover {path.parent}', it takes notes"
                    )
            write_whole(path, image_with(path.read_bytes(), note), check=unchanged)
    except OSError as error:
        raise DataError(
            f"{path}: cannot be replaced ({error.strerror or error}); the note is not in it: make room, or "
            "copy the file to a folder that can be written"
        ) from error
    return note


def _check(what: str, text: str, *, longest: int, allowed: str) -> None:
    """Raises DataError unless it is plain text that any reader can show."""
    if not text.strip():
        raise DataError(f"{what} is empty; say something in it")
    if len(text) > longest:
        raise DataError(f"{what} has {len(text)} characters; allowed are {longest}")
    for place, character in enumerate(text):
        # Cc: control characters; Cs: bytes of the command line that are no UTF-8
        if unicodedata.category(character) in ("Cc", "Cs") and character not in allowed:
            lines = "line ends and tabs excepted" if allowed else "and a single line"
            raise DataError(
                f"{what} holds the control character {character!r} at place {place + 1}; wanted is plain "
                f"text, {lines}"
            )
