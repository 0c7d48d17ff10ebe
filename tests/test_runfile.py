"""Run files read back: what is no run file is refused with a sentence that helps."""

from __future__ import annotations

from pathlib import Path
from typing import Any

import h5py
import numpy as np
import pytest

from daq.export import export
from daq.journal import Journal, encode, read_journal
from daq.runfile import read_run
from drivers.errors import DataError

TEXT = {"name": "x", "slug": "x", "text": "", "sha256": "0" * 64}
HEAD: dict[str, Any] = {
    "format": 2, "run_id": "r", "night": None, "night_file": None, "ordinal": 1, "attempt": 1, "seed": 1,
    "created_utc_ns": 0, "operator": None, "target": TEXT, "bench": TEXT, "spectrum": None, "software": {},
    "question": {"feature": {"wavelength_nm": 500.0}},
    "plan": {
        "mount": {"kind": "table", "wavelengths": [500.0, 501.0], "medium": "vacuum"},
        "medium": "vacuum", "reference": None, "setup": {},
        "detector": {"kind": "counter", "dead_time_ns": 0.0, "dead_time_uncertainty_ns": 0.0},
    },
}  # fmt: skip
POINT: dict[str, Any] = {
    "at_ns": 1, "end_ns": 2, "sweep": 0, "index": 0, "group": 0, "light": True, "steps": 1,
    "reported_steps": 1, "counts": 2**40, "gate_ns": 10**8, "gates": 1, "flags": [], "complete": True,
}  # fmt: skip


@pytest.fixture
def run(tmp_path: Path) -> Path:
    session = {"number": 1, "utc_ns": 0, "monotonic_ns": 0, "devices": True, "reason": "start"}
    with Journal.create(tmp_path / "run.journal", HEAD, threaded=False) as journal:
        journal.append("session", session)
        for number in range(5000):
            ambient = {"temperature_c": 0.1 + number / 7, "pressure_pa": 1e5 / 3, "humidity_percent": None}
            more = {"ambient": ambient} if number % 2 else {"flags": ["late", "overload"]}
            journal.append("point", POINT | {"index": number, "light": number % 5 > 0} | more)
            if number % 1000 == 0:
                journal.append("wish", {"at_ns": 3, "wish": "pause", "reason": "", "source": "bus"})
    export(tmp_path / "run.journal", tmp_path / "run.h5")
    return tmp_path / "run.h5"


def test_a_journal_in_place_of_its_file_is_told(run: Path) -> None:
    """They lie side by side and have one name but for the ending."""
    with pytest.raises(DataError, match=r"is a journal; its run file \(.h5\) is wanted"):
        read_run(run.with_suffix(".journal"))


def test_a_run_read_back_is_its_journal(run: Path) -> None:
    data = read_run(run)
    journal = list(read_journal(run.with_suffix(".journal")))
    assert [(r.seq, r.kind, encode(r.body)) for r in data.records()] == [
        (r.seq, r.kind, encode(r.body)) for r in journal
    ]
    assert data.head == HEAD
    assert data.conclusion is None
    assert not data.complete
    points = [record.body for record in journal if record.kind == "point"]
    assert data.points["index"].tolist() == list(range(5000))
    assert data.points["light"].dtype == np.bool_
    assert data.points["light"].tolist() == [p["light"] for p in points]
    assert data.points["counts"].tolist() == [2**40] * 5000
    assert data.points["flags"][:2].tolist() == ["late,overload", ""]
    assert data.points["temperature_c"][1] == 0.1 + 1 / 7
    assert np.isnan(data.points["temperature_c"][0])
    assert [e.kind for e in data.events] == ["head", "session", *["wish"] * 5]


def change(path: Path, place: str, value: Any) -> None:
    with h5py.File(path, "r+") as file:
        if value is None:
            del file[place]
        else:
            file[place][...] = value


@pytest.mark.parametrize(
    ("place", "value", "says"),
    [
        ("entry/config/format", 3, "newer gratingd: format 3, this one reads 2"),
        ("entry/config/format", 1, "older gratingd: format 1, this one reads 2"),
        ("entry/config/format", 0, "damaged run file"),
        ("entry/config/format", None, "not a run file made by gratingd"),
        ("entry/scan/gates", None, "damaged run file"),
        ("entry/events", None, "damaged run file"),
        ("entry/scan/seq", 5, "records are missing"),
    ],
)
def test_a_file_that_is_not_whole_is_refused(run: Path, place: str, value: Any, says: str) -> None:
    change(run, place, value)
    with pytest.raises(DataError, match=says) as caught:
        read_run(run)
    assert str(run) in str(caught.value)


@pytest.mark.parametrize("part", [0.0001, 0.3, 0.9, 0.999])
def test_a_truncated_file_is_refused(run: Path, part: float) -> None:
    whole = run.read_bytes()
    run.write_bytes(whole[: int(part * len(whole))])
    with pytest.raises(DataError, match=r"truncated or damaged|not an HDF5 file"):
        read_run(run)


def test_other_things_are_refused(tmp_path: Path) -> None:
    text, other = tmp_path / "text.h5", tmp_path / "other.h5"
    text.write_text("wavelength_air_nm,counts\n")
    with h5py.File(other, "w") as file:
        file["counts"] = [1, 2]
    for path, says in (
        (tmp_path, "is a directory"),
        (tmp_path / "missing.h5", "no such file"),
        (text, "not an HDF5 file"),
        (other, "not a run file made by gratingd"),
    ):
        with pytest.raises(DataError, match=says):
            read_run(path)
