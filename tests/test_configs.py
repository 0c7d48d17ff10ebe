"""Every shipped configuration file loads, and what the files say fits together."""

from __future__ import annotations

import csv
import math
import sys
from pathlib import Path

import pytest

from daq.check import problems_of
from daq.confirm import confirm
from daq.files import KINDS, shipped_folder, shipped_names
from daq.night import open_devices
from daq.nightfile import load_night
from daq.spectrum import read_spectrum
from daq.target import load_target
from drivers.bench import PlaneOptics, load_bench
from drivers.clock import Clock, run_virtual
from drivers.errors import SettingsError
from drivers.factory import PROTOCOLS, load_factories

FOLDER = shipped_folder()
BENCHES = sorted((FOLDER / "benches").glob("*.toml"))
TARGETS = sorted((FOLDER / "targets").glob("*.toml"))
NIGHTS = sorted((FOLDER / "nights").glob("*.toml"))
RECORDED = {
    "hg-577-579": "recorded-hg-577",
    "ar-750": "recorded-ar-750",
    "ar-801": "recorded-ar-801",
    "cd-361-recorded": "recorded-cd-361",
}
SKELETON = "lab-skeleton"
"""A bench with real devices, to be copied: its drivers are still to be written."""

FITTING = [
    *((bench, target) for target, bench in RECORDED.items()),
    ("concave-order-1", "na-589-pair"),
    ("concave-order-2", "na-589-pair"),
    ("concave-order-2", "na-589-order-2"),
    ("littrow-analogue", "ar-696-single"),
    ("goods-in", "hg-436-goods-in"),
    (SKELETON, "ar-696-single"),
]
NIGHT_BENCHES = {"acceptance": "emberlight-3", "lamp-works": "emberlight-7"}


def stem(path: Path) -> str:
    return path.stem


def test_every_shipped_settings_file_is_of_a_kind_that_is_loaded_here() -> None:
    inside = {
        path.relative_to(FOLDER).as_posix() for kind in KINDS for path in (FOLDER / kind).rglob("*.toml")
    }
    assert inside == set(shipped_names())
    assert inside == {p.relative_to(FOLDER).as_posix() for p in [*BENCHES, *TARGETS, *NIGHTS]}
    assert BENCHES
    assert TARGETS
    assert NIGHTS


@pytest.mark.parametrize("path", [path for path in BENCHES if path.stem != SKELETON], ids=stem)
def test_bench_loads_with_its_factories_and_every_device_can_be_made(path: Path) -> None:
    """What the factories return is compared with the protocol of each role."""
    loaded = load_bench(path)
    factories = load_factories(loaded)
    assert {"drive", "detector", "shutter"} <= set(factories)
    roles = [role for role in PROTOCOLS if getattr(loaded.bench, role) is not None]
    assert set(factories) == {*roles, "world"}
    assert loaded.bench.time.start_utc_ns is not None

    async def open_all(clock: Clock) -> None:
        devices = await open_devices(loaded, clock, seed=1)
        assert await devices.close() == []

    run_virtual(open_all, loaded.bench.time.start_utc_ns)


def test_the_skeleton_loads_and_says_which_drivers_are_to_be_written(
    monkeypatch: pytest.MonkeyPatch,
) -> None:
    monkeypatch.setattr(sys, "path", list(sys.path))
    loaded = load_bench(FOLDER / "benches" / f"{SKELETON}.toml")
    assert loaded.bench.world is None
    assert loaded.bench.time.kind == "real"
    with pytest.raises(SettingsError) as caught:
        load_factories(loaded)
    assert [problem.split(";")[0] for problem in caught.value.problems] == [
        "drive.factory = 'lab_drive:open_drive': there is no module 'lab_drive'",
        "detector.factory = 'lab_counter:open_counter': there is no module 'lab_counter'",
        "shutter.factory = 'lab_counter:open_shutter': there is no module 'lab_counter'",
    ]


def test_the_shipped_benches_hold_every_mount_drive_detector_and_way_of_setting() -> None:
    benches = [load_bench(path).bench for path in BENCHES]
    assert {bench.optics.mount for bench in benches} == {"plane", "littrow", "concave", "table"}
    assert {bench.drive.kind for bench in benches} == {"rotary", "sine-bar"}
    assert {bench.detector.kind for bench in benches} == {"counter", "analogue"}
    assert any(bench.filter and bench.lamp and bench.slits and bench.reference for bench in benches)
    assert sum(bench.optics.mount != "table" for bench in benches) >= 5


@pytest.mark.parametrize(("bench_stem", "target_stem"), FITTING)
def test_a_target_has_no_problem_on_its_bench(bench_stem: str, target_stem: str) -> None:
    bench = load_bench(FOLDER / "benches" / f"{bench_stem}.toml")
    target = load_target(FOLDER / "targets" / f"{target_stem}.toml")
    spectrum = None if bench.spectrum_path is None else read_spectrum(bench.spectrum_path)
    assert [str(finding) for finding in problems_of(bench, target, spectrum)] == []


@pytest.mark.parametrize("path", NIGHTS, ids=stem)
def test_a_night_is_confirmed_and_fits_its_bench(path: Path) -> None:
    bench = load_bench(FOLDER / "benches" / f"{NIGHT_BENCHES[path.stem]}.toml")
    night = load_night(path)
    assert confirm(bench, night, by=None, ask=None)["how"] == "night file"
    for run in night.runs:
        assert [str(finding) for finding in problems_of(bench, run.target, None)] == []


def test_every_target_is_shipped_with_a_bench_that_it_fits() -> None:
    in_nights = {run.target.path.stem for path in NIGHTS for run in load_night(path).runs}
    assert {path.stem for path in TARGETS} == in_nights | {target for _, target in FITTING}


@pytest.mark.parametrize(
    "path", [path for path in BENCHES if not path.stem.startswith("recorded-")], ids=stem
)
def test_a_bench_with_lamps_carries_its_caution(path: Path) -> None:
    text = path.read_text("utf-8").lower()
    assert "local code" in text
    assert "licensed" in text


@pytest.mark.parametrize("path", TARGETS, ids=stem)
def test_target_loads(path: Path) -> None:
    loaded = load_target(path)
    assert loaded.text == path.read_text("utf-8")
    assert loaded.slug


@pytest.mark.parametrize("path", NIGHTS, ids=stem)
def test_night_loads_with_its_targets(path: Path) -> None:
    assert load_night(path).runs


def test_names_are_unique_within_their_kind() -> None:
    for slugs in ([load_bench(p).slug for p in BENCHES], [load_target(p).slug for p in TARGETS]):
        assert len(set(slugs)) == len(slugs)


@pytest.mark.parametrize("path", [p for p in TARGETS if p.stem not in RECORDED], ids=stem)
def test_lamp_targets_and_nights_carry_their_cautions(path: Path) -> None:
    text = path.read_text("utf-8")
    assert "CAUTION" in text
    assert "local codes" in text.lower()


def test_the_night_carries_its_caution() -> None:
    assert all("CAUTION" in path.read_text("utf-8") for path in NIGHTS)


def test_bench_3_reaches_every_line_of_the_acceptance_night() -> None:
    """m lambda = 2 d cos K sin phi (textbook relation for a constant included angle 2K)."""
    bench = load_bench(FOLDER / "benches" / "emberlight-3.toml").bench
    optics, drive = bench.optics, bench.drive
    assert isinstance(optics, PlaneOptics)
    assert drive.steps_per_radian is not None
    reach_nm = 2e6 / optics.groove_density_per_mm * math.cos(math.radians(optics.included_angle_deg / 2))
    for run in load_night(FOLDER / "nights" / "acceptance.toml").runs:
        target = run.target.target
        assert target.medium == "air", "the grating's own scale"
        for line_nm in (target.wavelength_nm, *target.known_lines_nm):
            steps = bench.zero_order_steps + drive.steps_per_radian * math.asin(
                optics.order * line_nm / reach_nm
            )
            assert drive.lowest_steps < steps < drive.highest_steps - drive.backlash_steps


def test_the_acceptance_night_holds_pairs_and_the_control_and_fits_its_limit() -> None:
    loaded = load_night(FOLDER / "nights" / "acceptance.toml")
    stems = [run.target.path.stem for run in loaded.runs]
    assert {"hg-313-pair", "cd-361-pair", "ar-696-single"} <= set(stems)
    assert loaded.night.limits.time_s is not None
    assert sum(run.target.target.limits.time_s for run in loaded.runs) <= loaded.night.limits.time_s


@pytest.mark.parametrize(("target_stem", "bench_stem"), RECORDED.items(), ids=list(RECORDED))
def test_recorded_target_lies_within_its_recording(target_stem: str, bench_stem: str) -> None:
    target = load_target(FOLDER / "targets" / f"{target_stem}.toml").target
    loaded = load_bench(FOLDER / "benches" / f"{bench_stem}.toml")
    assert loaded.spectrum_path is not None
    with loaded.spectrum_path.open(encoding="utf-8", newline="") as stream:
        rows = list(csv.DictReader(stream))
    assert target.medium == "vacuum"
    wavelengths = [float(row["wavelength_vacuum_nm"]) for row in rows]
    below_pm, above_pm = target.stretches[0][1].outright_pm or (math.nan, math.nan)
    assert wavelengths[0] <= target.wavelength_nm - below_pm * 1e-3
    assert target.wavelength_nm + above_pm * 1e-3 <= wavelengths[-1]
    drive = loaded.bench.drive
    assert (drive.lowest_steps, drive.highest_steps) == (0, len(rows) - 1)


@pytest.mark.parametrize(
    ("target_stem", "second_nm"),
    # separations from NIST ASD air wavelengths (memory), in vacuum: 2.1066, 1.0786, 0.8631, 0.2366 nm
    [
        ("hg-577-579", 577.1198 + 2.1066),
        ("ar-750", 750.5935 + 1.0786),
        ("ar-801", 800.8359 + 0.8631),
        ("cd-361-recorded", 361.1537 + 0.2366),
    ],
)
def test_the_second_line_stands_well_inside_the_window(target_stem: str, second_nm: float) -> None:
    target = load_target(FOLDER / "targets" / f"{target_stem}.toml").target
    outright_pm = target.stretches[0][1].outright_pm
    assert outright_pm is not None
    _, above_pm = outright_pm
    room_pm = target.wavelength_nm * 1e3 + above_pm - second_nm * 1e3
    assert room_pm > 3 * target.model.line_fwhm_pm
