"""Every shipped configuration file loads, and what the files say fits together."""

from __future__ import annotations

import csv
import math
from pathlib import Path

import pytest

from daq.files import KINDS, shipped_folder, shipped_names
from daq.nightfile import load_night
from daq.target import load_target
from drivers.bench import PlaneOptics, load_bench
from drivers.factory import load_factories

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


@pytest.mark.parametrize("path", BENCHES, ids=stem)
def test_bench_loads_with_its_factories(path: Path) -> None:
    loaded = load_bench(path)
    factories = load_factories(loaded)
    assert {"drive", "detector", "shutter"} <= set(factories)
    assert all(callable(factory) for factory in factories.values())


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
    below_pm, above_pm = target.window.outright_pm or (math.nan, math.nan)
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
    assert target.window.outright_pm is not None
    _, above_pm = target.window.outright_pm
    room_pm = target.wavelength_nm * 1e3 + above_pm - second_nm * 1e3
    assert room_pm > 3 * target.model.line_fwhm_pm
