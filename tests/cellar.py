"""One run in the simulated cellar under virtual time, with whatever goes wrong scripted."""

from __future__ import annotations

import asyncio
from collections.abc import Callable, Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import Any

from daq.carry import Stopper, carry_run, journal_path_of
from daq.files import shipped
from daq.head import make_head
from daq.journal import Journal, read_journal
from daq.machine import Machine
from daq.night import open_devices
from daq.records import Record
from daq.runner import Notice, Runner
from daq.target import LoadedTarget, load_target
from drivers.bench import LoadedBench, load_bench
from drivers.clock import Clock, run_virtual

START_UTC_NS = 1_928_599_200_000_000_000  # 2031-02-11T18:00:00Z

QUICK_TARGET = """
format = 1
name = "Quick pair"
wavelength_air_nm = 313.155
[window]
half_width_fwhm = 2.5
[sweep]
dwell_s = 0.25
step_pm = 2.4
[goal]
separation_uncertainty_pm = 0.6
[limits]
time_s = 400.0
"""

# The demo bench with its slow parts made quick, for runs in real time.
FAST_BENCH = [
    ("speed_steps_per_s = 20000.0", "speed_steps_per_s = 20000000.0"),
    ("acceleration_steps_per_s2 = 80000.0", "acceleration_steps_per_s2 = 1e10"),
    ("home_s = 4.0", "home_s = 0.01"),
    ("settle_s = 0.05", "settle_s = 0.001"),
]


def hasty_target(*, separation_uncertainty_pm: float, time_s: float) -> str:
    """A target of 4 ms dwells: hundreds of points in a second of real time."""
    return f"""
format = 1
name = "Hasty pair"
wavelength_air_nm = 313.155
[window]
half_width_fwhm = 2.5
[sweep]
dwell_s = 0.004
[goal]
separation_uncertainty_pm = {separation_uncertainty_pm}
[limits]
time_s = {time_s}
"""


@dataclass(frozen=True)
class Outcome:
    """What one run left behind."""

    summary: dict[str, Any]
    records: list[Record]
    notices: list[Notice]
    world: Any
    journal: Path
    machine: Machine

    @property
    def file(self) -> Path:
        return Path(self.summary["file"])

    def of_kind(self, kind: str) -> list[dict[str, Any]]:
        return [record.body for record in self.records if record.kind == kind]


class Appointments(Stopper):
    """A stopper that also asks the runner for things at given virtual times, s after the run began."""

    def __init__(self, wishes: Sequence[tuple[float, Callable[[Runner], None]]]) -> None:
        super().__init__()
        self._appointed = wishes

    def attend(self, runner: Runner | None) -> None:
        super().attend(runner)
        if runner is not None:
            loop = asyncio.get_running_loop()
            for at_s, call in self._appointed:
                if at_s <= 0.0:
                    call(runner)
                else:
                    loop.call_later(at_s, call, runner)


def bench_file(folder: Path, *, faults: str = "", changes: Sequence[tuple[str, str]] = ()) -> LoadedBench:
    """The shipped demo bench with a fault script and textual changes, written to `folder`."""
    text = shipped("benches/emberlight-3.toml").read_text(encoding="utf-8")
    for old, new in changes:
        assert old in text, f"the bench file has no {old!r}"
        text = text.replace(old, new)
    path = folder / "bench.toml"
    path.write_text(text + faults, encoding="utf-8")
    return load_bench(path)


def target_file(folder: Path, text: str = QUICK_TARGET, name: str = "target.toml") -> LoadedTarget:
    path = folder / name
    path.write_text(text, encoding="utf-8")
    return load_target(path)


def fault(device: str, call: str, nth: int, kind: str, times: int = 1, after_s: float = 0.0) -> str:
    return (
        f'\n[[world.options.faults]]\ndevice = "{device}"\ncall = "{call}"\nnth = {nth}\n'
        f'kind = "{kind}"\ntimes = {times}\nafter_s = {after_s}\n'
    )


def run(
    folder: Path,
    *,
    bench: LoadedBench | None = None,
    target: LoadedTarget | None = None,
    seed: int = 1,
    wishes: Sequence[tuple[float, Callable[[Runner], None]]] = (),
    observe: Callable[[Notice], None] = lambda notice: None,
    confirmed: dict[str, Any] | None = None,
) -> Outcome:
    """One run to its file."""
    folder.mkdir(parents=True, exist_ok=True)
    bench = bench or bench_file(folder)
    target = target or target_file(folder)
    head = make_head(
        bench,
        target,
        night=None,
        night_start_utc_ns=START_UTC_NS,
        created_utc_ns=START_UTC_NS,
        ordinal=1,
        attempt=1,
        seed=seed,
        operator=None,
        confirmed=confirmed,
    )
    machine = Machine(head["plan"])
    notices: list[Notice] = []
    worlds: list[Any] = []

    def watch(notice: Notice) -> None:
        notices.append(notice)
        observe(notice)

    async def work(clock: Clock) -> dict[str, Any]:
        devices = await open_devices(bench, clock, seed)
        worlds.append(devices.drive._world)
        journal = Journal.create(journal_path_of(folder, head["run_id"]), head, threaded=False)
        return await carry_run(
            head,
            journal,
            machine,
            devices=devices,
            clock=clock,
            session=1,
            reason="start",
            observe=watch,
            stopper=Appointments(wishes),
        )

    summary = run_virtual(work, START_UTC_NS)
    path = journal_path_of(folder, head["run_id"])
    return Outcome(summary, list(read_journal(path)), notices, worlds[0], path, machine)
