"""What a target wants of the bench is set by its motors, recorded, and set anew after every fault."""

from __future__ import annotations

from dataclasses import replace
from pathlib import Path

import h5py
import pytest
from cellar import fault, run

from daq.files import shipped
from daq.records import Kind
from daq.target import LoadedTarget, load_target
from drivers.bench import LoadedBench, load_bench


def bench_7(folder: Path, faults: str = "") -> LoadedBench:
    text = shipped("benches/emberlight-7.toml").read_text(encoding="utf-8")
    path = folder / "bench.toml"
    path.write_text(text + faults, encoding="utf-8")
    return load_bench(path)


def sheet(folder: Path, name: str, **changes: str) -> LoadedTarget:
    """A shipped target with keys changed (spelled as in the file, `key = value`), and a short limit."""
    text = shipped(f"targets/{name}.toml").read_text(encoding="utf-8")
    lines = []
    for line in text.splitlines():
        key = line.partition("=")[0].strip()
        lines.append(f"{key} = {changes[key]}" if key in changes and "=" in line else line)
    path = folder / f"{name}.toml"
    path.write_text("\n".join(lines), encoding="utf-8")
    return load_target(path)


def test_lamp_filter_and_slits_are_set_before_the_first_point_and_recorded(tmp_path: Path) -> None:
    outcome = run(tmp_path, bench=bench_7(tmp_path), target=sheet(tmp_path, "hg-313-wide", time_s="60.0"))
    (prepared,) = outcome.of_kind(Kind.PREPARED)
    assert prepared["set"] == {
        "lamp": "mercury",
        "filter": "none",
        "entrance_slit_um": 50.0,
        "exit_slit_um": 50.0,
    }
    assert {"lamp", "filter", "slits"} <= prepared["identities"].keys()
    with h5py.File(outcome.file) as file:
        mono = file["entry/instrument/monochromator"]
        assert mono["entrance_slit/size"][()] == 50.0
        assert mono["grating/diffraction_order"][()] == 1


def test_another_order_is_another_place_of_the_drive(tmp_path: Path) -> None:
    """254 nm in order 3 stands where 761 nm stands in order 1."""
    outcome = run(tmp_path, bench=bench_7(tmp_path), target=sheet(tmp_path, "hg-254-reversed", time_s="60.0"))
    steps = [body["steps"] for body in outcome.of_kind(Kind.POINT)]
    middle = (min(steps) + max(steps)) / 2.0
    assert outcome.world.true_wavelength_nm(middle) == pytest.approx(3.0 * 253.652, abs=0.02)
    with h5py.File(outcome.file) as file:
        assert file["entry/instrument/monochromator/grating/diffraction_order"][()] == 3
        wavelength_nm = file["entry/data/wavelength"][:]
        assert wavelength_nm.min() < 253.652 < wavelength_nm.max()


@pytest.mark.parametrize(
    ("device", "call"), [("lamp", "select"), ("filter", "select"), ("slits", "set_widths")]
)
@pytest.mark.parametrize("kind", ["link", "hang", "hardware"])
def test_a_selector_that_fails_is_asked_again_or_stops_the_run(
    tmp_path: Path, device: str, call: str, kind: str
) -> None:
    """Never a point with the wrong lamp, filter or slit: the set-up is part of every preparation."""
    bench = bench_7(tmp_path, fault(device, call, 1, kind))
    outcome = run(tmp_path, bench=bench, target=sheet(tmp_path, "hg-313-wide", time_s="90.0"))
    if kind == "hardware":
        assert outcome.summary["stop_reason"] == "fault"
        assert outcome.summary["points"] == 0
        assert device in outcome.summary["cause"]
    else:
        assert outcome.summary["points"] > 0
        assert outcome.of_kind(Kind.FAULT)[0]["device"] == device
    assert outcome.summary["safe"] == {"shutter": "closed", "drive": "stopped", "problems": []}


def test_a_repaired_fault_in_the_middle_sets_everything_anew(tmp_path: Path) -> None:
    """Whatever the fault did to the bench, the next point stands on a fresh preparation."""
    bench = bench_7(tmp_path, fault("drive", "move_to", 30, "link"))
    outcome = run(tmp_path, bench=bench, target=sheet(tmp_path, "hg-313-wide", time_s="90.0"))
    prepared = outcome.of_kind(Kind.PREPARED)
    assert len(prepared) == 2
    assert prepared[0]["set"] == prepared[1]["set"]


def test_names_of_files_carry_utc_bench_target_and_serial(tmp_path: Path) -> None:
    outcome = run(tmp_path, bench=bench_7(tmp_path), target=sheet(tmp_path, "hg-313-wide", time_s="30.0"))
    assert outcome.file.name == "20310211T180000Z-emberlight-bench-7-01-hg-313-nm-wide-slits-el-4471-1.h5"
    assert outcome.summary["specimen_serial"] == "EL-4471"


def test_a_target_without_serial_leaves_no_gap_in_the_name(tmp_path: Path) -> None:
    target = sheet(tmp_path, "hg-313-wide", time_s="30.0")
    target = replace(target, target=target.target.model_copy(update={"specimen_serial": None}))
    outcome = run(tmp_path, bench=bench_7(tmp_path), target=target)
    assert outcome.file.name == "20310211T180000Z-emberlight-bench-7-01-hg-313-nm-wide-slits-1.h5"
