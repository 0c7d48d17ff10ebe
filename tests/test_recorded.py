"""The recorded-spectrum bench: the table stands in for lamp and optics, the counter stays a counter."""

from __future__ import annotations

import asyncio
import csv
import tomllib
from pathlib import Path
from typing import Any

import pytest

from drivers.clock import Clock, run_virtual
from drivers.errors import LimitError, SettingsError
from drivers.protocols import DriverContext
from simulators import memory
from simulators.recorded import RecordedWorld, build

BENCHES = Path(__file__).parent.parent / "configs" / "benches"
SHIPPED = ["recorded-hg-577", "recorded-ar-750", "recorded-ar-801", "recorded-cd-361"]
START_NS = 1_928_599_200_000_000_000
S = 1_000_000_000


class StoppedClock:
    is_virtual = True

    def utc_ns(self) -> int:
        return START_NS

    def monotonic_ns(self) -> int:
        return 0


def shipped(name: str) -> dict[str, Any]:
    with (BENCHES / f"{name}.toml").open("rb") as stream:
        return tomllib.load(stream)


def world_of(name: str, clock: Clock) -> RecordedWorld:
    return build(shipped(name)["world"]["options"], DriverContext(clock, "world", 1, str(BENCHES)))


@pytest.mark.parametrize("name", SHIPPED)
def test_shipped_benches_and_their_tables_agree(name: str) -> None:
    bench = shipped(name)
    world = world_of(name, StoppedClock())
    assert bench["optics"]["spectrum"] == bench["world"]["options"]["spectrum"]
    assert bench["drive"]["lowest_steps"] == 0
    assert bench["drive"]["highest_steps"] == len(world.wavelength_nm) - 1
    assert 300.0 < max(world.rate_per_s) < 2000.0
    with (BENCHES / bench["optics"]["spectrum"]).open() as stream:
        rows = list(csv.DictReader(stream))
    for k, row in enumerate(rows):
        assert world.true_wavelength_nm(k) == pytest.approx(float(row["wavelength_vacuum_nm"]), abs=1e-12)


def test_rows_recorded_below_zero_give_no_light() -> None:
    """Row 3 of the mercury recording holds -8.438 counts, row 0 holds 28.917."""
    world = world_of("recorded-hg-577", StoppedClock())
    assert world.rate_per_s[3] == 0.0
    assert world.rate_per_s[0] == pytest.approx(2.8917)


def test_true_wavelengths_between_rows_are_linear() -> None:
    world = world_of("recorded-hg-577", StoppedClock())
    a, b = world.wavelength_nm[4:6]
    assert world.true_wavelength_nm(4.25) == pytest.approx(a + 0.25 * (b - a), abs=1e-12)
    assert world.true_wavelength_nm(42) == world.wavelength_nm[42]


def test_the_drive_steps_from_row_to_row_and_counts_follow_the_recording() -> None:
    async def main(clock: Clock) -> None:
        world = world_of("recorded-hg-577", clock)
        drive = memory.grating_drive({}, DriverContext(clock, "drive", 1, ".", world))
        counter = memory.counter({}, DriverContext(clock, "detector", 1, ".", world))
        shutter = memory.shutter({}, DriverContext(clock, "shutter", 1, ".", world))
        await drive.home(deadline_s=5.0)
        with pytest.raises(LimitError, match=r"0\.\.42"):
            await drive.move_to(43, deadline_s=5.0)
        assert (await drive.move_to(1, deadline_s=5.0)).duration_ns == pytest.approx(20_000_000, abs=5)
        await shutter.set_open(True, deadline_s=1.0)
        for row in (0, 3, 13, 14, 27):
            await drive.move_to(row, deadline_s=5.0)
            await asyncio.sleep(0.02)
            mean = 20.0 * (world.rate_per_s[row] + 5.0)
            counts = sum([(await counter.gate(S, deadline_s=2.0)).counts for _ in range(20)])
            assert counts == pytest.approx(mean, abs=5.0 * mean**0.5), row
        assert world.truth()["rate_per_s"][14] == world.rate_per_s[14]

    run_virtual(main, START_NS)


@pytest.mark.parametrize(
    ("text", "fragment"),
    [
        (None, "cannot be read"),
        ("", "needs a header line"),
        ("wavelength_air_nm,flux\n500,1\n501,2\n", "needs a header line with counts"),
        ("wavelength_air_nm,wavelength_vacuum_nm,counts\n500,500,1\n", "one of wavelength_air_nm"),
        ("wavelength_air_nm,counts\n500,1\n", "at least two rows"),
        ("wavelength_air_nm,counts\n500,1\n501,many\n", "line 3: not a number"),
        ("wavelength_air_nm,counts\n500,1\n501\n", "line 3: not a number"),
        ("wavelength_air_nm,counts\n500,1\n501,nan\n", "line 3: .*finite"),
        ("wavelength_air_nm,counts\n500,1\n500,2\n", "line 3: wavelengths must rise"),
    ],
)
def test_an_unusable_table_is_refused_by_name_and_line(
    tmp_path: Path, text: str | None, fragment: str
) -> None:
    if text is not None:
        (tmp_path / "lamp.csv").write_text(text, encoding="utf-8")
    context = DriverContext(StoppedClock(), "world", 1, str(tmp_path))
    with pytest.raises(SettingsError, match=rf"lamp\.csv: world\.options\.spectrum: .*{fragment}"):
        build({"spectrum": "lamp.csv"}, context)
