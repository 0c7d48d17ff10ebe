"""The log book: notes go into a finished run's file and touch nothing else there."""

from __future__ import annotations

import json
import os
import shutil
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import cellar
import h5py
import numpy as np
import pytest
from commandline import complaint, gratingd, start
from test_export import nxcheck

from daq.export import export
from daq.export_notes import first_difference, image_with, read_notes
from daq.journal import Journal
from daq.notes import LONGEST_TEXT, add_note
from daq.runfile import read_run
from drivers.errors import DataError


@dataclass
class Wall:
    """A wall clock that is told the time."""

    now_ns: int = 1_928_600_000_123_456_789
    is_virtual: bool = False

    def utc_ns(self) -> int:
        return self.now_ns

    def monotonic_ns(self) -> int:
        return 0


@pytest.fixture(scope="module")
def measured(tmp_path_factory: pytest.TempPathFactory) -> cellar.Outcome:
    return cellar.run(tmp_path_factory.mktemp("measured"))


@pytest.fixture
def file(measured: cellar.Outcome, tmp_path: Path) -> Path:
    return Path(shutil.copy(measured.file, tmp_path / "run.h5"))


def everything(path: Path) -> dict[str, Any]:
    """Every dataset outside the log book, as bytes."""
    found: dict[str, Any] = {}

    def take(name: str, item: Any) -> None:
        if isinstance(item, h5py.Dataset) and not name.startswith("entry/notebook"):
            value = item[()]
            found[name] = value.tobytes() if isinstance(value, (np.ndarray, np.generic)) else value
            if item.dtype == object:
                found[name] = item.asstr()[()] if item.shape == () else item.asstr()[:].tolist()

    with h5py.File(path) as opened:
        opened.visititems(take)
    return found


def test_a_note_is_read_back_and_the_rest_is_what_it_was(file: Path) -> None:
    before, run = everything(file), read_run(file)
    first = add_note(file, "Lamp was cold.\n\tµ, 60 °C", author="M. Quillfeather", clock=Wall())
    second = add_note(file, "Second thoughts", author=None, clock=Wall(1_928_600_060_000_000_000))
    assert read_notes(file) == (first, second)
    assert (first.text, first.author) == ("Lamp was cold.\n\tµ, 60 °C", "M. Quillfeather")
    assert first.date == "2031-02-11T18:13:20.123456Z"
    assert everything(file) == before
    assert read_run(file).events == run.events
    assert nxcheck(file)[:2] == (0, 0)
    assert [path.name for path in file.parent.iterdir()] == ["run.h5"]
    with h5py.File(file) as opened:
        note = opened["entry/notebook/note_1"]
        assert note.attrs["NX_class"] == "NXnote"
        assert note["type"].asstr()[()] == "text/plain"


def test_notes_survive_a_file_made_again_from_its_journal(measured: cellar.Outcome, file: Path) -> None:
    added = [add_note(file, f"note {number}", author=None, clock=Wall()) for number in range(12)]
    before = everything(file)
    assert export(measured.journal, file).complete
    assert list(read_notes(file)) == added
    assert everything(file) == before
    assert nxcheck(file)[:2] == (0, 0)


def test_notes_written_at_once_are_all_there(file: Path) -> None:
    writers = [start("note", file, f"writer {number}", cwd=file.parent) for number in range(4)]
    assert [writer.wait(timeout=100) for writer in writers] == [0, 0, 0, 0]
    assert sorted(note.text for note in read_notes(file)) == [f"writer {number}" for number in range(4)]
    for writer in writers:
        writer.communicate()


@pytest.mark.parametrize(
    ("text", "said"),
    [
        ("", "empty"), (" \n", "empty"), ("x" * (LONGEST_TEXT + 1), "10001 characters"),
        ("bell \a", r"control character '\\x07' at place 6"), ("line\rback", "control character"),
        ("\x1b[31mred", "control character"), ("\udcff", "control character"), ("nul\0", "control character"),
    ],
)  # fmt: skip
def test_a_text_that_no_reader_could_show_is_refused(file: Path, text: str, said: str) -> None:
    kept = file.read_bytes()
    with pytest.raises(DataError, match=said):
        add_note(file, text, author=None, clock=Wall())
    assert file.read_bytes() == kept


@pytest.mark.parametrize("author", ["", "two\nlines", "x" * 201])
def test_an_author_is_one_short_line(file: Path, author: str) -> None:
    with pytest.raises(DataError, match="--author"):
        add_note(file, "text", author=author, clock=Wall())


def test_what_is_refused_says_what_would_be_taken(file: Path) -> None:
    """Lines and tabs are for the text, not for the author."""
    with pytest.raises(DataError, match="plain text, line ends and tabs excepted"):
        add_note(file, "bell \a", author=None, clock=Wall())
    with pytest.raises(DataError, match="plain text, and a single line"):
        add_note(file, "text", author="two\nlines", clock=Wall())


def test_the_longest_text_and_author_are_taken(file: Path) -> None:
    add_note(file, "x" * LONGEST_TEXT, author="y" * 200, clock=Wall())
    (note,) = read_notes(file)
    assert (len(note.text), note.author) == (LONGEST_TEXT, "y" * 200)


def test_a_run_that_is_not_over_takes_no_note(measured: cellar.Outcome, tmp_path: Path) -> None:
    records = measured.records[:-1]
    with Journal.create(tmp_path / "part.journal", records[0].body, threaded=False) as journal:
        for record in records[1:]:
            journal.append(record.kind, record.body)
    out = tmp_path / "part.h5"
    export(tmp_path / "part.journal", out)
    with pytest.raises(DataError, match="not over"):
        add_note(out, "text", author=None, clock=Wall())


def test_what_is_no_run_file_takes_no_note(tmp_path: Path) -> None:
    letter = tmp_path / "letter.h5"
    letter.write_text("dear colleague")
    with h5py.File(tmp_path / "other.h5", "w") as other:
        other["x"] = 1
    for path, said in (
        (letter, "not an HDF5"),
        (tmp_path / "other.h5", "not a run file"),
        (tmp_path, "direct"),
    ):
        with pytest.raises(DataError, match=said):
            add_note(path, "text", author=None, clock=Wall())
    assert letter.read_text() == "dear colleague"


def test_a_disk_that_fails_leaves_the_old_file(file: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    kept = file.read_bytes()

    def full(*_: Any) -> None:
        raise OSError(28, "No space left on device")

    monkeypatch.setattr(os, "fsync", full)
    with pytest.raises(DataError, match="No space left"):
        add_note(file, "text", author=None, clock=Wall())
    assert file.read_bytes() == kept
    assert [path.name for path in file.parent.iterdir()] == ["run.h5"]


@pytest.mark.parametrize(
    "place", ["entry/scan/counts", "entry/events/body", "entry/config/seed", "entry/data/rate"]
)
def test_a_value_that_changed_under_way_is_found(
    file: Path, monkeypatch: pytest.MonkeyPatch, place: str
) -> None:
    kept = file.read_bytes()

    def bend(data: bytes, note: Any) -> bytes:
        bent = file.with_name("bent")
        bent.write_bytes(image_with(data, note))
        with h5py.File(bent, "r+") as opened:
            where = opened[place]
            if where.shape == ():
                where[()] = where[()] + 1
            else:
                where[1] = "{}" if where.dtype == object else where[1] + 1
        return bent.read_bytes()

    monkeypatch.setattr("daq.export_notes.image_with", bend)
    with pytest.raises(DataError, match=place):
        add_note(file, "text", author=None, clock=Wall())
    assert file.read_bytes() == kept


def test_an_attribute_counts_as_a_difference(file: Path, tmp_path: Path) -> None:
    other = Path(shutil.copy(file, tmp_path / "other.h5"))
    assert first_difference(file, other) is None
    with h5py.File(other, "r+") as opened:
        opened["entry/data/rate"].attrs["units"] = "1/h"
    assert first_difference(file, other) == "entry/data/rate"


def test_the_command_finds_a_run_by_its_identity(measured: cellar.Outcome, tmp_path: Path) -> None:
    shutil.copy(measured.file, tmp_path)
    run_id = measured.summary["run_id"]
    done = gratingd("note", run_id, "by its name", "--author", "night shift", "--out", ".", cwd=tmp_path)
    assert (done.returncode, done.stderr) == (0, "")
    analysed = gratingd("analyse", "--json", f"{run_id}.h5", cwd=tmp_path)
    note = json.loads(analysed.stdout)["runs"][0]["notes"][0]
    assert (note["author"], note["text"]) == ("night shift", "by its name")
    assert json.loads(analysed.stdout)["runs"][0]["reproduces"] == "bit-equal"
    assert "no such run" in complaint(gratingd("note", "20310211T180000Z-none", "text", cwd=tmp_path), 2)
    assert "empty" in complaint(gratingd("note", f"{run_id}.h5", " ", cwd=tmp_path), 2)
