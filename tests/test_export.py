"""Run files: the whole journal, bit for bit, in a layout that others can read."""

from __future__ import annotations

import json
import os
import re
import shutil
import signal
import subprocess
import sys
from pathlib import Path
from typing import Any

import h5py
import numpy as np
import pytest

import daq.export
from daq.export import Exported, ExportError, export
from daq.export_tree import unit_of
from daq.journal import Journal, encode, read_journal
from daq.runfile import read_run

ROOT = Path(__file__).resolve().parent.parent
START_NS = 1_928_685_600_000_000_000
BENCH = """
name = "b"
[optics]
mount = "plane"
groove_density_per_mm = 1200.0
included_angle_deg = 22.0
order = 1
entrance_slit_um = 20.0
exit_slit_um = 20.0
[drive]
lowest_steps = 0
highest_steps = 900
[time]
start_utc = 2031-02-11T18:00:00Z
"""
LOOK: dict[str, Any] = {
    "number": 1, "verdict": "pair", "separation_nm": 0.029, "ratio_u": None, "log_e_pair": 7.5,
    "pair": {"names": ["A", "c"], "values": [1.5, 313.1], "covariance": [[1.0, 0.5], [0.5, 2.0]]},
    "exclusion": [{"separation_nm": 0.1, "ratio_limit": None}, {"separation_nm": 0.2, "ratio_limit": 0.1}],
    "flags": [], "evidence": ["two lines describe the data"],
}  # fmt: skip


def named(name: str) -> dict[str, str]:
    return {"name": name, "slug": name, "text": BENCH, "sha256": "0" * 64}


def head(**other: Any) -> dict[str, Any]:
    mount = {"kind": "table", "wavelengths": [313.0 - 0.002 * k for k in range(50)][::-1], "medium": "air"}
    return {
        "format": 2, "run_id": "20310211T180000Z-01-hg-1", "night": "N", "night_file": named("night"),
        "ordinal": 1, "attempt": 1, "created_utc_ns": START_NS, "seed": 7, "operator": "day shift",
        "target": named("Hg 313 nm pair"), "bench": named("bench 3") | {"path": "bench.toml"},
        "spectrum": None, "software": {"gratingd": "0.1.0", "numpy": "2.0"},
        "confirmed": None, "specimen_serial": None,
        "plan": {
            "mount": mount, "medium": "air", "reference": None, "setup": {"order": 1},
            "detector": {"kind": "counter", "dead_time_ns": 1000.0, "dead_time_uncertainty_ns": 10.0},
        },
        "question": {"feature": {"wavelength_nm": 313.155}},
    } | other  # fmt: skip


def point(number: int) -> dict[str, Any]:
    made: dict[str, Any] = {
        "at_ns": number * 10**9, "end_ns": number * 10**9 + 200_000_123, "sweep": number // 25,
        "index": number % 25, "group": number // 25 % 2, "light": number % 25 != 0,
        "steps": 2 * (number % 25), "reported_steps": 2 * (number % 25) + number % 2,
        "counts": (number * 7919) % 301, "gate_ns": 200_000_000 + number % 3, "gates": 1,
        "flags": ["late", "saturated"][: number % 11 // 9], "complete": number % 10 != 3,
    }  # fmt: skip
    if number % 3:
        made["ambient"] = {
            "temperature_c": 20.0 + 0.1 * number, "pressure_pa": 101_325.0,
            "humidity_percent": None if number % 2 else 40.1,
        }  # fmt: skip
    return made


def records(points: int) -> list[tuple[str, dict[str, Any]]]:
    """Everything a journal can hold, `points` points among it."""
    device = {"maker": "Tallow & Reed", "model": "D1", "serial": "7", "firmware": ""}
    identities = dict.fromkeys(("drive", "detector", "shutter", "ambient"), device)
    air = {"temperature_c": 20.5, "pressure_pa": 101_000.0, "humidity_percent": 41.0}
    session = {"number": 1, "utc_ns": START_NS, "monotonic_ns": 5, "devices": True, "reason": "start"}
    summary = {
        "target": "Hg 313 nm pair", "verdict": "pair", "separation_pm": 29.0, "ratio": None,
        "points": points, "file": "run.h5", "flags": [], "evidence": ["two lines"],
    }  # fmt: skip
    made: list[tuple[str, dict[str, Any]]] = [
        ("session", session),
        ("prepared", {"at_ns": 3, "identities": identities, "home_steps": 0, "ambient": air}),
    ]
    for number in range(points):
        made.append(("point", point(number)))
        if number == points // 2:
            made += [
                ("wish", {"at_ns": 4, "wish": "pause", "reason": "tea — µ\u0000", "source": "terminal"}),
                ("halted", {"at_ns": 4, "point": None}),
                ("fault", {"at_ns": 5, "device": "drive", "error": "LinkError", "text": "", "repeat": True}),
                ("session", session | {"number": 2, "utc_ns": START_NS + 10**12, "reason": "resume"}),
                ("look", {"at_ns": 6, "horizon": number, "look": LOOK}),
            ]
    made += [
        ("safe", {"at_ns": 10**11, "shutter": True, "drive": True, "problems": []}),
        (
            "conclusion",
            {
                "at_ns": 10**11, "stop_reason": "goal-reached", "look": LOOK, "separation": {"air_pm": 29.0},
                "bench_time_ns": 1, "light_ns": 1, "points": points, "summary": summary,
            },
        ),
    ]  # fmt: skip
    return made


def journal_of(path: Path, rows: list[tuple[str, dict[str, Any]]], **other: Any) -> Path:
    with Journal.create(path, head(**other), threaded=False) as journal:
        for kind, body in rows:
            journal.append(kind, body)
    return path


def flat(look: Any, head: Any, snapshot: Any, *, kind: str) -> np.ndarray[Any, np.dtype[np.float64]]:
    return np.full(len(snapshot.rows), 3.0 if kind == "single" else 5.0)


def looks_like(file: Path, journal: Path) -> bool:
    ours = [(r.seq, r.kind, encode(r.body)) for r in read_run(file).records()]
    return ours == [(r.seq, r.kind, encode(r.body)) for r in read_journal(journal)]


def child(journal: Path, out: Path, *, code: str = "") -> subprocess.CompletedProcess[str]:
    command = [sys.executable, "-P", "-m", "daq.export", str(journal), str(out)]
    if code:
        command = [sys.executable, "-c", code, str(journal), str(out)]
    environment = os.environ | {"PYTHONPATH": str(ROOT)}
    return subprocess.run(command, env=environment, capture_output=True, text=True, check=False)


@pytest.mark.parametrize("points", [0, 60, 9000])
def test_the_file_is_the_journal_and_the_same_bytes_each_time(tmp_path: Path, points: int) -> None:
    journal = journal_of(tmp_path / "run.journal", records(points))
    done = export(journal, tmp_path / "run.h5", curve=flat)
    assert done == Exported(tmp_path / "run.h5", True, points + (10 if points else 5), points)
    assert looks_like(tmp_path / "run.h5", journal)
    export(journal, tmp_path / "again.h5", curve=flat)
    assert (tmp_path / "run.h5").read_bytes() == (tmp_path / "again.h5").read_bytes()
    assert sorted(p.name for p in tmp_path.iterdir()) == ["again.h5", "run.h5", "run.journal"]


def test_every_prefix_exports(tmp_path: Path) -> None:
    rows = records(26)
    for length in range(len(rows) + 1):
        journal = journal_of(tmp_path / f"{length}.journal", rows[:length])
        done = export(journal, tmp_path / "run.h5", curve=flat)
        assert (done.records, done.complete) == (length + 1, length == len(rows))
        assert looks_like(tmp_path / "run.h5", journal)


def test_a_journal_that_is_still_written_exports_up_to_now(tmp_path: Path) -> None:
    with Journal.create(tmp_path / "run.journal", head(), threaded=True) as journal:
        for kind, body in records(300)[:200]:
            seq = journal.append(kind, body)
        while journal.committed_seq < seq:
            pass
        done = export(journal.path, tmp_path / "run.h5", curve=flat)
        assert (done.records, done.complete) == (201, False)
        assert looks_like(tmp_path / "run.h5", journal.path)


def nxcheck(file: Path) -> tuple[int, int, str]:
    """Warnings and errors of the NeXus definitions' own checker (package nexusformat, NIAC definitions)."""
    tool = shutil.which("nxcheck", path=str(Path(sys.executable).parent)) or shutil.which("nxcheck")
    assert tool is not None, "nexusformat is installed with the test extra"
    ran = subprocess.run([tool, str(file)], capture_output=True, text=True, check=True)
    text = re.sub(r"\x1b\[[0-9;]*m", "", ran.stdout + ran.stderr)
    counted = [int(n) for n in re.findall(r"Total number of (?:warnings|errors): (\d+)", text)]
    assert len(counted) == 2, text
    return counted[0], counted[1], text


@pytest.mark.parametrize("kept", [0, 30, None])
def test_nexus_has_no_complaint(tmp_path: Path, kept: int | None) -> None:
    journal = journal_of(tmp_path / "run.journal", records(60)[:kept])
    export(journal, tmp_path / "run.h5", curve=flat)
    warnings, errors, text = nxcheck(tmp_path / "run.h5")
    assert (warnings, errors) == (0, 0), text
    with h5py.File(tmp_path / "run.h5", "r+") as file:
        file["entry/instrument"].attrs["NX_class"] = "NXspectrometer"
    assert nxcheck(tmp_path / "run.h5")[1] > 0, "the checker does look"


def test_the_plot_holds_the_summed_good_light(tmp_path: Path) -> None:
    export(journal_of(tmp_path / "run.journal", records(120)), tmp_path / "run.h5", curve=flat)
    points = [p for p in map(point, range(120)) if p["light"] and not p["flags"]]
    with h5py.File(tmp_path / "run.h5") as file:
        data = file["entry/data"]
        wavelength_nm, steps, group = data["wavelength"][:], data["steps"][:], data["group"][:]
        assert np.all(np.diff(wavelength_nm) >= 0)
        assert set(zip(steps, group, strict=True)) == {(p["steps"], p["group"]) for p in points}
        for row in range(len(steps)):
            here = [p for p in points if (p["steps"], p["group"]) == (steps[row], group[row])]
            counts, gate_s = sum(p["counts"] for p in here), 1e-9 * sum(p["gate_ns"] for p in here)
            assert data["counts"][row] == counts
            # non-paralysable dead time, textbook: true rate = n / (T - n tau), here tau = 1 us
            assert data["rate"][row] == pytest.approx(counts / (gate_s - counts * 1e-6), rel=1e-12)
        dark = [p for p in map(point, range(120)) if not p["light"] and not p["flags"]]
        assert data["dark_counts"][()] == sum(p["counts"] for p in dark)
        assert np.array_equal(data["model"][:], data["model_pair"][:])
        assert data["model_single"][0] == 3.0
        assert np.allclose(data["residuals"][:], data["rate"][:] - 5.0)
        assert file["entry/analysis/look/pair/covariance"][:].tolist() == [[1.0, 0.5], [0.5, 2.0]]
        assert file["entry/analysis/look/separation_nm"].attrs["units"] == "nm"
        assert file["entry/analysis/looks/log_e_pair"][:].tolist() == [7.5]
        assert file["entry/config/bench"].asstr()[()] == BENCH


@pytest.mark.parametrize("curve", [LOOK["exclusion"], []])
def test_the_exclusion_curve_says_what_it_is(tmp_path: Path, curve: list[Any]) -> None:
    """It is there where the look has one: a look without a line, or beside a pair, has none."""
    rows = records(26)
    kind, body = rows[-1]
    rows[-1] = (kind, body | {"look": LOOK | {"exclusion": curve, "number": 3}})
    export(journal_of(tmp_path / "run.journal", rows), tmp_path / "run.h5", curve=flat)
    with h5py.File(tmp_path / "run.h5") as file:
        look = file["entry/analysis/look"]
        assert ("exclusion" in look) == bool(curve)
        if not curve:
            return
        curve = look["exclusion"]
        assert (curve.attrs["confidence"], curve.attrs["look"]) == (0.95, 3)
        assert "one-sided" in curve.attrs["bound"]
        assert "fixed-sample" in curve.attrs["method"]
        assert "repeated looks" in curve.attrs["method"]
        assert curve["separation_nm"][:].tolist() == [0.1, 0.2]
        assert curve["separation_nm"].attrs["units"] == "nm"
        limit = curve["ratio_limit"]
        assert np.isnan(limit[0])
        assert limit[1] == 0.1
        assert limit.attrs["units"] == "1"
        assert "NaN: nothing below 1 is excluded" in limit.attrs["long_name"]
    assert nxcheck(tmp_path / "run.h5")[:2] == (0, 0)


def test_the_published_dead_time_example(tmp_path: Path) -> None:
    """Dead time 1 us, true rate 1e5 /s: 90 909.09 /s registered (textbook formula)."""
    one = point(1) | {"counts": 90_909, "gate_ns": 10**9, "flags": []}
    export(journal_of(tmp_path / "j", [records(0)[0], ("point", one)]), tmp_path / "run.h5")
    with h5py.File(tmp_path / "run.h5") as file:
        assert file["entry/data/rate"][0] == pytest.approx(1e5, rel=2e-6)


def test_a_complete_file_is_replaced_by_nothing_less(tmp_path: Path) -> None:
    rows, out = records(26), tmp_path / "run.h5"
    whole = journal_of(tmp_path / "whole", rows)
    part = journal_of(tmp_path / "part", rows[:-1])
    shorter = journal_of(tmp_path / "shorter", rows[:5] + rows[-1:])
    other = journal_of(tmp_path / "other", rows, run_id="20310211T180000Z-02-hg-1")
    export(part, out, curve=flat)
    with pytest.raises(ExportError, match="no conclusion"):
        export(part, out, curve=flat, complete=True)
    export(whole, out, curve=flat)
    kept = out.read_bytes()
    for journal in (part, shorter, other):
        with pytest.raises(ExportError, match=r"complete file of run .* is not replaced"):
            export(journal, out, curve=flat)
        assert out.read_bytes() == kept
    export(whole, out, curve=flat)
    assert out.read_bytes() == kept
    foreign = tmp_path / "letter.h5"
    foreign.write_text("dear colleague")
    with pytest.raises(ExportError, match="move it away"):
        export(whole, foreign, curve=flat)
    assert foreign.read_text() == "dear colleague"
    assert not list(tmp_path.glob("*.tmp-*"))


@pytest.mark.parametrize(
    "change",
    [
        {"humidity": 1.0}, {"counts": 1.5}, {"counts": 2**63}, {"light": 1}, {"flags": ["a,b"]},
        {"ambient": {"temperature_c": 1.0}},
    ],
)  # fmt: skip
def test_a_point_that_would_lose_something_is_refused(tmp_path: Path, change: dict[str, Any]) -> None:
    journal = journal_of(tmp_path / "j", [records(0)[0], ("point", point(2) | change)])
    with pytest.raises(ExportError, match=next(iter(change))):
        export(journal, tmp_path / "run.h5")
    assert [p.name for p in tmp_path.iterdir()] == ["j"]


@pytest.mark.parametrize(
    ("place", "value"),
    [("scan/counts", 1), ("scan/temperature_c", 20.000000000000004), ("scan/complete", 0), ("events/seq", 9),
     ("events/body", "{}"), ("scan/flags", "late")],
)  # fmt: skip
def test_one_changed_value_in_the_file_is_found(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch, place: str, value: Any
) -> None:
    journal, out = journal_of(tmp_path / "j", records(26)), tmp_path / "run.h5"
    export(journal, out, curve=flat)
    kept = out.read_bytes()

    def flip(path: Path) -> None:
        with h5py.File(path, "r+") as file:
            row = file[f"entry/{place}"]
            assert row[2] != value
            row[2] = value

    monkeypatch.setattr(daq.export, "_fsync", flip)
    with pytest.raises(ExportError, match="differs from the journal"):
        export(journal, out, curve=flat)
    assert out.read_bytes() == kept


def test_the_child_says_what_it_did_in_one_line(tmp_path: Path) -> None:
    rows = [(kind, body) for kind, body in records(26) if kind not in ("look", "conclusion")]
    journal, out = journal_of(tmp_path / "j", rows), tmp_path / "run.h5"
    done = child(journal, out)
    answer = {"ok": True, "file": str(out), "complete": False, "records": len(rows) + 1, "points": 26}
    assert (done.returncode, json.loads(done.stdout), done.stderr) == (0, answer, "")
    for code, source, where, kind in (
        (3, tmp_path / "missing", out, "JournalError"),
        (4, journal, tmp_path / "nowhere" / "run.h5", "ExportError"),
    ):
        failed = child(source, where)
        said = json.loads(failed.stdout)
        assert (failed.returncode, said["ok"], said["kind"], failed.stderr) == (code, False, kind, "")
    assert daq.export.main(["only one"]) == 2


SHORT_OF_SPACE = """
import resource, sys
from daq.export import main
resource.setrlimit(resource.RLIMIT_FSIZE, (60_000, 60_000))
sys.exit(main(sys.argv[1:]))
"""


def test_a_full_disk_leaves_the_old_file(tmp_path: Path) -> None:
    """A file-size limit of the process stands for the full disk."""
    rows = [(kind, body) for kind, body in records(3000) if kind not in ("look", "conclusion")]
    out = tmp_path / "run.h5"
    export(journal_of(tmp_path / "short", rows[:10]), out)
    kept = out.read_bytes()
    failed = child(journal_of(tmp_path / "long", rows), out, code=SHORT_OF_SPACE)
    assert failed.returncode == 4, failed
    assert json.loads(failed.stdout.splitlines()[0])["kind"] == "ExportError"
    assert out.read_bytes() == kept
    assert sorted(p.name for p in tmp_path.iterdir()) == ["long", "run.h5", "short"]


KILLED = """
import os, signal, sys
from pathlib import Path
import daq.export
moment = sys.argv.pop()
def die(*a, **k):
    os.kill(os.getpid(), signal.SIGKILL)
if moment == "replace":
    os.replace = die
elif moment == "sync":
    daq.export._fsync = die
elif moment == "half":
    write = Path.write_bytes
    def half(path, data):
        write(path, data[: len(data) // 2])
        die()
    Path.write_bytes = half
else:
    done = daq.export.RunWriter.add
    def add(self, record, text):
        done(self, record, text)
        if record.seq == int(moment):
            die()
    daq.export.RunWriter.add = add
daq.export.main(sys.argv[1:])
"""


@pytest.mark.parametrize("moment", ["1", "6000", "half", "sync", "replace"])
def test_kill_9_in_an_export_leaves_the_old_file(tmp_path: Path, moment: str) -> None:
    rows = [(kind, body) for kind, body in records(7000) if kind not in ("look", "conclusion")]
    journal, out = journal_of(tmp_path / "j", rows), tmp_path / "run.h5"
    export(journal_of(tmp_path / "short", rows[:10]), out)
    kept = out.read_bytes()
    command = [sys.executable, "-c", KILLED, str(journal), str(out), moment]
    killed = subprocess.run(command, cwd=ROOT, capture_output=True, check=False)
    assert killed.returncode == -signal.SIGKILL, killed
    assert out.read_bytes() == kept
    assert bool(list(tmp_path.glob("*.tmp-*"))) == (moment in ("half", "sync", "replace"))
    assert export(journal, out).points == 7000
    assert not list(tmp_path.glob("*.tmp-*")), "the killed one's remains are cleared away"
    assert looks_like(out, journal)


@pytest.mark.parametrize(
    ("name", "unit"),
    [("dwell_s", "s"), ("at_ns", "ns"), ("dark_per_s", "1/s"), ("wavelength_air_nm", "nm"),
     ("steps", "steps"), ("temperature_c", "degC"), ("number", None), ("groove_density_per_mm", "1/mm"),
     ("steps_per_radian", "steps/radian")],
)  # fmt: skip
def test_units_come_from_names(name: str, unit: str | None) -> None:
    assert unit_of(name) == unit
