"""A night: targets one after another on one bench, each a run with a journal and a file of its own."""

from __future__ import annotations

import asyncio
import logging
from collections.abc import Callable, Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import Any

from daq.carry import Observer, Outcome, Stopper, carry_run, journal_path_of, left_unsafe
from daq.hands import Devices, close_devices
from daq.head import make_head
from daq.journal import FolderLock, Journal, JournalError
from daq.machine import Machine
from daq.nightfile import LoadedNight
from daq.plan import after_over_light
from daq.records import StopReason, run_identity
from daq.runner import RunFailed
from daq.target import LoadedTarget
from drivers.bench import LoadedBench
from drivers.clock import Clock
from drivers.errors import SettingsError
from drivers.factory import PROTOCOLS, load_factories, make, protocol_of
from drivers.protocols import DriverContext

log = logging.getLogger(__name__)

ENDS_THE_NIGHT = frozenset({StopReason.STOPPED_BY_USER, StopReason.NIGHT_DEADLINE, StopReason.INTERNAL_ERROR})
"""After these the remaining targets are not started. A fault at one target does not cost the others."""


@dataclass(frozen=True, slots=True)
class NightOrder:
    """What is to be done: a bench, targets in order, where files go, the seed of simulated devices.

    confirmed : what was set by hand, who said so and how (daq.confirm); goes into every head.
    """

    bench: LoadedBench
    targets: Sequence[LoadedTarget]
    out: Path
    seed: int
    night: LoadedNight | None = None
    operator: str | None = None
    confirmed: dict[str, Any] | None = None

    @property
    def time_limit_s(self) -> float | None:
        return None if self.night is None else self.night.night.limits.time_s


async def open_devices(loaded: LoadedBench, clock: Clock, seed: int) -> Devices:
    """Everything the bench file names. Raises SettingsError, or DeviceError if one does not answer; what was
    opened before that is closed again."""
    bench, factories = loaded.bench, load_factories(loaded)
    world: Any = None
    opened: dict[str, Any] = {}

    def open_one(role: str, options: dict[str, Any]) -> Any:
        context = DriverContext(clock=clock, role=role, seed=seed, folder=str(loaded.folder), world=world)
        return make(factories[role], options, context, str(loaded.path), protocol_of(role, bench))

    try:
        if bench.world is not None:
            world = open_one("world", bench.world.options)
        for role in PROTOCOLS:
            table = getattr(bench, role)
            if table is not None:
                opened[role] = open_one(role, table.options)
    except BaseException:
        for problem in await close_devices(opened):
            log.warning("closing %s", problem)
        raise
    return Devices(**opened)


def rehearse(order: NightOrder) -> None:
    """All that can be wrong with a night before a device is opened. Raises SettingsError or DataError."""
    for ordinal, target in enumerate(order.targets, start=1):
        _head(order, 0, ordinal, target)
    load_factories(order.bench)


async def run_night(
    order: NightOrder,
    clock: Clock,
    *,
    observe: Observer,
    on_run: Callable[[dict[str, Any]], None] = lambda head: None,
    stopper: Stopper | None = None,
) -> Outcome:
    """Run it. Raises SettingsError before anything is written or moved, DeviceError if none can be opened.

    A run that breaks off is a problem told and does not cost the others, unless the bench may be unsafe.
    """
    start_utc_ns = clock.utc_ns()
    stopper = stopper or Stopper()
    outcome = Outcome(not_started=[target.target.name for target in order.targets])
    heads = [_head(order, start_utc_ns, i, target) for i, target in enumerate(order.targets, start=1)]
    load_factories(order.bench)
    _make_folder(order.out)
    with FolderLock(order.out):
        devices = await open_devices(order.bench, clock, order.seed)
        timer = None
        if order.time_limit_s is not None:
            loop = asyncio.get_running_loop()
            timer = loop.call_later(order.time_limit_s, stopper.stop, StopReason.NIGHT_DEADLINE, "night")
        try:
            for head in heads:
                outcome.not_started.pop(0)
                if outcome.runs and outcome.runs[-1]["stop_reason"] == StopReason.OVER_LIGHT:
                    head["plan"] = after_over_light(head["plan"])
                try:
                    summary = await _one_run(order, head, devices, clock, observe, on_run, stopper)
                except (RunFailed, JournalError) as error:
                    outcome.problems.append(f"{head['target']['name']}: {error}")
                else:
                    outcome.runs.append(summary)
                    if left_unsafe(summary) or summary["stop_reason"] in ENDS_THE_NIGHT:
                        break
                if stopper.reason is not None:
                    break
        finally:
            if timer is not None:
                timer.cancel()
            for problem in await devices.close():
                log.warning("closing %s", problem)
    outcome.stopped = stopper.reason
    return outcome


async def _one_run(
    order: NightOrder,
    head: dict[str, Any],
    devices: Devices,
    clock: Clock,
    observe: Observer,
    on_run: Callable[[dict[str, Any]], None],
    stopper: Stopper,
) -> dict[str, Any]:
    head["created_utc_ns"] = clock.utc_ns()
    on_run(head)
    journal = Journal.create(journal_path_of(order.out, head["run_id"]), head, threaded=not clock.is_virtual)
    return await carry_run(
        head,
        journal,
        Machine(head["plan"]),
        devices=devices,
        clock=clock,
        session=1,
        reason="start",
        observe=observe,
        stopper=stopper,
    )


def _make_folder(out: Path) -> None:
    try:
        out.mkdir(parents=True, exist_ok=True)
    except OSError as error:
        problem = f"cannot be the folder of the files: {error.strerror}; give --out one that can be made"
        raise SettingsError(str(out), [problem]) from error


def _head(order: NightOrder, start_utc_ns: int, ordinal: int, target: LoadedTarget) -> dict[str, Any]:
    attempt = 1
    while _is_taken(order, start_utc_ns, ordinal, target, attempt):
        attempt += 1
    return make_head(
        order.bench,
        target,
        night=order.night,
        night_start_utc_ns=start_utc_ns,
        created_utc_ns=start_utc_ns,
        ordinal=ordinal,
        attempt=attempt,
        seed=order.seed,
        operator=order.operator,
        confirmed=order.confirmed,
    )


def _is_taken(order: NightOrder, start_utc_ns: int, ordinal: int, target: LoadedTarget, attempt: int) -> bool:
    run_id = run_identity(
        night_start_utc_ns=start_utc_ns,
        bench_slug=order.bench.slug,
        ordinal=ordinal,
        target_slug=target.slug,
        serial_slug=target.serial_slug,
        attempt=attempt,
    )
    return journal_path_of(order.out, run_id).exists() or (order.out / f"{run_id}.h5").exists()
