"""Files that cannot be used: each is refused in a sentence that names it and helps; nothing is written."""

from __future__ import annotations

import json
import shutil
import sqlite3
from collections.abc import Callable
from pathlib import Path
from typing import Any

import h5py
import numpy as np
import pytest
from cellar import run
from click.testing import CliRunner, Result
from commandline import complaint, gratingd

from daq.cli import Exit
from daq.cli import gratingd as commands

AIR = "wavelength_air_nm,counts\n"
ROWS = [f"{313.0 + 0.01 * k:.2f},{20 + 400 * (k == 15) + k % 7}" for k in range(30)]
GOOD = AIR + "\n".join(ROWS) + "\n"


def with_row(number: int, row: str) -> str:
    """The good spectrum with one row of data, counted from 1, put in another's place."""
    rows = list(ROWS)
    rows[number - 1] = row
    return AIR + "\n".join(rows) + "\n"


BAD_SPECTRA: dict[str, tuple[str | bytes, list[str]]] = {
    "nan": (with_row(5, "313.04,nan"), ["line 6", "counts = nan", "leave out"]),
    "infinite": (with_row(5, "313.04,inf"), ["line 6", "counts = inf", "finite"]),
    "overflow": (with_row(5, "313.04,1e999"), ["line 6", "counts = 1e999", "finite"]),
    "infinite wavelength": (with_row(30, "inf,4"), ["line 31", "wavelength_air_nm = inf"]),
    "negative": (with_row(5, "313.04,-400"), ["line 6", "counts = -400", "allowed"]),
    "unsorted": (with_row(5, "313.20,3"), ["line 7", "ascending"]),
    "descending": (AIR + "\n".join(reversed(ROWS)) + "\n", ["line 3", "ascending"]),
    "duplicate": (with_row(5, "313.03,3"), ["line 6", "comes twice", "once"]),
    "three rows": (AIR + "\n".join(ROWS[:3]) + "\n", ["3 rows", "8 or more"]),
    "header only": (AIR, ["0 rows", "8 or more"]),
    "no header": ("\n".join(ROWS) + "\n", ["line 1", "must name the columns"]),
    "unknown column": (GOOD.replace("counts", "intensity"), ["'intensity'", "counts"]),
    "no counts": ("wavelength_air_nm\n313\n", ["'counts' is missing"]),
    "no wavelength": (GOOD.replace("wavelength_air_nm", "pixel"), ["no column of wavelengths"]),
    "both media": (
        GOOD.replace("wavelength_air_nm,", "wavelength_air_nm,wavelength_vacuum_nm,"),
        ["both wavelength_air_nm and wavelength_vacuum_nm", "one of the two"],
    ),
    "decimal commas": (
        "\n".join(r.replace(".", ",") for r in GOOD.splitlines()),
        ["line 2", "decimal comma"],
    ),
    "semicolons": (GOOD.replace(",", ";"), ["semicolons", "commas between columns"]),
    "tabs": (GOOD.replace(",", "\t"), ["tabs", "commas between columns"]),
    "a word": (with_row(9, "313.08,many"), ["line 10", "'many'", "not a number"]),
    "a hole": (with_row(9, "313.08,"), ["line 10", "counts", "nothing"]),
    "micrometres": (GOOD.replace("\n313.", "\n0.313"), ["line 2", "micrometres"]),
    "angstrom": (GOOD.replace("\n313.", "\n313000."), ["line 2", "angstrom"]),
    "zero sigma": (
        "wavelength_air_nm,counts,sigma\n" + "\n".join(f"{row},{int(k != 4)}" for k, row in enumerate(ROWS)),
        ["line 6", "sigma = 0.0", "positive"],
    ),
    "empty": ("", ["is empty", "wavelength_air_nm"]),
    "blank": ("\n\n  \n", ["is empty"]),
    "binary": (bytes(range(256)) * 40, ["line 2", "UTF-8"]),  # byte 10 ends line 1
    "utf-16": (GOOD.encode("utf-16"), ["UTF-8"]),
    "nul bytes": (b"\0" * 4096, ["line 1"]),
}


def analyse(*arguments: str | Path) -> Result:
    return CliRunner().invoke(commands, ["analyse", *map(str, arguments)])


def refused(result: Result, file: Path, said: list[str]) -> None:
    assert result.exit_code == Exit.MISTAKE, result.output
    assert isinstance(result.exception, SystemExit), "no traceback"
    assert result.stdout == ""
    assert result.stderr.startswith(f"gratingd: {file}")
    assert len(result.stderr.splitlines()) == 1
    for words in said:
        assert words in result.stderr


@pytest.mark.parametrize("as_json", [False, True], ids=["plain", "json"])
@pytest.mark.parametrize(("content", "said"), BAD_SPECTRA.values(), ids=list(BAD_SPECTRA))
def test_a_spectrum_that_cannot_be_used(
    content: str | bytes, said: list[str], as_json: bool, tmp_path: Path
) -> None:
    file = tmp_path / "lamp.csv"
    file.write_bytes(content if isinstance(content, bytes) else content.encode())
    refused(analyse(file, *["--json"] * as_json), file, said)
    assert list(tmp_path.iterdir()) == [file]


def test_the_good_spectrum_these_were_made_from_is_used(tmp_path: Path) -> None:
    file = tmp_path / "lamp.csv"
    file.write_text(GOOD)
    result = analyse(file, "--json")
    assert result.exit_code == 0, result.output
    assert json.loads(result.stdout)["runs"][0]["points"] == 30


def test_places_that_are_no_file(tmp_path: Path) -> None:
    refused(analyse(tmp_path), tmp_path, ["is a folder", "give a CSV file"])
    refused(analyse(tmp_path / "none.csv"), tmp_path / "none.csv", ["no such file"])
    refused(analyse(tmp_path / "none.h5"), tmp_path / "none.h5", ["no such file"])
    (tmp_path / "folder.h5").mkdir()
    refused(analyse(tmp_path / "folder.h5"), tmp_path / "folder.h5", ["is a directory"])
    refused(analyse("/dev/null"), Path("/dev/null"), ["not a regular file"])


@pytest.mark.parametrize(
    "options",
    [*(["--line", given] for given in ("312.99", "313.30", "500", "-3", "nan", "inf"))]
    + [["--line", "313.15", "--known-line", given] for given in ("500", "nan", "-inf")]
    + [["--target", "hg-546-single"]],
    ids=" ".join,
)
def test_a_line_that_is_not_in_the_spectrum(options: list[str], tmp_path: Path) -> None:
    file = tmp_path / "lamp.csv"
    file.write_text(GOOD)
    refused(analyse(file, *options), file, ["the file covers 313 to 313.29 nm in air"])
    assert analyse(file, "--line", "313.15", "--known-line", "313.33").exit_code == 0


@pytest.mark.parametrize("level", [0, 1, 1_000_000])
def test_a_spectrum_without_a_feature_is_undecided_or_refused_never_a_pair(
    level: int, tmp_path: Path
) -> None:
    file = tmp_path / "lamp.csv"
    file.write_text(AIR + "".join(f"{313 + k / 100},{level}\n" for k in range(30)))
    result = analyse(file, "--json")
    assert result.exception is None or isinstance(result.exception, SystemExit), result.exception
    if result.exit_code == 0:
        assert json.loads(result.stdout)["runs"][0]["verdict"] == "undecided"
    else:
        refused(result, file, [])


# ---- run files ------------------------------------------------------------------------------------------


@pytest.fixture(scope="module")
def whole(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """The file of a short run; its journal lies beside it."""
    return run(tmp_path_factory.mktemp("whole")).file


def cut(file: Path) -> None:
    file.write_bytes(file.read_bytes()[: file.stat().st_size // 2])


def cut_to_its_signature(file: Path) -> None:
    file.write_bytes(file.read_bytes()[:8])


def somebody_elses(file: Path) -> None:
    with h5py.File(file, "w") as other:
        other["spectrum"] = np.arange(10.0)


def no_hdf5(file: Path) -> None:
    file.write_text(GOOD)


def empty(file: Path) -> None:
    file.write_bytes(b"")


def newer(file: Path) -> None:
    with h5py.File(file, "r+") as run:
        run["entry/config/format"][...] = 3


def format_zero(file: Path) -> None:
    with h5py.File(file, "r+") as run:
        run["entry/config/format"][...] = 0


def without_its_scan(file: Path) -> None:
    with h5py.File(file, "r+") as run:
        del run["entry/scan"]


def without_its_events(file: Path) -> None:
    with h5py.File(file, "r+") as run:
        del run["entry/events"]


def with_a_record_less(file: Path) -> None:
    with h5py.File(file, "r+") as run:
        seq = run["entry/scan/seq"]
        seq[...] = np.where(seq[...] == seq[3], seq[4], seq[...])


def with_a_head_that_is_no_json(file: Path) -> None:
    with h5py.File(file, "r+") as run:
        body = run["entry/events/body"]
        body[0] = "{"


def with_a_head_without_a_plan(file: Path) -> None:
    edit_head(file, lambda head: head.pop("plan"))


def with_a_plan_that_is_no_plan(file: Path) -> None:
    edit_head(file, lambda head: head["plan"]["mount"].update(groove_density_per_mm=-1.0))


def with_a_question_of_another_kind(file: Path) -> None:
    edit_head(file, lambda head: head["question"].update(false_alarm="often"))


def with_a_conclusion_without_a_look(file: Path) -> None:
    with h5py.File(file, "r+") as run:
        body = run["entry/events/body"]
        conclusion = json.loads(body.asstr()[-1])
        del conclusion["look"]
        body[-1] = json.dumps(conclusion)


def edit_head(file: Path, change: Callable[[dict[str, Any]], object]) -> None:
    with h5py.File(file, "r+") as run:
        body = run["entry/events/body"]
        head = json.loads(body.asstr()[0])
        change(head)
        body[0] = json.dumps(head)


@pytest.mark.parametrize(
    ("damage", "said"),
    [
        (cut, ["truncated or damaged run file"]),
        (cut_to_its_signature, ["truncated or damaged run file"]),
        (somebody_elses, ["is HDF5, but not a run file made by gratingd"]),
        (no_hdf5, ["is not an HDF5 file"]),
        (empty, ["is not an HDF5 file"]),
        (newer, ["written by a newer gratingd: format 3, this one reads 2", "use a newer gratingd"]),
        (format_zero, ["damaged"]),
        (without_its_scan, ["damaged"]),
        (without_its_events, ["damaged"]),
        (with_a_record_less, ["damaged", "records are missing"]),
        (with_a_head_that_is_no_json, ["damaged"]),
        (with_a_head_without_a_plan, ["damaged"]),
        (with_a_plan_that_is_no_plan, ["damaged"]),
        (with_a_question_of_another_kind, ["damaged"]),
        (with_a_conclusion_without_a_look, ["damaged"]),
    ],
    ids=lambda value: value.__name__.replace("_", " ") if callable(value) else "",
)
def test_a_run_file_that_cannot_be_used(
    damage: Callable[[Path], None], said: list[str], whole: Path, tmp_path: Path
) -> None:
    file = tmp_path / "run.h5"
    shutil.copy(whole, file)
    damage(file)
    refused(analyse(file, "--json"), file, said)
    assert list(tmp_path.iterdir()) == [file]


def test_a_run_file_cut_anywhere_is_refused(whole: Path, tmp_path: Path) -> None:
    content = whole.read_bytes()
    file = tmp_path / "run.h5"
    for twentieths in range(1, 20):
        file.write_bytes(content[: len(content) * twentieths // 20])
        refused(analyse(file, "--json"), file, ["truncated or damaged run file", "gratingd recover"])
    file.write_bytes(content[:-1])
    refused(analyse(file, "--json"), file, ["truncated or damaged run file"])


def test_a_run_file_by_another_name_is_still_taken_for_one(whole: Path, tmp_path: Path) -> None:
    file = tmp_path / "run.csv"
    file.write_bytes(whole.read_bytes()[:-1])
    refused(analyse(file, "--json"), file, ["truncated or damaged run file"])


# ---- journals -------------------------------------------------------------------------------------------


def test_a_journal_copied_without_its_log_is_not_called_rubbish(tmp_path: Path) -> None:
    """What the main file of a journal held when its head was still in the log: an identity and no table."""
    journal = tmp_path / "run.journal"
    database = sqlite3.connect(journal)
    database.execute(f"PRAGMA application_id={0x47525444}")
    database.close()
    before = journal.read_bytes()
    for resume in ([], ["--resume"]):
        told = complaint(gratingd("recover", ".", *resume, cwd=tmp_path), Exit.BROKE_OFF)
        assert "run.journal: holds no records" in told
        assert "'run.journal-wal'" in told
        assert "delete" not in told
    assert journal.read_bytes() == before


def journal_of_a_newer_format(whole: Path, folder: Path) -> Path:
    journal = folder / "run.journal"
    shutil.copy(whole.with_suffix(".journal"), journal)
    with sqlite3.connect(journal) as database:
        (text,) = database.execute("SELECT body FROM rec WHERE seq = 1").fetchone()
        newer = json.dumps(json.loads(text) | {"format": 3})
        database.execute("UPDATE rec SET body = ? WHERE seq = 1", (newer,))
    database.close()
    return journal


def test_a_journal_of_a_newer_format(whole: Path, tmp_path: Path) -> None:
    journal = journal_of_a_newer_format(whole, tmp_path)
    before = journal.read_bytes()
    for resume in ([], ["--resume"]):
        done = gratingd("recover", ".", "--json", *resume, cwd=tmp_path)
        assert done.returncode == Exit.BROKE_OFF
        told = "run.journal: written by a newer gratingd: format 3, this one reads 2; use a newer gratingd"
        assert json.loads(done.stdout) == {"runs": [], "not_started": [], "problems": [told]}
        assert done.stderr == f"gratingd: {told}\n"
    assert journal.read_bytes() == before
    assert not (tmp_path / "run.h5").exists()


def test_a_journal_with_a_hole(whole: Path, tmp_path: Path) -> None:
    journal = tmp_path / "run.journal"
    shutil.copy(whole.with_suffix(".journal"), journal)
    with sqlite3.connect(journal) as database:
        database.execute("DELETE FROM rec WHERE seq = 20")
    database.close()
    done = gratingd("recover", ".", cwd=tmp_path)
    assert "record 20 is missing" in complaint(done, Exit.BROKE_OFF)
    assert not (tmp_path / "run.h5").exists()


def test_a_journal_whose_records_cannot_follow_each_other(whole: Path, tmp_path: Path) -> None:
    """Written by a defect or by hand: a point before anything was prepared."""
    journal = tmp_path / "run.journal"
    shutil.copy(whole.with_suffix(".journal"), journal)
    with sqlite3.connect(journal) as database:
        database.execute("DELETE FROM rec WHERE kind = 'conclusion'")
        (point,) = database.execute("SELECT body FROM rec WHERE kind = 'point'").fetchone()
        database.execute("UPDATE rec SET kind = 'point', body = ? WHERE seq = 3", (point,))
    database.close()
    done = gratingd("recover", ".", cwd=tmp_path)
    told = complaint(done, Exit.BROKE_OFF)
    assert "run.journal: " in told
    assert not (tmp_path / "run.h5").exists()


def test_a_file_of_somebody_elses_is_not_replaced(whole: Path, tmp_path: Path) -> None:
    shutil.copy(whole.with_suffix(".journal"), tmp_path / "run.journal")
    (tmp_path / "run.h5").write_text("my thesis\n")
    done = gratingd("recover", ".", "--json", cwd=tmp_path)
    assert done.returncode == Exit.BROKE_OFF
    (recovered,) = json.loads(done.stdout)["runs"]
    assert recovered["file"] is None
    assert "run.h5" in recovered["problem"]
    assert "move it away" in done.stderr
    assert (tmp_path / "run.h5").read_text() == "my thesis\n"
