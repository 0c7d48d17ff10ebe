"""Commands that open a bench: demo, night, measure, recover."""

from __future__ import annotations

import contextlib
import signal
import sys
from collections.abc import Awaitable, Callable, Iterator, Sequence
from dataclasses import dataclass, replace
from functools import partial
from pathlib import Path
from typing import TYPE_CHECKING, Any

import click

from daq.cli_common import (
    Exit,
    confirm_option,
    die,
    json_option,
    mistakes,
    operator_option,
    out_option,
    print_runs,
    seed_option,
)
from drivers.errors import DataError, DeviceError, GratingdError, SettingsError

if TYPE_CHECKING:
    from asyncio import AbstractEventLoop

    from daq.carry import Outcome, Stopper
    from daq.nightfile import LoadedNight
    from daq.progress import Progress
    from daq.target import LoadedTarget
    from drivers.bench import LoadedBench
    from drivers.clock import Clock

DEMO_BENCH, DEMO_NIGHT = "benches/emberlight-7.toml", "nights/lamp-works.toml"
DEMO_FOLDER = "gratingd-demo"


@click.command()
@click.option("--out", type=click.Path(path_type=Path), help="Folder for the files; default: a new one here.")
@seed_option
@json_option
def demo(out: Path | None, seed: int, as_json: bool) -> None:
    """A whole night in the cellar of the Emberlight Lamp Works: invented bench, simulated, virtual time.

    The same seed gives the same night, byte for byte.
    """
    from daq.files import shipped

    out = out or _new_folder(DEMO_FOLDER)
    asked = Started(out=out, seed=seed, operator=None, is_confirmed=False, as_json=as_json)
    _run_night(shipped(DEMO_BENCH), shipped(DEMO_NIGHT), asked, real_time=False)


@click.command()
@click.argument("bench")
@click.argument("night", metavar="NIGHT")
@out_option
@seed_option
@operator_option
@confirm_option
@click.option("--real-time", is_flag=True, help="Wait for every gate even where the bench says virtual time.")
@json_option
def night(bench: str, night: str, real_time: bool, **started: Any) -> None:
    """Run the targets of the file NIGHT on the bench of the file BENCH, one after another.

    What a person sets (slits, filter, lamp, gain) must be confirmed: in the night file's table [confirmed],
    by --confirm, or when asked at a terminal.
    """
    from daq.files import resolve

    with mistakes():
        bench_path, night_path = resolve(bench, "benches"), resolve(night, "nights")
    _run_night(bench_path, night_path, Started(**started), real_time=real_time)


@click.command()
@click.argument("bench")
@click.argument("target")
@out_option
@seed_option
@operator_option
@confirm_option
@json_option
def measure(bench: str, target: str, **started: Any) -> None:
    """Measure the one target of the file TARGET on the bench of the file BENCH, now, in real time.

    Ctrl-C ends it cleanly: shutter closed, everything counted so far weighed and in the file.
    """
    from daq.files import resolve
    from daq.target import load_target
    from drivers.bench import load_bench

    with mistakes():
        loaded = load_bench(resolve(bench, "benches"))
        targets = [load_target(resolve(target, "targets"))]
    _carry_out(Started(**started), loaded, targets, virtual=False, live=True)


@click.command()
@click.argument("folder", type=click.Path(path_type=Path))
@click.option("--resume", is_flag=True, help="Open the bench again and carry unfinished runs on.")
@json_option
def recover(folder: Path, resume: bool, as_json: bool) -> None:
    """Make files of the journals that a crash left in FOLDER, or carry the runs on (--resume).

    Without --resume no device is touched: an unfinished run is concluded from what it has.
    """
    from daq.recover import recover as recover_folder

    progress = _progress(live=resume, as_json=as_json)

    async def work(clock: Clock, stopper: Stopper) -> Outcome:
        return await recover_folder(
            folder,
            clock,
            resume=resume,
            observe=progress.observe,
            on_run=progress.begin,
            stopper=stopper,
        )

    outcome = _with_signals(work, progress, start_utc_ns=None)
    if not outcome.runs and not outcome.problems and not as_json:
        click.echo(f"nothing to recover in {folder}")
        return
    _finish(outcome, as_json)


# ---- parts ----------------------------------------------------------------------------------------------


@dataclass(frozen=True, slots=True, kw_only=True)
class Started:
    """What `night` and `measure` have in common on the command line."""

    out: Path
    seed: int
    operator: str | None
    is_confirmed: bool
    as_json: bool

    def confirm(self, bench: LoadedBench, night: LoadedNight | None) -> dict[str, Any]:
        """What was set by hand, as it goes into every head. Raises SettingsError if nobody confirms it."""
        from daq.confirm import ask_on_terminal, confirm, login_name

        who = self.operator or login_name()
        by = who or "unnamed" if self.is_confirmed else None
        return confirm(bench, night, by=by, ask=ask_on_terminal(who))


def _run_night(bench: Path, night: Path, asked: Started, *, real_time: bool) -> None:
    from daq.nightfile import load_night
    from drivers.bench import load_bench

    with mistakes():
        loaded = load_bench(bench)
        plan = load_night(night)
    virtual = loaded.bench.time.kind == "virtual" and not real_time
    targets = [run.target for run in plan.runs]
    _carry_out(asked, loaded, targets, night=plan, virtual=virtual, live=not virtual)


def _carry_out(
    asked: Started,
    bench: LoadedBench,
    targets: Sequence[LoadedTarget],
    *,
    night: LoadedNight | None = None,
    virtual: bool,
    live: bool,
) -> None:
    """All mistakes in the files first, then the word of a person for what is set by hand, then the runs."""
    from daq.night import NightOrder, rehearse, run_night

    order = NightOrder(bench=bench, targets=targets, out=asked.out, seed=asked.seed, night=night)
    with mistakes():
        rehearse(order)
        confirmed = asked.confirm(bench, night)
    order = replace(order, operator=asked.operator or confirmed["who"], confirmed=confirmed)
    progress = _progress(live=live, as_json=asked.as_json)

    async def work(clock: Clock, stopper: Stopper) -> Outcome:
        return await run_night(order, clock, observe=progress.observe, on_run=progress.begin, stopper=stopper)

    start_utc_ns = bench.bench.time.start_utc_ns if virtual else None
    _finish(_with_signals(work, progress, start_utc_ns=start_utc_ns), asked.as_json)


def _with_signals(
    work: Callable[[Clock, Stopper], Awaitable[Outcome]], progress: Progress, *, start_utc_ns: int | None
) -> Outcome:
    """Run under real or virtual time; a signal asks for a clean stop. Known errors exit."""
    import asyncio

    from daq.carry import Stopper
    from drivers.clock import run_real, run_virtual

    stopper = Stopper()

    async def attended(clock: Clock) -> Outcome:
        with _signals(asyncio.get_running_loop(), stopper, clock):
            return await work(clock, stopper)

    try:
        return run_real(attended) if start_utc_ns is None else run_virtual(attended, start_utc_ns)
    except (SettingsError, DataError) as error:
        die(Exit.MISTAKE, error)
    except DeviceError as error:
        die(Exit.BENCH_FAULT, error)
    except GratingdError as error:
        die(Exit.BROKE_OFF, error)
    except KeyboardInterrupt:
        die(Exit.STOPPED, "stopped; unfinished journals can be recovered: gratingd recover FOLDER")
    finally:
        progress.close()


@contextlib.contextmanager
def _signals(loop: AbstractEventLoop, stopper: Stopper, clock: Clock) -> Iterator[None]:
    """SIGINT, SIGTERM and SIGHUP ask for a clean stop, each time they come.

    SIGHUP, a terminal that was closed, would otherwise end the process with the shutter open; a run started
    to survive that (nohup) ignores it and goes on. Once the work has ended they are ignored until the command
    has: whoever presses Ctrl-C once too often still gets what came out, and the exit code that belongs to it.
    """
    from daq.records import StopReason

    def stop(number: int) -> None:
        stopper.stop(StopReason.STOPPED_BY_USER, signal.Signals(number).name)

    before = {number: signal.getsignal(number) for number in (signal.SIGINT, signal.SIGTERM, signal.SIGHUP)}
    attended = [number for number, handler in before.items() if handler is not signal.SIG_IGN]
    for number in attended:
        if clock.is_virtual:  # a loop without a socket to wake it by, but it never waits
            signal.signal(number, lambda given, _: loop.call_soon_threadsafe(stop, given))
        else:
            loop.add_signal_handler(number, stop, number)
    try:
        yield
    finally:
        for number in attended:
            if not clock.is_virtual:
                loop.remove_signal_handler(number)
            signal.signal(number, signal.SIG_IGN)
            click.get_current_context().call_on_close(partial(signal.signal, number, before[number]))


def _progress(*, live: bool, as_json: bool) -> Progress:
    from daq.progress import Lines, Live, Silent

    if as_json:
        return Silent()
    if live and sys.stderr is not None and sys.stderr.isatty():
        return Live()
    return Lines(status_lines=live)


def _finish(outcome: Outcome, as_json: bool) -> None:
    """Print what came out, worst news last, and end with the code that says how it went."""
    from daq.carry import left_unsafe

    more = {"not_started": outcome.not_started, "problems": outcome.problems}
    print_runs(outcome.runs, as_json, more)
    if outcome.not_started:
        click.echo(f"gratingd: not started: {', '.join(outcome.not_started)}", err=True)
    problems = [*outcome.problems, *(run["problem"] for run in outcome.runs if "problem" in run)]
    for problem in problems:
        click.echo(f"gratingd: {problem}", err=True)
    unsafe = [run for run in outcome.runs if left_unsafe(run)]
    for run in unsafe:
        safe = run["safe"]
        click.echo(
            f"gratingd: GO AND LOOK AT THE BENCH: after '{run['target']}' the shutter is {safe['shutter']}, "
            f"the drive {safe['drive']}: {'; '.join(safe['problems'])}",
            err=True,
        )
    sys.exit(_exit_code(outcome, bool(problems), bool(unsafe)))


def _exit_code(outcome: Outcome, has_problems: bool, is_unsafe: bool) -> Exit:
    reasons = {run["stop_reason"] for run in outcome.runs}
    if has_problems or "internal-error" in reasons:
        return Exit.BROKE_OFF
    if is_unsafe or reasons & {"fault", "over-light", "not-as-stated"}:
        return Exit.BENCH_FAULT
    if "stopped-by-user" in reasons or outcome.stopped == "stopped-by-user":
        return Exit.STOPPED
    return Exit.DONE


def _new_folder(name: str) -> Path:
    number = 1
    while (folder := Path(name if number == 1 else f"{name}-{number}")).exists():
        number += 1
    return folder
